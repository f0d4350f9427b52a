"""Trace of a metal film on a half-space after a pump pulse, in nm, ps, g/cm3, GPa, K.

Every field is a sum of exponentials of depth. Light, heat and sound are solved in turn, in the Laplace domain.
"""

from typing import NamedTuple

import numpy as np

CUTOFF, DAMPING = 6.0, 1e6


class Material(NamedTuple):
    """Constants that are known: film (metal, two temperatures) or substrate (electron heat capacity 0)."""

    n_pump: complex
    n_probe: complex
    heat_capacity: float
    electron_heat_capacity: float
    conductivity: float
    inverse_coupling: float
    stress: float


class Unknowns(NamedTuple):
    """Film and bond; density and velocity of the substrate are known."""

    thickness: float
    density: float
    velocity: float
    compliance: float
    resistance: float
    time_zero: float


class Exponential(NamedTuple):
    """``C exp(p z)`` by its exponent and its values at both ends; in the half-space it dies off: bottom is 0."""

    p: np.ndarray | complex
    top: np.ndarray | complex
    bottom: np.ndarray | complex


class Grid:
    """Laplace variable and uniform times for delays that are multiples of a step."""

    def __init__(self, delay: np.ndarray, step: float, pulse_rms: float) -> None:
        self.origin = delay.min() - 4.0
        window = 1.3 * (delay.max() - self.origin)
        self.size = int(np.ceil(window / step))
        gamma = np.log(DAMPING) / (self.size * step)
        w = 2 * np.pi / (self.size * step) * np.arange(self.size // 2 + 1)
        self.s = gamma + 1j * w[w <= CUTOFF / pulse_rms]
        self.pulse = np.exp((self.s * pulse_rms) ** 2 / 2)
        self.index = np.rint((delay - self.origin) / step).astype(int)
        self.growth = np.exp(gamma * (delay - self.origin)) / step

    def to_delays(self, spectra: np.ndarray) -> np.ndarray:
        padded = np.zeros((len(spectra), self.size // 2 + 1), dtype=complex)
        padded[:, : self.s.size] = spectra
        return np.fft.irfft(padded, n=self.size)[:, self.index] * self.growth


def light(n1: complex, n2: complex, d: float, k: float) -> tuple[complex, complex, complex, complex, complex]:
    """Amplitudes of ``a exp(i k n z) + b exp(i k n (d - z))`` in the film and of the wave below, e and r."""
    e = np.exp(1j * k * n1 * d)
    r01, r12 = (1 - n1) / (1 + n1), (n1 - n2) / (n1 + n2)
    a = 2 / (1 + n1) / (1 + r01 * r12 * e**2)
    return a, r12 * a * e, 2 * n1 / (n1 + n2) * a * e, e, (r01 + r12 * e**2) / (1 + r01 * r12 * e**2)


def absorbed(n1: complex, n2: complex, d: float, k: float) -> tuple[list[Exponential], list[Exponential]]:
    """Absorbed fraction per length in film and substrate."""
    a, b, a2, e, _ = light(n1, n2, d, k)
    strength, p, x = 2 * k * n1.real * n1.imag, 2 * k * n1.imag, 2 * k * n1.real
    beat, turn = strength * a * np.conj(b * e), np.exp(1j * x * d)
    film = [
        Exponential(-p, strength * abs(a) ** 2, strength * abs(a * e) ** 2),
        Exponential(p, strength * abs(b * e) ** 2, strength * abs(b) ** 2),
        Exponential(1j * x, beat, beat * turn),
        Exponential(-1j * x, np.conj(beat), np.conj(beat * turn)),
    ]
    below = 2 * k * n2.imag
    return film, [Exponential(-below, below * n2.real * abs(a2) ** 2, 0)]


def solve(y1, y2, e, compliance, top, bottom, below):
    """Amplitudes of the film's two waves and of the one below, from (u, flux) of the sources at the three ends."""
    w = y2 / (1 + compliance * y2)
    back = (y1 - w) / (y1 + w)
    sent = (bottom[1] - w * (bottom[0] - below[0]) - below[1] / (1 + compliance * y2)) / (y1 + w)
    a = (y1 * sent * e - top[1]) / (y1 * (1 - back * e**2))
    b = back * a * e + sent
    return a, b, (y1 * (a * e - b) + bottom[1] - below[1]) / y2


def ends(terms, flux):
    """Values and fluxes, added up, at top and bottom; `flux` is the flux per value of each term."""
    top = sum(t.top for t in terms), sum(f * t.top for t, f in zip(terms, flux, strict=True))
    return top, (sum(t.bottom for t in terms), sum(f * t.bottom for t, f in zip(terms, flux, strict=True)))


def heat(film: Material, base: Material, d: float, resistance: float, k: float, s: np.ndarray):
    """Temperatures of film (electrons) and substrate, and the film's lattice over electron temperature."""
    lattice = 1 / (1 + s * film.heat_capacity * film.inverse_coupling)
    capacity = film.electron_heat_capacity + film.heat_capacity * lattice, base.heat_capacity
    driven, fluxes = [], []
    for light_terms, c, m in zip(
        absorbed(film.n_pump, base.n_pump, d, k), capacity, (film, base), strict=True
    ):
        gains = [1 / (c * s - m.conductivity * t.p**2) for t in light_terms]
        driven.append(
            [Exponential(t.p, t.top * g, t.bottom * g) for t, g in zip(light_terms, gains, strict=True)]
        )
        fluxes.append([-m.conductivity * t.p for t in light_terms])
    q1, q2 = (np.sqrt(s * c / m.conductivity) for c, m in zip(capacity, (film, base), strict=True))
    e = np.exp(-q1 * d)
    top, bottom = ends(driven[0], fluxes[0])
    a, b, a2 = solve(
        film.conductivity * q1,
        base.conductivity * q2,
        e,
        resistance,
        top,
        bottom,
        ends(driven[1], fluxes[1])[0],
    )
    warm = [Exponential(-q1, a, a * e), Exponential(q1, b * e, b), *driven[0]]
    return warm, [Exponential(-q2, a2, 0), *driven[1]], lattice


def sound(warm, warm_below, lattice, film: Material, base: Material, u: Unknowns, base_sound, s):
    """Displacements of film and substrate."""
    driven, fluxes = [], []
    layers = (
        (warm, film.stress * lattice, u.density, u.velocity),
        (warm_below, base.stress, *base_sound),
    )
    for terms, stress, density, velocity in layers:
        gains = [stress / (density * (velocity**2 * t.p**2 - s**2)) for t in terms]
        pairs = zip(terms, gains, strict=True)
        driven.append([Exponential(t.p, g * t.p * t.top, g * t.p * t.bottom) for t, g in pairs])
        fluxes.append([-density * s**2 / t.p for t in terms])
    e = np.exp(-s / u.velocity * u.thickness)
    y1, y2 = u.density * u.velocity * s, base_sound[0] * base_sound[1] * s
    top, bottom = ends(driven[0], fluxes[0])
    a, b, a2 = solve(y1, y2, e, u.compliance, top, bottom, ends(driven[1], fluxes[1])[0])
    q1, q2 = s / u.velocity, s / base_sound[1]
    moved = [Exponential(-q1, a, a * e), Exponential(q1, b * e, b), *driven[0]]
    return moved, [Exponential(-q2, a2, 0), *driven[1]]


def overlap(terms, weights):
    """Integral of a sum of exponentials times another over the depth."""
    return sum((t.bottom * w.bottom - t.top * w.top) / (t.p + w.p) for t in terms for w in weights)


def conjugate(weights):
    return [Exponential(*(np.conj(v) for v in w)) for w in weights]


def basis(u: Unknowns, film: Material, base: Material, base_sound, wavelengths, grid: Grid) -> np.ndarray:
    """Columns of the reflectance change for P and Q of film and substrate, and of the displacement, (9, delays)."""
    s, d = grid.s, u.thickness
    pump, probe = (2 * np.pi / wavelength for wavelength in wavelengths)
    warm, warm_below, lattice = heat(film, base, d, u.resistance, pump, s)
    moved, moved_below = sound(warm, warm_below, lattice, film, base, u, base_sound, s)
    n1, n2 = film.n_probe, base.n_probe
    a, b, a2, e, r = light(n1, n2, d, probe)
    c1, c2, g1, g2 = 1j * probe * n1 / r, 1j * probe * n2 / r, 2j * probe * n1, 2j * probe * n2
    seen = [
        Exponential(g1, c1 * a**2, c1 * (a * e) ** 2),
        Exponential(-g1, c1 * (b * e) ** 2, c1 * b**2),
        Exponential(0, 2 * c1 * a * b * e, 2 * c1 * a * b * e),
    ]
    seen_below = [Exponential(g2, c2 * a2**2, 0)]
    steps = (
        1j * probe / (2 * r) * (1 - n1**2) * (a + b * e) ** 2,
        1j * probe / (2 * r) * (n1**2 - n2**2) * a2**2,
    )
    strain = [Exponential(t.p, t.p * t.top, t.p * t.bottom) for t in moved]
    strain_below = [Exponential(t.p, t.p * t.top, t.p * t.bottom) for t in moved_below]
    shifts = sum(t.top for t in moved), sum(t.bottom for t in moved) / 2 + sum(t.top for t in moved_below) / 2
    rows = []
    for terms, weights, factor in (
        (strain, seen, 1),
        (warm, seen, lattice),
        (strain_below, seen_below, 1),
        (warm_below, seen_below, 1),
    ):
        h, h_star = factor * overlap(terms, weights), factor * overlap(terms, conjugate(weights))
        rows += [h + h_star, 1j * (h - h_star)]
    rows.append(2 * sum(step.real * shift for step, shift in zip(steps, shifts, strict=True)))
    return grid.to_delays(np.array(rows) * grid.pulse * np.exp(-s * (u.time_zero - grid.origin)))
