"""Stiffness tensors of any symmetry, single or in batches."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import InitVar, dataclass

import numpy as np
from numpy.typing import ArrayLike

from inverse.elastic.directions import crystal_direction, require_rotation, rotation_to_z
from inverse.elastic.stability import Criterion, born_criteria, is_stable, require_stable
from inverse.elastic.symmetry import (
    basis,
    constant_names,
    implied_formula,
    independent_part,
    voigt_from_constants,
)
from inverse.elastic.voigt import (
    FloatArray,
    mandel_rotation,
    mandel_to_full,
    mandel_to_voigt,
    voigt_to_mandel,
)

__all__ = ["StiffnessTensor"]

# What rounding in a file or a rotation may leave, as a fraction of the largest constant.
_ROUNDING = 1e-6


@dataclass(frozen=True, eq=False)
class StiffnessTensor:
    """Elastic stiffness of a crystal along its own axes, or of many at once.

    Parameters
    ----------
    voigt : array_like, shape (..., 6, 6)
        Voigt matrix in GPa, order 11, 22, 33, 23, 13, 12. Leading axes are a batch.
    symmetry : str
        A key of `SYMMETRIES`; its relations between constants are checked. "triclinic" asks for none.
    allow_unstable : bool
        Accept tensors that are not positive definite, for a sampler that looks at `is_stable` itself.

    Raises
    ------
    ValueError
        If the shape is wrong, a constant is not finite, the matrix is not symmetric, it contradicts the
        symmetry, or a tensor is unstable.

    Examples
    --------
    >>> silicon = StiffnessTensor.cubic(c11=165.78, c12=63.94, c44=79.62)
    >>> round(float(silicon.oriented("111").voigt[2, 2]), 3)  # c33 of a (111) wafer, GPa
    204.047
    """

    voigt: FloatArray
    symmetry: str = "triclinic"
    allow_unstable: InitVar[bool] = False

    def __post_init__(self, allow_unstable: bool) -> None:
        matrix = _symmetric(np.array(self.voigt, dtype=float))
        _require_symmetry(matrix, self.symmetry)
        if not allow_unstable:
            require_stable(matrix, self.symmetry)
        matrix.setflags(write=False)
        object.__setattr__(self, "voigt", matrix)

    @classmethod
    def from_voigt(
        cls, voigt: ArrayLike, symmetry: str = "triclinic", *, allow_unstable: bool = False
    ) -> StiffnessTensor:
        """Stiffness from its Voigt matrix, shape (..., 6, 6) in GPa; see the class."""
        return cls(np.asarray(voigt, dtype=float), symmetry, allow_unstable)

    @classmethod
    def from_mandel(
        cls, mandel: ArrayLike, symmetry: str = "triclinic", *, allow_unstable: bool = False
    ) -> StiffnessTensor:
        """Stiffness from its Mandel matrix, shape (..., 6, 6) in GPa; see the class."""
        matrix = np.asarray(mandel, dtype=float)
        _require_shape(matrix)
        return cls(mandel_to_voigt(matrix), symmetry, allow_unstable)

    @classmethod
    def from_constants(
        cls,
        symmetry: str,
        constants: Mapping[str, ArrayLike],
        *,
        tolerance: float = _ROUNDING,
        allow_unstable: bool = False,
    ) -> StiffnessTensor:
        """Stiffness from constants by name.

        Parameters
        ----------
        symmetry : str
            A key of `SYMMETRIES`.
        constants : mapping of str to array_like
            "c11" and so on in GPa, shapes that broadcast. All independent ones; dependent ones are checked.
        tolerance : float
            Largest contradiction allowed of a dependent constant, as a fraction of the largest constant; the
            independent constants are what is used.
        allow_unstable : bool
            See the class.

        Returns
        -------
        StiffnessTensor

        Raises
        ------
        ValueError
            If a constant is missing, unknown or contradictory, or a tensor is unstable.
        """
        return cls(voigt_from_constants(symmetry, constants, tolerance), symmetry, allow_unstable)

    @classmethod
    def from_vector(
        cls, symmetry: str, vector: ArrayLike, *, allow_unstable: bool = False
    ) -> StiffnessTensor:
        """Stiffness from the independent constants in the order of `constant_names(symmetry)`.

        Parameters
        ----------
        symmetry : str
            A key of `SYMMETRIES`.
        vector : array_like, shape (..., n)
            GPa.
        allow_unstable : bool
            See the class.

        Returns
        -------
        StiffnessTensor

        Raises
        ------
        ValueError
            If there are not n constants; the message names those expected.
        """
        values = np.asarray(vector, dtype=float)
        names = constant_names(symmetry)
        if values.ndim == 0 or values.shape[-1] != len(names):
            given = values.shape[-1] if values.ndim else 1
            raise ValueError(
                f"{symmetry} stiffness was given {given} constants; expected {len(names)}, in this order: "
                f"{', '.join(names)}."
            )
        return cls(np.einsum("...n,nij->...ij", values, basis(symmetry)), symmetry, allow_unstable)

    @classmethod
    def isotropic(cls, *, c11: ArrayLike, c44: ArrayLike) -> StiffnessTensor:
        """Isotropic stiffness in GPa; c12 = c11 - 2 c44."""
        return cls.from_constants("isotropic", {"c11": c11, "c44": c44})

    @classmethod
    def cubic(cls, *, c11: ArrayLike, c12: ArrayLike, c44: ArrayLike) -> StiffnessTensor:
        """Cubic stiffness in GPa."""
        return cls.from_constants("cubic", {"c11": c11, "c12": c12, "c44": c44})

    @classmethod
    def hexagonal(
        cls,
        *,
        c11: ArrayLike,
        c12: ArrayLike,
        c13: ArrayLike,
        c33: ArrayLike,
        c44: ArrayLike,
        c66: ArrayLike | None = None,
    ) -> StiffnessTensor:
        """Hexagonal stiffness in GPa; a c66 that is not (c11 - c12) / 2 raises ValueError."""
        given = {"c11": c11, "c12": c12, "c13": c13, "c33": c33, "c44": c44}
        return cls.from_constants("hexagonal", given if c66 is None else {**given, "c66": c66})

    @classmethod
    def trigonal(
        cls,
        *,
        c11: ArrayLike,
        c12: ArrayLike,
        c13: ArrayLike,
        c14: ArrayLike,
        c33: ArrayLike,
        c44: ArrayLike,
        c15: ArrayLike | None = None,
    ) -> StiffnessTensor:
        """Trigonal stiffness in GPa: 6 constants for classes 32, 3m, -3m; with c15, 7 for classes 3 and -3.

        c24 = -c14, c56 = c14, c25 = c46 = -c15, c66 = (c11 - c12) / 2. The sign of c14 and c15 depends on the
        choice of x.
        """
        given = {"c11": c11, "c12": c12, "c13": c13, "c14": c14, "c33": c33, "c44": c44}
        if c15 is None:
            return cls.from_constants("trigonal_6", given)
        return cls.from_constants("trigonal_7", {**given, "c15": c15})

    @classmethod
    def tetragonal(
        cls,
        *,
        c11: ArrayLike,
        c12: ArrayLike,
        c13: ArrayLike,
        c33: ArrayLike,
        c44: ArrayLike,
        c66: ArrayLike,
        c16: ArrayLike | None = None,
    ) -> StiffnessTensor:
        """Tetragonal stiffness in GPa: 6 constants for 4mm, -42m, 422, 4/mmm; with c16, 7 for 4, -4, 4/m."""
        given = {"c11": c11, "c12": c12, "c13": c13, "c33": c33, "c44": c44, "c66": c66}
        if c16 is None:
            return cls.from_constants("tetragonal_6", given)
        return cls.from_constants("tetragonal_7", {**given, "c16": c16})

    @classmethod
    def orthorhombic(
        cls,
        *,
        c11: ArrayLike,
        c12: ArrayLike,
        c13: ArrayLike,
        c22: ArrayLike,
        c23: ArrayLike,
        c33: ArrayLike,
        c44: ArrayLike,
        c55: ArrayLike,
        c66: ArrayLike,
    ) -> StiffnessTensor:
        """Orthorhombic stiffness in GPa."""
        values = (c11, c12, c13, c22, c23, c33, c44, c55, c66)
        return cls.from_constants(
            "orthorhombic", dict(zip(constant_names("orthorhombic"), values, strict=True))
        )

    @classmethod
    def monoclinic(cls, constants: Mapping[str, ArrayLike]) -> StiffnessTensor:
        """Monoclinic stiffness from its 13 constants by name in GPa, twofold axis along y."""
        return cls.from_constants("monoclinic", constants)

    @classmethod
    def triclinic(cls, constants: Mapping[str, ArrayLike]) -> StiffnessTensor:
        """Triclinic stiffness from its 21 constants by name in GPa."""
        return cls.from_constants("triclinic", constants)

    @property
    def batch_shape(self) -> tuple[int, ...]:
        """Shape of the batch; () for a single tensor."""
        return self.voigt.shape[:-2]

    @property
    def mandel(self) -> FloatArray:
        """Mandel form, shape (..., 6, 6), GPa."""
        return voigt_to_mandel(self.voigt)

    @property
    def components(self) -> FloatArray:
        """Components c_ijkl, shape (..., 3, 3, 3, 3), GPa."""
        return mandel_to_full(self.mandel)

    @property
    def compliance(self) -> FloatArray:
        """Compliance in Voigt form (engineering shear strains), shape (..., 6, 6), 1/GPa."""
        return np.asarray(np.linalg.inv(self.voigt), dtype=float)

    @property
    def constant_names(self) -> tuple[str, ...]:
        """Names of the independent constants of the symmetry."""
        return constant_names(self.symmetry)

    @property
    def vector(self) -> FloatArray:
        """Independent constants in the order of `constant_names`, shape (..., n), GPa."""
        return independent_part(self.voigt, self.symmetry)

    @property
    def constants(self) -> dict[str, FloatArray]:
        """Independent constants by name, each of the batch's shape, GPa."""
        return dict(zip(self.constant_names, np.moveaxis(self.vector, -1, 0), strict=True))

    @property
    def is_stable(self) -> np.ndarray:
        """Whether each tensor is positive definite, bool of the batch's shape."""
        return is_stable(self.voigt)

    @property
    def born_criteria(self) -> tuple[Criterion, ...]:
        """Inequalities of Born stability in this symmetry, with their values."""
        return born_criteria(self.voigt, self.symmetry)

    def rotated(self, rotation: ArrayLike) -> StiffnessTensor:
        """Return the same stiffness along other axes.

        Parameters
        ----------
        rotation : array_like, shape (..., 3, 3)
            Orthogonal matrix R whose rows are the new axes in the old components; equally, the crystal is
            turned by R and the axes stay. Leading axes broadcast against the batch.

        Returns
        -------
        StiffnessTensor
            c'_ijkl = R_ia R_jb R_kc R_ld c_abcd; "triclinic", for along the new axes the constants
            no longer show the symmetry (isotropic stays isotropic).

        Raises
        ------
        ValueError
            If the matrix is not orthogonal.
        """
        turn = mandel_rotation(require_rotation(rotation))
        mandel = turn @ self.mandel @ np.swapaxes(turn, -1, -2)
        symmetry = "isotropic" if self.symmetry == "isotropic" else "triclinic"
        return StiffnessTensor(mandel_to_voigt(mandel), symmetry, allow_unstable=True)

    def oriented(
        self, orientation: str | ArrayLike, in_plane: str | ArrayLike | None = None
    ) -> StiffnessTensor:
        """Stiffness along a sample's axes, with a crystal direction along its depth z.

        Parameters
        ----------
        orientation : str or array_like, shape (..., 3)
            Crystal direction that becomes z, as `crystal_direction` takes it.
        in_plane : str or array_like, shape (..., 3), optional
            Crystal direction whose part across z becomes x; see `rotation_to_z`.

        Returns
        -------
        StiffnessTensor

        Raises
        ------
        ValueError
            If a direction means nothing, has zero length, or both are parallel.
        """
        across = None if in_plane is None else crystal_direction(in_plane, self.symmetry)
        return self.rotated(rotation_to_z(crystal_direction(orientation, self.symmetry), across))


def _require_shape(matrix: FloatArray) -> None:
    if matrix.ndim < 2 or matrix.shape[-2:] != (6, 6):
        raise ValueError(
            f"stiffness has shape {matrix.shape}; expected (..., 6, 6), the Voigt or Mandel matrix with "
            "batch axes in front."
        )


def _symmetric(matrix: FloatArray) -> FloatArray:
    _require_shape(matrix)
    if not np.all(np.isfinite(matrix)):
        raise ValueError("stiffness has a constant that is not finite; give all of them as numbers in GPa.")
    transposed = np.swapaxes(matrix, -1, -2)
    excess = np.abs(matrix - transposed) - _ROUNDING * np.abs(matrix).max(
        axis=(-2, -1), keepdims=True, initial=0.0
    )
    if np.any(excess > 0.0):
        *_, i, j = np.unravel_index(np.argmax(excess), excess.shape)
        raise ValueError(
            f"stiffness is not symmetric: c{i + 1}{j + 1} and c{j + 1}{i + 1} differ by "
            f"{np.abs(matrix - transposed)[..., i, j].max():.4g} GPa. Mend the matrix, or average it with "
            "its transpose "
            "if the difference is noise."
        )
    return 0.5 * (matrix + transposed)


def _require_symmetry(matrix: FloatArray, symmetry: str) -> None:
    implied = np.einsum("...n,nij->...ij", independent_part(matrix, symmetry), basis(symmetry))
    excess = np.abs(matrix - implied) - _ROUNDING * np.abs(matrix).max(
        axis=(-2, -1), keepdims=True, initial=0.0
    )
    if not np.any(excess > 0.0):
        return
    worst = np.unravel_index(np.argmax(excess), excess.shape)
    name = "c{}{}".format(*sorted((int(worst[-2]) + 1, int(worst[-1]) + 1)))
    formula = implied_formula(symmetry, name)
    expected = f"{formula} = {implied[worst]:.6g} GPa" if formula else "zero"
    raise ValueError(
        f"stiffness is not {symmetry}: {name} = {matrix[worst]:.6g} GPa, "
        f"but in that symmetry it is {expected}. Mend it, turn the axes, or choose a lower symmetry."
    )
