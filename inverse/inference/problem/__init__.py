"""The density that is sought: unknowns, noise, elimination, likelihood."""
