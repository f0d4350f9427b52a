"""Samples from the records of the test vectors (coherent units, as their file states)."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np

from inverse.response.media import Ambient, Medium, Sample

DATA = Path(__file__).parents[1] / "data" / "vectors"
STACKS = json.loads((DATA / "stacks.json").read_text())


def one(value):
    return np.full((1, 1), value)


def medium(row: dict, default_rate: float = np.inf) -> Medium:
    coupling = row["electron_phonon_coupling_GPa_ps_K"]
    return Medium(
        thickness=one(np.inf if row["thickness_nm"] is None else row["thickness_nm"]),
        density=one(row["density_g_cm3"]),
        velocity=one(row["velocity_nm_ps"]),
        n_pump=one(complex(*row["n_pump"])),
        n_probe=one(complex(*row["n_probe"])),
        heat_capacity=one(row["heat_capacity_GPa_K"]),
        electron_heat_capacity=one(row["electron_heat_capacity_GPa_K"] or 0.0),
        conductivity=one(row["conductivity_GPa_nm2_ps_K"]),
        inverse_coupling=one(1 / coupling if coupling else 0.0),
        stress=one(row["thermal_stress_GPa_K"]),
        loss_time=one(0.0),
        loss_exponent=one(1.0),
        inverse_quality=one(0.0),
        quality_frequency=one(0.01),
    )


def sample(record: dict) -> Sample:
    return Sample(
        media=tuple(medium(row) for row in record["layers"]),
        compliance=tuple(one(i["compliance_nm_GPa"]) for i in record["interfaces"]),
        resistance=tuple(one(1 / i["boundary_conductance_GPa_nm_ps_K"]) for i in record["interfaces"]),
        ambient=Ambient(one(record["ambient_n"] + 0j), one(record["ambient_n"] + 0j)),
    )


def coefficients(record: dict, names: tuple[str, ...]) -> np.ndarray:
    """The vectors' own P and Q per material, in the order of the basis functions."""
    rows = {row["material"]: row for row in record["layers"]}
    value = {"displacement": 1.0}
    for name, row in rows.items():
        value[f"{name}.P.real"], value[f"{name}.P.imag"] = row["dn_dstrain"]
        value[f"{name}.Q.real"], value[f"{name}.Q.imag"] = row["dn_dT"]
    return np.array([value[name] for name in names])
