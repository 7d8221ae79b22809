"""Reading ensembles: files, roles, grids, units and readiness."""
