"""Light in a stack of uniform slices by 2x2 characteristic matrices (Abeles), any angle, s or p.

Time factor e^{-i w t}, n = n' + i n''. The state (E, H) holds the tangential fields, H in units that make a
forward wave H = q E, with k_z = sqrt(n^2 - (n_0 sin angle)^2) in units of k, q = k_z for s and n^2 / k_z for
p. A slice of thickness d carries the state at its bottom to its top,

    M = [[cos x, -(i / q) sin x], [-i q sin x, cos x]],    x = k k_z d.

Nothing here integrates a field: absorption is the loss of flux across a slice, and the sensitivity to a
change of index or thickness is dM put in M's place in the product of all matrices. Both are exact for a
uniform slice.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


@dataclass(frozen=True)
class Beam:
    """A plane wave: vacuum wavelength (nm), angle in the ambient (rad), polarisation "s" or "p"."""

    wavelength: float
    angle: float = 0.0
    polarisation: str = "s"


@dataclass(frozen=True)
class Optics:
    """What `solve` returns.

    `reflection`, `transmission`: complex amplitude ratios of tangential E, referred to the first and last
    boundary. `absorbed`: fraction of the incident flux lost in each slice. `dlog_r_dn`, `dlog_r_dd`,
    `dlog_t_dn`, `dlog_t_dd`: derivative of ln r and ln t by the index and by the thickness (1/nm) of each
    slice. `ambient_shift`, `exit_shift`: derivative of (ln r, ln t) by a length (1/nm) added to the ambient
    above the first boundary or to the exit medium below the last.
    """

    reflection: complex
    transmission: complex
    absorbed: Real
    dlog_r_dn: Complex
    dlog_r_dd: Complex
    dlog_t_dn: Complex
    dlog_t_dd: Complex
    ambient_shift: tuple[complex, complex]
    exit_shift: tuple[complex, complex]


def _k_z(n: Complex | complex, beam: Beam, ambient: float) -> Complex:
    return np.sqrt(np.asarray(n, complex) ** 2 - (ambient * np.sin(beam.angle)) ** 2)


def _admittance(n: Complex | complex, k_z: Complex | complex, beam: Beam) -> Complex:
    return np.asarray(k_z if beam.polarisation == "s" else np.asarray(n, complex) ** 2 / k_z)


def _matrices(upper: Complex, lower: Complex, diagonal: Complex) -> Complex:
    return np.stack([np.stack([diagonal, upper], -1), np.stack([lower, diagonal], -1)], -2)


def slice_matrices(n: Complex, d: Real, beam: Beam, ambient: float) -> tuple[Complex, Complex, Complex]:
    """M, dM/dn and dM/dd of every slice, each of shape (slices, 2, 2), from indices and thicknesses (nm)."""
    k, k_z = 2 * np.pi / beam.wavelength, _k_z(n, beam, ambient)
    q, x = _admittance(n, k_z, beam), k * d * k_z
    dq_dn = n / k_z if beam.polarisation == "s" else 2 * n / k_z - n**3 / k_z**3
    cos, sin = np.cos(x), np.sin(x)
    by_phase = _matrices(-1j / q * cos, -1j * q * cos, -sin)
    by_admittance = _matrices(1j * sin / q**2, -1j * sin, np.zeros_like(q))
    m = _matrices(-1j / q * sin, -1j * q * sin, cos)
    dm_dn = by_phase * (k * d * n / k_z)[:, None, None] + by_admittance * dq_dn[:, None, None]
    return m, dm_dn, by_phase * (k * k_z)[:, None, None]


def _states_upwards(m: Complex, q_exit: complex) -> Complex:
    state = np.empty((len(m) + 1, 2), complex)
    state[-1] = 1, q_exit
    for i in range(len(m) - 1, -1, -1):
        state[i] = m[i] @ state[i + 1]
    return state


def _rows_downwards(m: Complex, row: Complex) -> Complex:
    """Each row vector is `row` times the matrices of all slices above."""
    rows = np.empty((len(m), 2), complex)
    for i in range(len(m)):
        rows[i] = row
        row = row @ m[i]
    return rows


def solve(n: Complex, d: Real, beam: Beam, ambient: float, exit_index: complex) -> Optics:
    """Absorption and first-order sensitivities of slices between a lossless ambient and an exit half-space.

    With the state scaled to unit incident amplitude, E + H / q_0 = 2, a change (dE, dH) at the top gives
    dr = (H dE - E dH) / (2 q_0) and d ln t = -(q_0 dE + dH) / (2 q_0).
    """
    k = 2 * np.pi / beam.wavelength
    m, dm_dn, dm_dd = slice_matrices(n, d, beam, ambient)
    k_0, k_exit = complex(_k_z(ambient, beam, ambient)), complex(_k_z(exit_index, beam, ambient))
    q_0, q_exit = complex(_admittance(ambient, k_0, beam)), complex(_admittance(exit_index, k_exit, beam))
    state = _states_upwards(m, q_exit)
    state /= (q_0 * state[0, 0] + state[0, 1]) / (2 * q_0)
    e, h = state[0]
    r = e - 1
    rows_r = _rows_downwards(m, np.array([h, -e]) / (2 * q_0 * r))
    rows_t = _rows_downwards(m, np.array([q_0, 1]) / (-2 * q_0))

    def derivative(rows: Complex, dm: Complex) -> Complex:
        return np.einsum("ia,iab,ib->i", rows, dm, state[1:])

    return Optics(
        reflection=r,
        transmission=state[-1, 0],
        absorbed=-np.diff((state[:, 0] * state[:, 1].conj()).real) / q_0.real,
        dlog_r_dn=derivative(rows_r, dm_dn),
        dlog_r_dd=derivative(rows_r, dm_dd),
        dlog_t_dn=derivative(rows_t, dm_dn),
        dlog_t_dd=derivative(rows_t, dm_dd),
        ambient_shift=(2j * k * k_0, 1j * k * k_0),
        exit_shift=(0j, 1j * k * k_exit),
    )
