"""Elastic constants from velocities measured along several directions."""
