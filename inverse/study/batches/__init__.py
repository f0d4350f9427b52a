"""Many traces through one description."""
