r"""Born stability: the strain energy of every small strain must be positive.

A crystal is stable when its stiffness is positive definite, that is, when the smallest eigenvalue of its
Mandel form is positive (Born and Huang, Dynamical Theory of Crystal Lattices, 1954; cited from memory). For
each symmetry this comes to a few inequalities between constants, which follow from Sylvester's criterion on
the blocks of the matrix.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from inverse.elastic.symmetry import constant_names, independent_part
from inverse.elastic.voigt import FloatArray, voigt_to_mandel

__all__ = ["Criterion", "born_criteria", "is_stable", "require_stable", "smallest_eigenvalue"]

_Constants = Mapping[str, FloatArray]
_Rule = tuple[str, Callable[[_Constants], FloatArray]]

# An eigenvalue of zero is rounded to either side of it.
_ROUNDING = 1e-12


@dataclass(frozen=True, eq=False)
class Criterion:
    """One of the inequalities that stability comes to.

    Attributes
    ----------
    text : str
        The inequality in the symmetry's own constants, such as "c11 - c12 > 0".
    value : ndarray, shape (...)
        Its left side, in GPa to the power of the number of factors.
    """

    text: str
    value: FloatArray

    @property
    def satisfied(self) -> np.ndarray:
        """Whether the inequality holds, element by element."""
        return np.asarray(self.value > 0.0)


_SHEAR: _Rule = ("c44 > 0", lambda c: c["c44"])
_PRISM: tuple[_Rule, ...] = (
    ("c11 - c12 > 0", lambda c: c["c11"] - c["c12"]),
    ("c11 + c12 > 0", lambda c: c["c11"] + c["c12"]),
    ("c33 (c11 + c12) - 2 c13^2 > 0", lambda c: c["c33"] * (c["c11"] + c["c12"]) - 2 * c["c13"] ** 2),
)

_RULES: dict[str, tuple[_Rule, ...]] = {
    "isotropic": (_SHEAR, ("3 c11 - 4 c44 > 0", lambda c: 3 * c["c11"] - 4 * c["c44"])),
    "cubic": (_PRISM[0], ("c11 + 2 c12 > 0", lambda c: c["c11"] + 2 * c["c12"]), _SHEAR),
    "hexagonal": (*_PRISM, _SHEAR),
    "trigonal_6": (
        *_PRISM,
        _SHEAR,
        ("c44 (c11 - c12) - 2 c14^2 > 0", lambda c: c["c44"] * (c["c11"] - c["c12"]) - 2 * c["c14"] ** 2),
    ),
    "trigonal_7": (
        *_PRISM,
        _SHEAR,
        (
            "c44 (c11 - c12) - 2 (c14^2 + c15^2) > 0",
            lambda c: c["c44"] * (c["c11"] - c["c12"]) - 2 * (c["c14"] ** 2 + c["c15"] ** 2),
        ),
    ),
    "tetragonal_6": (*_PRISM, _SHEAR, ("c66 > 0", lambda c: c["c66"])),
    "tetragonal_7": (
        *_PRISM,
        _SHEAR,
        ("c66 > 0", lambda c: c["c66"]),
        ("c66 (c11 - c12) - 2 c16^2 > 0", lambda c: c["c66"] * (c["c11"] - c["c12"]) - 2 * c["c16"] ** 2),
    ),
}

# The other symmetries come to the leading minors of these blocks.
_BLOCKS: dict[str, tuple[tuple[int, ...], ...]] = {
    "orthorhombic": ((1, 2, 3), (4,), (5,), (6,)),
    "monoclinic": ((1, 2, 3, 5), (4, 6)),
    "triclinic": ((1, 2, 3, 4, 5, 6),),
}


def smallest_eigenvalue(voigt: FloatArray) -> FloatArray:
    """Smallest eigenvalue in GPa, shape (...), of the Mandel form of a stiffness of shape (..., 6, 6)."""
    return np.asarray(np.linalg.eigvalsh(voigt_to_mandel(voigt))[..., 0], dtype=float)


def is_stable(voigt: FloatArray) -> np.ndarray:
    """Tell which stiffness tensors are positive definite.

    Parameters
    ----------
    voigt : ndarray, shape (..., 6, 6)
        Stiffness in Voigt form, GPa.

    Returns
    -------
    ndarray of bool, shape (...)
        False also where a component is not finite.
    """
    finite = np.asarray(np.isfinite(voigt).all(axis=(-2, -1)))
    eigenvalues = np.linalg.eigvalsh(
        voigt_to_mandel(np.where(finite[..., np.newaxis, np.newaxis], voigt, 0.0))
    )
    return np.asarray(finite & (eigenvalues[..., 0] > _ROUNDING * np.abs(eigenvalues).max(axis=-1)))


def born_criteria(voigt: FloatArray, symmetry: str) -> tuple[Criterion, ...]:
    """Inequalities that stability comes to in a symmetry, with the values a tensor gives them.

    Parameters
    ----------
    voigt : ndarray, shape (..., 6, 6)
        Stiffness in Voigt form, GPa, of that symmetry.
    symmetry : str
        A key of `SYMMETRIES`.

    Returns
    -------
    tuple of Criterion
        Together they are necessary and sufficient.

    Raises
    ------
    ValueError
        If the symmetry is not known.
    """
    names = constant_names(symmetry)
    if symmetry in _BLOCKS:
        return tuple(minor for block in _BLOCKS[symmetry] for minor in _leading_minors(voigt, block))
    constants = dict(zip(names, np.moveaxis(independent_part(voigt, symmetry), -1, 0), strict=True))
    return tuple(Criterion(text, rule(constants)) for text, rule in _RULES[symmetry])


def _leading_minors(voigt: FloatArray, block: tuple[int, ...]) -> list[Criterion]:
    rows = np.array(block) - 1
    matrix = voigt[..., rows[:, None], rows]
    return [
        Criterion(_minor_text(block[:size]), np.asarray(np.linalg.det(matrix[..., :size, :size])))
        for size in range(1, len(block) + 1)
    ]


def _minor_text(rows: tuple[int, ...]) -> str:
    if len(rows) == 1:
        return f"c{rows[0]}{rows[0]} > 0"
    return f"determinant of rows and columns {', '.join(map(str, rows))} > 0"


def require_stable(voigt: FloatArray, symmetry: str) -> None:
    """Raise ValueError, naming the criteria that fail, unless every tensor is stable.

    Parameters
    ----------
    voigt : ndarray, shape (..., 6, 6)
        Stiffness in Voigt form, GPa.
    symmetry : str
        A key of `SYMMETRIES`.

    Raises
    ------
    ValueError
        If a tensor is not positive definite.
    """
    unstable = ~is_stable(voigt)
    if not unstable.any():
        return
    index = tuple(int(i) for i in np.argwhere(unstable)[0])
    first = voigt[index]
    broken = [
        f"{c.text} (it is {float(c.value):.4g})" for c in born_criteria(first, symmetry) if not c.satisfied
    ]
    which = (
        f" in {unstable.sum()} of {unstable.size} tensors, first at index {index}" if unstable.ndim else ""
    )
    reason = f"broken: {'; '.join(broken)}" if broken else "it is singular to rounding"
    raise ValueError(
        f"unstable {symmetry} stiffness{which}: the smallest eigenvalue is "
        f"{float(smallest_eigenvalue(first)):.4g} GPa and "
        f"must be positive; {reason}. Check the constants, their order and their unit (GPa); where unstable "
        "tensors are meant, pass allow_unstable=True."
    )
