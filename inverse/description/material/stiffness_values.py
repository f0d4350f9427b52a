"""Elastic constants of a material at the door."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from inverse.description.unknowns import checked, is_unknown
from inverse.elastic import StiffnessTensor, constant_names

__all__ = ["checked_stiffness"]


def checked_stiffness(given: Any, where: str) -> dict[str, Any] | None:
    """Check the elastic constants of a material.

    Parameters
    ----------
    given : mapping or None
        ``symmetry``, a key of `inverse.elastic.SYMMETRIES`, and every independent constant: a number, a frozen
        distribution or an `Unknown`, GPa. Dependent constants may stand beside numbers and are held against them.
    where : str
        Place, for the message.

    Returns
    -------
    dict or None
        Symmetry and independent constants.

    Raises
    ------
    ValueError
        If a constant is missing, strange, out of range or contradictory, or the numbers are unstable.
    """
    if given is None:
        return None
    if not isinstance(given, Mapping) or "symmetry" not in given:
        raise ValueError(
            f"{where}.stiffness = {given!r}; give the symmetry and its constants in GPa, such as "
            "{'symmetry': 'cubic', 'c11': 165.8, 'c12': 63.9, 'c44': 79.6}."
        )
    constants = {name: checked(name, v, where) for name, v in given.items() if name != "symmetry"}
    names = constant_names(given["symmetry"])
    if not any(is_unknown(value) for value in constants.values()):
        StiffnessTensor.from_constants(given["symmetry"], constants)
    elif set(constants) != set(names):
        raise ValueError(
            f"{where}.stiffness holds {', '.join(constants)}; where a constant is unknown give exactly the "
            f"independent ones of a {given['symmetry']} crystal: {', '.join(names)}."
        )
    return {"symmetry": given["symmetry"], **{name: constants[name] for name in names}}
