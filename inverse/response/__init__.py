"""The forward model: pure functions from arrays to basis functions, nothing about fitting."""
