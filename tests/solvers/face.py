"""The solver's samples as the library's public face describes them, so that its doors are tested too."""

import numpy as np

import inverse as inv

from .samples import Experiment, Joint, Medium, Sample


def material(medium: Medium, name: str, **more) -> inv.Material:
    """The medium in customary units; `more` are fields that the solver knows by another name, or not."""
    hot = {}
    if medium.two_temperatures:
        hot = {
            "electron_heat_capacity": 1e3 * medium.electron_heat_capacity,
            "electron_phonon_coupling": 1e21 * medium.electron_phonon_coupling,
        }
    return inv.Material(
        name,
        density=medium.density,
        velocity=medium.velocity,
        heat_capacity=1e3 * medium.heat_capacity,
        conductivity=1e3 * medium.conductivity,
        thermal_stress_coefficient=medium.thermal_stress,
        n={400.0: complex(medium.n_pump), 800.0: complex(medium.n_probe)},
        dn_dstrain=complex(medium.dn_dstrain),
        dn_dT=complex(medium.dn_dT),
        **{**hot, **more},
    )


def interface(joint: Joint, **more) -> inv.Interface:
    return inv.Interface(compliance=joint.compliance, boundary_conductance=1e6 * joint.conductance, **more)


def stack(
    sample: Sample, *, media: dict[int, dict] | None = None, joints: dict[int, dict] | None = None
) -> inv.Stack:
    """The sample; `media` and `joints` hold further fields by number, top to bottom.

    The first medium is the ambient where it is a half-space; it must be welded on.
    """
    more, bonds = media or {}, joints or {}
    made = [material(m, f"m{i}", **more.get(i, {})) for i, m in enumerate(sample.media)]
    first = 0 if sample.open_top else 1
    parts = []
    for i, medium in enumerate(sample.media[first:], first):
        if i > first:
            parts.append(interface(sample.joints[i - 1], **bonds.get(i - 1, {})))
        finite = np.isfinite(medium.thickness)
        parts.append(inv.Layer(made[i], thickness=medium.thickness) if finite else inv.Substrate(made[i]))
    if sample.open_bottom:
        parts.append(inv.Substrate("vacuum"))
    return inv.Stack(*parts, ambient="air" if sample.open_top else made[0])


def setup(experiment: Experiment, **more) -> inv.PumpProbe:
    pump, probe = experiment.pump, experiment.probe
    return inv.PumpProbe(
        pump=pump.wavelength,
        probe=probe.wavelength,
        pump_angle=float(np.rad2deg(pump.angle)),
        probe_angle=float(np.rad2deg(probe.angle)),
        pump_polarisation=pump.polarisation,
        probe_polarisation=probe.polarisation,
        pulse_rms=experiment.pulse_rms,
        **more,
    )
