"""Properties of materials and where each value comes from."""
