"""Three-component sound of the library against finite differences in time."""

import sys
from pathlib import Path

import numpy as np
import pytest
from scipy.interpolate import CubicSpline
from scipy.stats import norm

sys.path.insert(0, str(Path(__file__).parents[1] / "response"))
from build import metal, quick_grid, solve, stacked
from records import one

from inverse.elastic import StiffnessTensor, rotation_about_axis
from inverse.response.inverse_laplace import to_delays
from inverse.response.solids import depth_elastic, interface_compliance
from inverse.response.three_sound import three_sound_field

from .three_components import Slab, surface_motion

RMS = 0.25
PUMP = 400.0
INDEX = 0.5 + 6.0j
CAPACITY = 2.4e-3

# GaN (Brillouin scattering 1996) and sapphire (CRC), tilted; the base is glass-like.
FILM = StiffnessTensor.hexagonal(c11=390.0, c12=145.0, c13=106.0, c33=398.0, c44=105.0).rotated(
    rotation_about_axis([0.3, 1.0, 0.0], 38.0)
)
MIDDLE = StiffnessTensor.trigonal(
    c11=497.35, c12=163.97, c13=112.2, c14=-23.58, c33=499.11, c44=147.39
).rotated(rotation_about_axis([1.0, 0.4, 0.2], 50.0))
BASE = StiffnessTensor.isotropic(c11=78.0, c44=31.0)
STRESS = np.array([1.5e-3, -0.8e-3, 5e-3])
DENSITY = (6.10, 3.99, 2.2)
DEPTH = (60.0, 35.0)


def absorbed(z: np.ndarray) -> np.ndarray:
    """Lattice heating per unit fluence in K, of an opaque film: (1 - R) p exp(-p z) / C."""
    p = 4 * np.pi * INDEX.imag / PUMP
    reflectance = abs((INDEX - 1) / (INDEX + 1)) ** 2
    return (1 - reflectance) * p * np.exp(-p * z) / CAPACITY


def reference(normal: float, tangential: float, cells: int) -> tuple[np.ndarray, np.ndarray]:
    """Finite differences; the compliant joint lies between film and middle layer."""
    c = [t.components[:, 2, :, 2] for t in (FILM, MIDDLE, BASE)]
    spring = None if normal == 0 else 1 / np.array([tangential, tangential, normal])
    nothing = np.zeros(3)
    slabs = [
        Slab(DEPTH[0], 12 * cells, DENSITY[0], c[0], STRESS, absorbed, spring),
        Slab(DEPTH[1], 7 * cells, DENSITY[1], c[1], nothing),
        Slab(90.0, 18 * cells, DENSITY[2], c[2], nothing),
    ]
    return surface_motion(slabs, lambda t: float(norm.cdf(t / RMS)), -5 * RMS, 31.0)


def library(normal: float, tangential: float, delay: np.ndarray) -> np.ndarray:
    same = {"conductivity": 1e-9, "heat_capacity": CAPACITY, "n_pump": INDEX, "n_probe": INDEX}
    media = [metal(d, density=rho, **same) for d, rho in zip((*DEPTH, np.inf), DENSITY, strict=True)]
    grid = quick_grid(delay, RMS)
    solved = solve(stacked(*media), grid, pump=PUMP)
    cold = np.zeros((1, 3))
    solids = [
        depth_elastic(t.voigt[None], s) for t, s in ((FILM, STRESS[None]), (MIDDLE, cold), (BASE, cold))
    ]
    joints = [interface_compliance(one(normal), one(tangential)), interface_compliance(one(0.0))]
    fields = three_sound_field(
        solved.sample.media, solids, joints, solved.sample.ambient, solved.profiles, solved.heat, grid.s,
        lambda t: np.exp(-grid.s * t),
    )  # fmt: skip
    return np.stack([to_delays(grid, fields[0].at_top(axis)[None].copy())[0, 0] for axis in range(3)], axis=1)


@pytest.mark.parametrize(("normal", "tangential"), [(0.0, 0.0), (0.05, 0.3)])
def test_three_components_agree_with_finite_differences(normal: float, tangential: float) -> None:
    delay = np.arange(-1.0, 30.0, 0.05)
    found = library(normal, tangential, delay)
    coarse, fine = (CubicSpline(*reference(normal, tangential, cells))(delay) for cells in (35, 70))
    scale = np.ptp(fine, axis=0)  # of each component: x and y move by conversion and by shear stress
    # The reference is second order in its mesh, so the limit of no mesh is (4 fine - coarse) / 3.
    assert np.all(np.abs(found - fine).max(axis=0) < 0.3 * np.abs(found - coarse).max(axis=0))
    error = np.abs(found - (4 * fine - coarse) / 3).max(axis=0) / scale
    assert np.all(error < 2e-4), error
