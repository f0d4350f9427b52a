"""Picosecond-ultrasonics traces to thickness, velocity, density and bonding, with intervals that hold up.

The public names load on first use, so that importing the package costs little.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_HOMES = {
    "Material": "description.material.properties",
    "material": "description.material.properties",
    "film_prior": "description.material.film",
    "read_index": "description.material.refractive_index",
    "Layer": "description.sample.stack",
    "Substrate": "description.sample.stack",
    "Interface": "description.sample.stack",
    "Repeat": "description.sample.stack",
    "Graded": "description.sample.stack",
    "stressed": "description.sample.profiles",
    "Stack": "description.sample.stack",
    "PumpProbe": "description.pumpprobe",
    "Unknown": "description.unknowns",
    "read_trace": "description.trace.reading",
    "make_trace": "description.trace.reading",
    "first_look": "description.trace.look",
    "simulate": "response.simulate",
    "strain_map": "response.strain_map",
    "heating": "study.heating",
    "Inversion": "inference.inversion",
    "ConstantsInversion": "study.stiffness.constants",
    "Velocity": "study.stiffness.measurements",
    "BrillouinShift": "study.stiffness.measurements",
    "EchoTime": "study.stiffness.measurements",
    "what_data_added": "inference.checks.diagnostics",
    "check_model": "inference.checks.model_checks",
    "profile": "inference.minima.profile",
    "basins": "inference.checks.basins",
    "compare": "inference.checks.comparison",
    "savage_dickey": "inference.checks.nested_ratio",
    "budget": "inference.checks.budget",
    "check_coverage": "study.coverage.check",
    "check_known": "study.coverage.check",
    "Recipe": "study.batches.recipe",
    "batch": "study.batches.batch",
    "compare_splits": "study.splits.compare",
    "SplitPriors": "study.splits.scatter",
    "reference_wafer": "study.splits.gauge",
    "comparison_power": "study.splits.power",
    "splits_table": "report.splits",
    "save": "inference.result_file",
    "load": "inference.result_file",
    "table": "report.tables",
    "constants_table": "report.tables",
    "budget_table": "report.tables",
    "plot": "plot",
    "elastic": "elastic",
}
_MODULES = ("plot", "elastic")

__all__ = ["__version__", *_HOMES]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(
            f"module 'inverse' has no attribute {name!r}; it has {', '.join(sorted(_HOMES))}."
        )
    home = import_module(f"inverse.{_HOMES[name]}")
    found = home if name in _MODULES else getattr(home, name)
    globals()[name] = found
    return found


def __dir__() -> list[str]:
    return sorted(__all__)
