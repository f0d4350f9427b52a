"""Stacks, setups and priors as plain JSON data, and back."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields
from typing import Any

import numpy as np

from inverse.description.material.properties import Material
from inverse.description.material.refractive_index import IndexTable
from inverse.description.pumpprobe import PumpProbe
from inverse.description.sample.parts import Graded, Interface, Layer, Repeat, Substrate
from inverse.description.sample.stack import Stack
from inverse.description.unknowns import Unknown, describe_prior, is_distribution, rebuild_prior

__all__ = ["decode", "encode"]

_PLAIN: dict[str, type] = {c.__name__: c for c in (Material, IndexTable, PumpProbe, Interface, Graded)}
_MEDIA: dict[str, type] = {"Layer": Layer, "Substrate": Substrate}


def encode(value: Any) -> Any:
    """Turn a description into data that `json.dumps` takes.

    Parameters
    ----------
    value : Stack, Layer, Substrate, Interface, Graded, Repeat, Material, PumpProbe, Unknown, distribution,
        number, text, mapping or sequence of such.

    Raises
    ------
    ValueError
        If something in it has no written form.
    """
    if value is None or isinstance(value, bool | int | str):
        return value
    if isinstance(value, np.bool_):
        return bool(value)
    if isinstance(value, float | np.floating | np.integer):
        number = float(value)
        return number if np.isfinite(number) else {"float": str(number)}
    if isinstance(value, complex | np.complexfloating):
        return {"complex": [value.real, value.imag]}
    if isinstance(value, Unknown):
        return {"unknown": value.name, "prior": describe_prior(value.prior)}
    if is_distribution(value):
        return {"prior": describe_prior(value)}
    if isinstance(value, Mapping):
        return {"mapping": [[encode(k), encode(v)] for k, v in value.items()]}
    if isinstance(value, tuple | list | np.ndarray):
        return {"list": [encode(v) for v in value]}
    return {"class": type(value).__name__, "fields": _encode_fields(value)}


def _encode_fields(value: Any) -> dict[str, Any]:
    if isinstance(value, Stack):
        return {
            "parts": encode(value.parts),
            "ambient": encode(value.ambient),
            "surface_roughness": encode(value.surface_roughness),
        }
    if isinstance(value, Repeat):
        return {"count": value.count, "parts": encode(value.parts)}
    if type(value).__name__ in (*_PLAIN, *_MEDIA):
        return {f.name: encode(getattr(value, f.name)) for f in fields(value)}
    raise ValueError(
        f"{value!r} cannot be written to a file; describe it with numbers, priors and materials."
    )


def decode(data: Any, shared: dict[str, Unknown] | None = None) -> Any:
    """Rebuild what `encode` wrote; unknowns of the same name become one object again.

    Raises
    ------
    ValueError
        If the data name a class that this version does not know.
    """
    shared = {} if shared is None else shared
    if not isinstance(data, dict):
        return data
    if "float" in data:
        return float(data["float"])
    if "complex" in data:
        return complex(*data["complex"])
    if "unknown" in data:
        return shared.setdefault(data["unknown"], Unknown(data["unknown"], rebuild_prior(data["prior"])))
    if "prior" in data:
        return rebuild_prior(data["prior"])
    if "mapping" in data:
        return {decode(k, shared): decode(v, shared) for k, v in data["mapping"]}
    if "list" in data:
        return tuple(decode(v, shared) for v in data["list"])
    return _rebuild(data["class"], {k: decode(v, shared) for k, v in data["fields"].items()})


def _rebuild(name: str, parts: dict[str, Any]) -> Any:
    if name == "Stack":
        above = "air" if parts["ambient"] is None else parts["ambient"]
        return Stack(*parts["parts"], ambient=above, surface_roughness=parts.get("surface_roughness", 0.0))
    if name == "Repeat":
        return Repeat(parts["count"], *parts["parts"])
    if name in _MEDIA:
        ratio = parts.pop("density_ratio")
        extra = {} if ratio is None else {"density_ratio": ratio}
        return _MEDIA[name](parts.pop("material"), **parts, **extra)
    if name in _PLAIN:
        return _PLAIN[name](**parts)
    raise ValueError(f"The file holds a '{name}', which this version of inverse does not know; update it.")
