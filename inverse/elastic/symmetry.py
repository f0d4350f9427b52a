"""Which elastic constants each symmetry leaves independent, and how the others follow from them.

Axes follow the usual crystal-physics setting: z along c (the principal axis), x along a for hexagonal and
trigonal crystals, y along the twofold axis of monoclinic ones. "trigonal_6" is for the classes 32, 3m and -3m
(quartz, sapphire), "trigonal_7" for 3 and -3; "tetragonal_6" for 4mm, -42m, 422 and 4/mmm, "tetragonal_7" for
4, -4 and 4/m. Turning x and y by 180 degrees about c changes the sign of c14 and c15: a table of constants is
only as good as its statement of axes.
"""

from __future__ import annotations

from collections.abc import Mapping
from functools import cache

import numpy as np
from numpy.typing import ArrayLike

from inverse.elastic.voigt import FloatArray

__all__ = [
    "SYMMETRIES",
    "basis",
    "constant_names",
    "implied_formula",
    "independent_part",
    "linear_combination",
    "voigt_from_constants",
]

_Terms = dict[str, dict[str, float]]

_AXIAL: _Terms = {
    "c11": {"c11": 1.0, "c22": 1.0},
    "c12": {"c12": 1.0},
    "c13": {"c13": 1.0, "c23": 1.0},
    "c33": {"c33": 1.0},
    "c44": {"c44": 1.0, "c55": 1.0},
}
_HEXAGONAL: _Terms = {
    **_AXIAL,
    "c11": {"c11": 1.0, "c22": 1.0, "c66": 0.5},
    "c12": {"c12": 1.0, "c66": -0.5},
}
_C14: _Terms = {"c14": {"c14": 1.0, "c24": -1.0, "c56": 1.0}}
_C15: _Terms = {"c15": {"c15": 1.0, "c25": -1.0, "c46": -1.0}}
_TETRAGONAL: _Terms = {**_AXIAL, "c66": {"c66": 1.0}}


def _free(names: str) -> _Terms:
    return {f"c{pair}": {f"c{pair}": 1.0} for pair in names.split()}


def _ordered(terms: _Terms) -> _Terms:
    return dict(sorted(terms.items()))


SYMMETRIES: dict[str, _Terms] = {
    "isotropic": {
        "c11": {"c11": 1.0, "c22": 1.0, "c33": 1.0, "c12": 1.0, "c13": 1.0, "c23": 1.0},
        "c44": {"c44": 1.0, "c55": 1.0, "c66": 1.0, "c12": -2.0, "c13": -2.0, "c23": -2.0},
    },
    "cubic": {
        "c11": {"c11": 1.0, "c22": 1.0, "c33": 1.0},
        "c12": {"c12": 1.0, "c13": 1.0, "c23": 1.0},
        "c44": {"c44": 1.0, "c55": 1.0, "c66": 1.0},
    },
    "hexagonal": _ordered(_HEXAGONAL),
    "trigonal_6": _ordered({**_HEXAGONAL, **_C14}),
    "trigonal_7": _ordered({**_HEXAGONAL, **_C14, **_C15}),
    "tetragonal_6": _ordered(_TETRAGONAL),
    "tetragonal_7": _ordered({**_TETRAGONAL, "c16": {"c16": 1.0, "c26": -1.0}}),
    "orthorhombic": _free("11 12 13 22 23 33 44 55 66"),
    "monoclinic": _free("11 12 13 15 22 23 25 33 35 44 46 55 66"),
    "triclinic": _free(" ".join(f"{i}{j}" for i in range(1, 7) for j in range(i, 7))),
}
"""Symmetry -> independent constant -> the constants it enters, with their coefficients."""


def _terms(symmetry: str) -> _Terms:
    if symmetry not in SYMMETRIES:
        raise ValueError(
            f"symmetry {symmetry!r} is not known; expected one of {', '.join(SYMMETRIES)}. "
            "For another setting of the axes give the whole matrix as 'triclinic'."
        )
    return SYMMETRIES[symmetry]


def constant_names(symmetry: str) -> tuple[str, ...]:
    """Names of the independent constants of a symmetry, in the order vectors of constants use.

    Parameters
    ----------
    symmetry : str
        A key of `SYMMETRIES`.

    Returns
    -------
    tuple of str
        ("c11", "c12", "c44") for "cubic", and so on.

    Raises
    ------
    ValueError
        If the symmetry is not known; the message lists those that are.

    Examples
    --------
    >>> constant_names("trigonal_6")
    ('c11', 'c12', 'c13', 'c14', 'c33', 'c44')
    """
    return tuple(_terms(symmetry))


def _indices(name: str) -> tuple[int, int]:
    return int(name[1]) - 1, int(name[2]) - 1


@cache
def _basis(symmetry: str) -> FloatArray:
    matrices = np.zeros((len(_terms(symmetry)), 6, 6))
    for matrix, entries in zip(matrices, _terms(symmetry).values(), strict=True):
        for name, coefficient in entries.items():
            i, j = _indices(name)
            matrix[i, j] = matrix[j, i] = coefficient
    matrices.setflags(write=False)
    return matrices


def basis(symmetry: str) -> FloatArray:
    """Voigt matrices B_m, shape (n, 6, 6), with C = sum over m of c_m B_m for the independent constants c_m.

    Parameters
    ----------
    symmetry : str
        A key of `SYMMETRIES`.

    Returns
    -------
    ndarray, shape (n, 6, 6)
        Read-only, dimensionless; also the derivative of the Voigt matrix by each independent constant.
    """
    return _basis(symmetry)


def independent_part(voigt: FloatArray, symmetry: str) -> FloatArray:
    """Independent constants, shape (..., n) in GPa, read off a Voigt matrix of shape (..., 6, 6)."""
    rows, columns = zip(*(_indices(name) for name in constant_names(symmetry)), strict=True)
    return np.asarray(voigt[..., list(rows), list(columns)], dtype=float)


def voigt_from_constants(
    symmetry: str, constants: Mapping[str, ArrayLike], tolerance: float = 1e-6
) -> FloatArray:
    """Voigt matrix from constants by name.

    Parameters
    ----------
    symmetry : str
        A key of `SYMMETRIES`.
    constants : mapping of str to array_like
        Every independent constant in GPa, of shapes that broadcast. Dependent ones (c66 of a hexagonal
        crystal) may be given too and are then held against the value the others imply.
    tolerance : float
        Largest difference allowed there, as a fraction of the largest constant.

    Returns
    -------
    ndarray, shape (..., 6, 6)
        GPa, built from the independent constants alone.

    Raises
    ------
    ValueError
        If a constant is missing or is no constant at all, or a dependent one contradicts the others.
    """
    names = constant_names(symmetry)
    _require_names(symmetry, names, constants)
    vector = np.stack(np.broadcast_arrays(*(np.asarray(constants[n], dtype=float) for n in names)), axis=-1)
    voigt = np.einsum("...n,nij->...ij", vector, basis(symmetry))
    for name in constants:
        if name not in names:
            _require_implied(symmetry, name, np.asarray(constants[name], dtype=float), voigt, tolerance)
    return voigt


def _require_names(symmetry: str, names: tuple[str, ...], constants: Mapping[str, ArrayLike]) -> None:
    missing = [name for name in names if name not in constants]
    unknown = [name for name in constants if name not in SYMMETRIES["triclinic"]]
    if missing or unknown:
        wrong = [f"missing {', '.join(missing)}"] * bool(missing)
        wrong += [f"not a constant: {', '.join(unknown)}"] * bool(unknown)
        raise ValueError(
            f"{symmetry} stiffness was given {len(constants)} constants ({', '.join(constants) or 'none'}): "
            f"{'; '.join(wrong)}. Expected the {len(names)} constants {', '.join(names)}."
        )


def _require_implied(
    symmetry: str, name: str, given: FloatArray, voigt: FloatArray, tolerance: float
) -> None:
    i, j = _indices(name)
    implied = voigt[..., i, j]
    excess = np.abs(given - implied) - tolerance * np.abs(voigt).max(axis=(-2, -1))
    if np.all(excess <= 0.0):
        return
    worst = np.unravel_index(np.argmax(excess), excess.shape)
    value, expected = (np.broadcast_to(array, excess.shape)[worst] for array in (given, implied))
    formula = implied_formula(symmetry, name)
    raise ValueError(
        f"{name} = {value:.6g} GPa contradicts the other constants of a {symmetry} crystal: "
        f"{name} = {formula + ' = ' if formula else ''}{expected:.6g} GPa there. "
        f"Leave {name} out, or choose a lower symmetry."
    )


def implied_formula(symmetry: str, name: str) -> str:
    """Write how a dependent constant follows from the independent ones: '0.5 c11 - 0.5 c12', '' if zero."""
    terms = [(entries[name], constant) for constant, entries in _terms(symmetry).items() if name in entries]
    return linear_combination(terms)


def linear_combination(terms: list[tuple[float, str]]) -> str:
    """Write a sum such as 'c11 + 2 c12 - 0.5 c44' from coefficients and names."""
    text = ""
    for coefficient, name in terms:
        sign = (" - " if coefficient < 0 else " + ") if text else ("-" if coefficient < 0 else "")
        size = "" if abs(abs(coefficient) - 1.0) < 5e-5 else f"{abs(coefficient):.4g} "
        text += f"{sign}{size}{name}"
    return text
