"""A stack and its measurement from a TOML file."""

from __future__ import annotations

import ast
import os
import re
import tomllib
from dataclasses import fields
from typing import Any

from inverse.description.arguments import checked_path, nearest, refuse_unknown_names
from inverse.description.pumpprobe import INSTRUMENT, PumpProbe
from inverse.description.sample.overrides import MATERIAL_FIELDS
from inverse.description.sample.parts import (
    Graded,
    Interface,
    Layer,
    Part,
    Repeat,
    Substrate,
)
from inverse.description.sample.stack import Stack
from inverse.description.unknowns import Unknown, is_distribution

__all__ = ["read_stack"]

_USUAL = ("norm", "uniform", "loguniform", "lognorm", "halfcauchy", "halfnorm", "truncnorm", "gamma", "t")

_CALL = re.compile(r"^\s*([a-z_]+)\s*\((.*)\)\s*$")


def read_stack(path: str | os.PathLike[str]) -> tuple[Stack, PumpProbe]:
    """Read a stack and a setup.

    Parameters
    ----------
    path : path
        A TOML file with a table ``[setup]`` (fields of `PumpProbe`), an optional ``ambient`` and
        ``surface_roughness``, and one ``[[part]]`` per part, top to bottom, holding ``layer``, ``interface`` (any
        value), ``substrate``, ``graded`` (the two materials) or ``repeat`` (a number, with the parts of a period as
        ``[[part.part]]``). A prior is written as text, ``velocity = "norm(6.42, 0.10)"``, by the name of a
        scipy.stats family; the same shared unknown in several places as ``"v_film: norm(6.42, 0.10)"``; elastic
        constants as ``stiffness = {symmetry = "cubic", c11 = "norm(107, 5)", c12 = 60.4, c44 = 28.3}``.

    Returns
    -------
    stack : Stack
    setup : PumpProbe

    Raises
    ------
    ValueError
        If the file does not exist, is not TOML, or holds a name, a field or a prior that makes no sense; the message
        tells the part and the nearest name there is.
    """
    source = checked_path(path)
    if not source.is_file():
        raise ValueError(f"There is no stack file '{source}'.")
    try:
        content = tomllib.loads(source.read_text(encoding="utf-8"))
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise ValueError(f"'{source.name}' is not a TOML file: {error}") from None
    refuse_unknown_names(f"'{source.name}'", content, ("setup", "part", "ambient", "surface_roughness"))
    for key in ("setup", "part"):
        if key not in content:
            raise ValueError(
                f"'{source.name}' has no [{key}] table; it needs [setup] and one [[part]] per part."
            )
    for key, kind in (("setup", dict), ("part", list)):
        if not isinstance(content[key], kind):
            raise ValueError(
                f"'{source.name}' must hold [setup] once and [[part]], in double brackets, per part."
            )
    shared: dict[str, Unknown] = {}
    parts = [_part(dict(entry), str(number), shared) for number, entry in enumerate(content["part"], 1)]
    rough = _value("surface_roughness", content.get("surface_roughness", 0.0), shared)
    stack = Stack(*parts, ambient=content.get("ambient", "air"), surface_roughness=rough)
    return stack, _setup(content["setup"], shared)


def _setup(entry: dict[str, Any], shared: dict[str, Unknown]) -> PumpProbe:
    known = [f.name for f in fields(PumpProbe)]
    refuse_unknown_names("[setup]", entry, known)
    _refuse_gaps("[setup]", entry, ("pump", "probe", "pulse_rms"))
    return PumpProbe(**{k: _value(k, v, shared) if k in INSTRUMENT else v for k, v in entry.items()})


_KINDS = ("layer", "interface", "substrate", "graded", "repeat")

_FIELDS = {
    "layer": ("thickness", "thickness_spread", "density_ratio", *MATERIAL_FIELDS),
    "substrate": MATERIAL_FIELDS,
    "interface": tuple(f.name for f in fields(Interface)),
    "graded": ("thickness", "slices", "name"),
    "repeat": (),
}

_NEEDED = {"layer": ("thickness",), "interface": ("boundary_conductance",), "graded": ("thickness",)}


def _part(entry: dict[str, Any], number: str, shared: dict[str, Unknown]) -> Part:
    kinds = [kind for kind in _KINDS if kind in entry]
    if len(kinds) != 1:
        has = ", ".join(kinds) or f"none of them, but {', '.join(entry) or 'nothing'}"
        hints = "" if kinds else "".join(nearest(key, _KINDS) for key in entry)
        raise ValueError(
            f"[[part]] {number} must hold exactly one of {', '.join(_KINDS)}; it has {has}.{hints}"
        )
    (kind,) = kinds
    where = f"[[part]] {number} ({kind})"
    name = entry.pop(kind)
    inner = [_part(dict(e), f"{number}.{i}", shared) for i, e in enumerate(entry.pop("part", []), 1)]
    refuse_unknown_names(where, entry, _FIELDS[kind])
    _refuse_gaps(where, entry, _NEEDED.get(kind, ()))
    try:
        return _made(kind, name, inner, {key: _value(key, value, shared) for key, value in entry.items()})
    except (TypeError, ValueError) as error:
        raise ValueError(f"{where}: {error}") from None


def _refuse_gaps(where: str, entry: dict[str, Any], needed: tuple[str, ...]) -> None:
    missing = [name for name in needed if name not in entry]
    if missing:
        raise ValueError(
            f"{where} lacks {', '.join(missing)}; give it, as a number or, where sought, a prior."
        )


def _made(kind: str, name: Any, inner: list[Part], fields: dict[str, Any]) -> Part:
    if kind == "interface":
        return Interface(**fields)
    if kind == "repeat":
        return Repeat(name, *inner, **fields)
    if kind == "graded":
        return Graded(*name, **fields)
    return Layer(name, **fields) if kind == "layer" else Substrate(name, **fields)


def _value(key: str, value: Any, shared: dict[str, Unknown]) -> Any:
    if isinstance(value, dict):
        return {name: _value(name, inner, shared) for name, inner in value.items()}
    if key in ("orientation", "name", "symmetry") or not isinstance(value, str):
        return value
    name, _, text = value.rpartition(":")
    prior = _prior(key, text)
    return shared.setdefault(name.strip(), Unknown(name.strip(), prior)) if name else prior


def _prior(key: str, text: str) -> Any:
    from scipy import stats

    match = _CALL.match(text)
    family = getattr(stats, match.group(1), None) if match else None
    if match is None or family is None:
        hint = nearest(match.group(1), _USUAL) if match else ""
        raise ValueError(
            f'{key} = "{text}" is no prior; write a scipy.stats family, such as "norm(6.42, 0.10)".{hint}'
        )
    try:
        call = ast.parse(f"f({match.group(2)})", mode="eval").body
        assert isinstance(call, ast.Call)
        arguments = [ast.literal_eval(a) for a in call.args]
        prior = family(*arguments, **{k.arg: ast.literal_eval(k.value) for k in call.keywords if k.arg})
    except (SyntaxError, ValueError, TypeError, AssertionError) as error:
        raise ValueError(f'{key} = "{text}" does not make a distribution: {error}') from None
    if not is_distribution(prior):
        raise ValueError(f'{key} = "{text}" is not a continuous distribution.')
    return prior
