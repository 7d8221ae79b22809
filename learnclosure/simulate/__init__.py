"""Built-in ensembles: a layered quasi-geostrophic channel and exactly solvable ones."""
