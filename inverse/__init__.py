"""Picosecond-ultrasonics traces to thickness, velocity, density and bonding, with intervals that hold up.

The public names load on first use, so that importing the package costs little.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_HOMES = {
    "Material": "description.materials",
    "material": "description.materials",
    "film_prior": "description.materials",
    "read_index": "description.refractive_index",
    "Layer": "description.stack",
    "Substrate": "description.stack",
    "Interface": "description.stack",
    "Repeat": "description.stack",
    "Graded": "description.stack",
    "stressed": "description.profiles",
    "Stack": "description.stack",
    "PumpProbe": "description.pumpprobe",
    "Unknown": "description.unknowns",
    "read_trace": "description.traces",
    "make_trace": "description.traces",
    "first_look": "description.look",
    "simulate": "response.simulate",
    "strain_map": "response.strain_map",
    "heating": "study.heating",
    "Inversion": "inference.inversion",
    "ConstantsInversion": "study.constants",
    "Velocity": "study.measurements",
    "BrillouinShift": "study.measurements",
    "EchoTime": "study.measurements",
    "what_data_added": "inference.diagnostics",
    "check_model": "inference.model_checks",
    "profile": "inference.profile",
    "basins": "inference.basins",
    "compare": "inference.comparison",
    "savage_dickey": "inference.nested_ratio",
    "budget": "inference.budget",
    "check_coverage": "study.coverage",
    "check_known": "study.coverage",
    "Recipe": "study.recipe",
    "batch": "study.batch",
    "compare_splits": "study.splits",
    "SplitPriors": "study.scatter",
    "reference_wafer": "study.gauge",
    "comparison_power": "study.power",
    "splits_table": "report_splits",
    "save": "inference.result",
    "load": "inference.result",
    "table": "report",
    "constants_table": "report",
    "budget_table": "report",
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
