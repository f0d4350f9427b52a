"""The stack: layers, interfaces, and the places of its unknowns."""
