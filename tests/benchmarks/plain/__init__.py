"""The example's problem written out plainly: one film on a half-space, one parameter set a call, nothing shared.

What one writes who knows the equations and NumPy and has an afternoon. `film` is the forward model, `density` the
posterior with all amplitudes sampled, or eliminated. Nothing is imported from the library; `tests/benchmarks/ways.py`
hands over the constants and the data.
"""
