"""Studies on top of the inference: elastic constants from velocities."""
