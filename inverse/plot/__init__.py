"""Figures: readable at column width and in grey; each function returns the figure and never shows it."""

from inverse.plot.corner_figure import corner
from inverse.plot.coverage_figure import coverage
from inverse.plot.diagnostics_figure import learned, profile, residuals
from inverse.plot.echoes_figure import echoes, shares
from inverse.plot.elastic_figure import elastic_section
from inverse.plot.fit_figure import fit
from inverse.plot.section_figure import section
from inverse.plot.splits_figure import split_differences, splits, wafer_map

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
