"""Inference: from a log density to draws of the posterior, and what they are worth."""
