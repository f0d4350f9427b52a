"""Random stable tensors of every symmetry, and a slow second implementation by full sums over c_ijkl."""

import numpy as np
from hypothesis import strategies as st

from inverse.elastic import SYMMETRIES, StiffnessTensor, constant_names
from inverse.elastic.symmetry import basis

VOIGT_INDEX = {(0, 0): 0, (1, 1): 1, (2, 2): 2, (1, 2): 3, (0, 2): 4, (0, 1): 5}

CUBIC_CRC = {
    # name: density, c11, c12, c44. CRC Handbook (98th-104th ed.; Si, Ge: 82nd ed.), GaAs: "Elastic Moduli of
    # GaAs at Moderate Pressures", MgO: J. Phys. Earth 24, 263 (1976).
    "Si": (2.3296, 165.78, 63.94, 79.62),
    "Ge": (5.3234, 128.35, 48.23, 66.66),
    "GaAs": (5.3169, 118.77, 53.72, 59.44),
    "Cu": (8.932, 168.3, 121.2, 75.7),
    "Al": (2.697, 106.75, 60.41, 28.34),
    "Au": (19.283, 192.44, 162.98, 42.0),
    "Ag": (10.5, 123.99, 93.67, 46.12),
    "W": (19.257, 522.39, 204.37, 160.58),
    "Ni": (8.91, 248.1, 154.9, 124.2),
    "Pt": (21.5, 346.7, 250.7, 76.5),
    "Mo": (10.2284, 463.7, 157.8, 109.2),
    "Ta": (16.626, 260.2, 154.4, 82.55),
    "Cr": (7.2, 339.8, 58.6, 99.0),
    "MgO": (3.584, 297.8, 97.0, 156.3),
}
SAPPHIRE_CRC = {"c11": 497.35, "c12": 163.97, "c13": 112.2, "c14": -23.58, "c33": 499.11, "c44": 147.39}
SAPPHIRE_WACHTMAN = {"c11": 496.8, "c12": 163.6, "c13": 110.9, "c14": -23.5, "c33": 498.1, "c44": 147.4}


def cubic(name: str) -> StiffnessTensor:
    _, c11, c12, c44 = CUBIC_CRC[name]
    return StiffnessTensor.cubic(c11=c11, c12=c12, c44=c44)


def stabilised(symmetry: str, vector: np.ndarray, margin: float = 5.0) -> StiffnessTensor:
    """Add an isotropic stiffness, which every symmetry allows, until the smallest modulus is `margin`."""
    voigt = np.einsum("n,nij->ij", vector, basis(symmetry))
    root = np.sqrt(np.array([1.0, 1.0, 1.0, 2.0, 2.0, 2.0]))
    smallest = np.linalg.eigvalsh(voigt * np.outer(root, root))[0]
    identity = np.diag([1.0, 1.0, 1.0, 0.5, 0.5, 0.5])
    return StiffnessTensor.from_voigt(voigt + (margin - smallest) * identity, symmetry)


def random_stable(symmetry: str, seed: int) -> StiffnessTensor:
    vector = np.random.default_rng(seed).uniform(-100.0, 100.0, len(constant_names(symmetry)))
    return stabilised(symmetry, vector)


def constants(symmetry: str) -> st.SearchStrategy:
    values = st.floats(-100.0, 100.0, allow_subnormal=False)
    size = len(constant_names(symmetry))
    return st.lists(values, min_size=size, max_size=size).map(np.array)


@st.composite
def stable_tensors(draw: st.DrawFn) -> StiffnessTensor:
    symmetry = draw(st.sampled_from(sorted(SYMMETRIES)))
    return stabilised(symmetry, draw(constants(symmetry)))


@st.composite
def unit_vectors(draw: st.DrawFn) -> np.ndarray:
    polar, azimuth = draw(st.floats(0.0, np.pi)), draw(st.floats(0.0, 2.0 * np.pi))
    return np.array([np.sin(polar) * np.cos(azimuth), np.sin(polar) * np.sin(azimuth), np.cos(polar)])


def full_tensor(voigt: np.ndarray) -> np.ndarray:
    """c_ijkl by its definition, one component at a time."""
    full = np.empty((3, 3, 3, 3))
    for i, j, k, m in np.ndindex(3, 3, 3, 3):
        full[i, j, k, m] = voigt[
            VOIGT_INDEX[min(i, j), max(i, j)],
            VOIGT_INDEX[min(k, m), max(k, m)],
        ]
    return full


def slow_christoffel(voigt: np.ndarray, direction: np.ndarray) -> np.ndarray:
    """Gamma_il = c_ijkl n_j n_k by explicit sums."""
    full = full_tensor(voigt)
    matrix = np.zeros((3, 3))
    for i, j, k, m in np.ndindex(3, 3, 3, 3):
        matrix[i, m] += full[i, j, k, m] * direction[j] * direction[k]
    return matrix


def slow_frequencies(voigt: np.ndarray, density: float, wavevector: np.ndarray) -> np.ndarray:
    """omega of the three waves in rad/ps, fast to slow, for a wave vector in rad/nm."""
    return np.sqrt(np.linalg.eigvalsh(slow_christoffel(voigt, wavevector))[::-1] / density)
