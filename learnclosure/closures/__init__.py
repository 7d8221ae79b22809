"""Regressors under physical constraints, and the classical closures they are held to."""
