"""Ensembles that run until their draws suffice, and go on after an interruption."""
