"""Figures: readable at column width and in grey; each function returns the figure and never shows it."""

from inverse.plot_corner import corner
from inverse.plot_coverage import coverage
from inverse.plot_diagnostics import learned, profile, residuals
from inverse.plot_echoes import echoes, shares
from inverse.plot_elastic import elastic_section
from inverse.plot_fit import fit
from inverse.plot_section import section
from inverse.plot_splits import split_differences, splits, wafer_map

__all__ = [
    "corner",
    "coverage",
    "echoes",
    "elastic_section",
    "fit",
    "learned",
    "profile",
    "residuals",
    "section",
    "shares",
    "split_differences",
    "splits",
    "wafer_map",
]
