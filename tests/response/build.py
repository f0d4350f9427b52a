"""Samples and observed fields that the tests of the response share, in its coherent units.

Nothing here is physics of its own: `medium` fills in what a test does not care about, `solve` calls the rooms
of the forward model in order, and `temperature`, `strain` and `lattice` write out what `HeatField` and
`SoundField` document.
"""

from dataclasses import dataclass

import numpy as np
from records import one

from inverse.response.heat import HeatField, heat_field
from inverse.response.inverse_laplace import TimeGrid, time_grid, to_delays
from inverse.response.light import Absorption, LightField, absorption, light_field
from inverse.response.media import Ambient, Medium, Sample
from inverse.response.sound import SoundField, sound_field

VACUUM = Ambient(one(1 + 0j), one(1 + 0j))
OPEN = 1e30  # an open gap: the largest compliance and thermal resistance the model takes

# Aluminium-like metal and silicon-like crystal; round numbers, as their size does not matter.
_METAL = {
    "density": 2.7,
    "velocity": 6.42,
    "n_pump": 0.49 + 4.84j,
    "n_probe": 2.77 + 8.35j,
    "heat_capacity": 2.4e-3,
    "conductivity": 0.2,
    "stress": 5e-3,
}
_CRYSTAL = {
    "density": 2.33,
    "velocity": 8.43,
    "n_pump": 5.57 + 0.387j,
    "n_probe": 3.69 + 0.0065j,
    "heat_capacity": 1.66e-3,
    "conductivity": 0.148,
    "stress": 7.6e-4,
}
_PLAIN = {
    "thickness": np.inf,
    "electron_heat_capacity": 0.0,
    "inverse_coupling": 0.0,
    "loss_time": 0.0,
    "loss_exponent": 1.0,
    "inverse_quality": 0.0,
    "quality_frequency": 0.01,
}


def _medium(values: dict, changes: dict) -> Medium:
    merged = {**_PLAIN, **values, **changes}
    return Medium(**{k: one(v) if isinstance(v, float | int | complex) else v for k, v in merged.items()})


def metal(thickness: float = np.inf, **changes) -> Medium:
    return _medium(_METAL, {"thickness": thickness, **changes})


def crystal(thickness: float = np.inf, **changes) -> Medium:
    return _medium(_CRYSTAL, {"thickness": thickness, **changes})


def liquid(**changes) -> Ambient:
    """Water-like: index 1.33, 1.48 MRayl."""
    values = {
        "n_pump": 1.34 + 0j,
        "n_probe": 1.33 + 0j,
        "density": 1.0,
        "velocity": 1.48,
        "heat_capacity": 4.2e-3,
        "conductivity": 6e-4,
    }
    return Ambient(**{k: one(v) for k, v in {**values, **changes}.items()})


def stacked(*media: Medium, compliance=None, resistance=None, ambient: Ambient = VACUUM) -> Sample:
    """A sample; interfaces are welded and thermally ideal unless told."""
    joints = len(media) - 1
    return Sample(
        media=media,
        compliance=tuple(one(float(c)) for c in compliance or [0.0] * joints),
        resistance=tuple(one(float(r)) for r in resistance or [0.0] * joints),
        ambient=ambient,
    )


@dataclass(frozen=True)
class AtOnce:
    """A few values of s in place of a time grid, and a pulse without width at time zero."""

    s: np.ndarray
    pulse: complex = 1.0
    origin: float = 0.0


AT_ONCE = AtOnce(np.array([[0.02 + 0j, 0.05 + 0.3j, 0.4 + 2j]]))


@dataclass(frozen=True)
class Solved:
    """What the pump sets in motion, medium by medium."""

    sample: Sample
    grid: TimeGrid | AtOnce
    pump: LightField
    probe: LightField
    profiles: list[Absorption]
    heat: list[HeatField]
    surface: np.ndarray | None
    sound: list[SoundField]


def solve(sample: Sample, grid: TimeGrid | AtOnce, pump: float = 400.0, probe: float = 800.0) -> Solved:
    """Light in, heat and sound at unit incident fluence, time zero at 0 ps."""

    def delayed(t):
        return np.exp(-grid.s * t)

    media, ambient = sample.media, sample.ambient
    depth = [m.thickness for m in media[:-1]]
    pumped = light_field([m.n_pump for m in media], depth, pump, ambient.n_pump)
    probed = light_field([m.n_probe for m in media], depth, probe, ambient.n_probe)
    profiles = [absorption(pumped, j) for j in range(len(media))]
    source = grid.pulse * delayed(-grid.origin)
    heat, surface = heat_field(media, sample.resistance, ambient, profiles, grid.s, source)
    sound = sound_field(media, sample.compliance, ambient, profiles, heat, grid.s, delayed)
    return Solved(sample, grid, pumped, probed, profiles, heat, surface, sound)


def in_time(grid: TimeGrid, spectrum: np.ndarray) -> np.ndarray:
    """A spectrum of shape (sets, frequencies) at the delays of the grid."""
    return to_delays(
        grid, np.array(np.broadcast_to(spectrum, (spectrum.shape[0], grid.s.shape[1])))[:, None]
    )[:, 0]


def quick_grid(delay, rms: float = 0.3) -> TimeGrid:
    return time_grid(np.asarray(delay, float), rms, earliest=0.0)


def _shapes(solved: Solved, j: int, z: np.ndarray):
    """Shapes of the four kinds of term at depths z of one set, each of shape (depths, frequencies)."""
    d, f, heat = solved.sample.media[j].thickness, solved.profiles[j], solved.heat[j]
    z = np.asarray(z, float)[:, None]
    rest = np.where(np.isinf(d), 0.0, d - z)
    up = 0.0 if np.isinf(d).all() else 1.0
    hot = heat.down * np.exp(-heat.q * z) + up * heat.up * np.exp(-heat.q * rest)
    steep = f.top * np.exp(-f.p * z) + up * f.bottom * np.exp(-f.p * rest)
    beat = 2 * (f.beat * np.exp(1j * f.x * z)).real
    return hot, steep, beat, rest, up


def temperature(solved: Solved, j: int, z) -> np.ndarray:
    """Temperature of the heated system at depths z of medium j, shape (depths, frequencies)."""
    hot, steep, beat, _, _ = _shapes(solved, j, z)
    heat = solved.heat[j]
    return hot + heat.steep * steep + heat.beat * beat


def lattice(solved: Solved, j: int, z) -> np.ndarray:
    return solved.heat[j].lattice * temperature(solved, j, z)


def strain(solved: Solved, j: int, z) -> np.ndarray:
    """Strain at depths z of medium j."""
    hot, steep, beat, rest, up = _shapes(solved, j, z)
    sound, z = solved.sound[j], np.asarray(z, float)[:, None]
    ringing = up * sound.up * np.exp(-sound.q * rest) - sound.down * np.exp(-sound.q * z)
    return sound.q * ringing + sound.hot * hot + sound.steep * steep + sound.beat * beat


def gauss_legendre(start: float, stop: float, panels: int = 40, order: int = 12):
    """Nodes and weights of a composite rule."""
    x, w = np.polynomial.legendre.leggauss(order)
    edges = np.linspace(start, stop, panels + 1)
    half = np.diff(edges)[:, None] / 2
    return ((edges[:-1, None] + half) + half * x).ravel(), (half * w).ravel()
