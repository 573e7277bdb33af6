"""Mathematics of fields on a uniform grid, shared by all methods."""
