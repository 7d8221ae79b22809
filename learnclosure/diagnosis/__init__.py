"""From members to eddy fluxes, transport tensors and their sampling error."""
