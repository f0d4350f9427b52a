"""Results built by hand in the schema of the library, for tests of tables and figures."""

import json
from dataclasses import dataclass
from types import SimpleNamespace

import numpy as np
import xarray as xr
from scipy import stats

from inverse.description.quantities import quantity
from inverse.description.unknowns import describe_prior

CHAINS, DRAWS = 4, 1000

PRIORS = {
    "Al.thickness": stats.uniform(40, 40),
    "Al.velocity": stats.norm(6.42, 0.10),
    "Al|Si.compliance": stats.halfcauchy(scale=0.05),
    "noise.white": stats.loguniform(1e-7, 1e-4),
}
UNITS = {
    "Al.thickness": "nm",
    "Al.velocity": "nm/ps",
    "Al|Si.compliance": "nm/GPa",
    "noise.white": "1",
    "Al|Si.stiffness": "GPa/nm",
    "Al.round_trip": "ps",
}
INFORMATION = {
    "stack": "Al on Si",
    "noise": {"model": "correlated"},
    "convergence": {"converged": True, "message": ""},
    "warnings": ["4 delays were left out"],
    "constants": [
        {
            "place": "Al",
            "field": "heat_capacity",
            "value": 2.43,
            "unit": "J/cm3/K",
            "source": "a handbook",
            "spread": 0.02,
        },
        {
            "place": "Si",
            "field": "density",
            "value": 2.329,
            "unit": "g/cm3",
            "source": "a paper",
            "spread": 0.0,
        },
    ],
}


def draws(seed: int = 3) -> dict[str, np.ndarray]:
    """One unknown known well, one by its prior alone, one touching zero, noise; two derived quantities."""
    rng = np.random.default_rng(seed)
    shape = (CHAINS, DRAWS)
    thickness, velocity = 60.03 + 0.12 * rng.standard_normal(shape), 6.42 + 0.10 * rng.standard_normal(shape)
    compliance = np.abs(0.005 * rng.standard_normal(shape))
    return {
        "Al.thickness": thickness,
        "Al.velocity": velocity,
        "Al|Si.compliance": compliance,
        "noise.white": 2e-6 * np.exp(0.03 * rng.standard_normal(shape)),
        "Al|Si.stiffness": 1 / compliance,
        "Al.round_trip": 2 * thickness / velocity,
    }


def posterior(values: dict[str, np.ndarray], priors=PRIORS) -> xr.Dataset:
    variables = {}
    for name, array in values.items():
        prior = json.dumps(describe_prior(priors[name])) if name in priors else ""
        known = quantity(name)
        role = "derived" if name not in priors else "noise" if name.startswith("noise.") else "unknown"
        attrs = {
            "units": UNITS.get(name, "1"),
            "long_name": name,
            "symbol": name,
            "role": role,
            "low": known.low,
            "high": known.high,
            "prior": prior,
        }
        variables[name] = (("chain", "draw"), array, attrs)
    return xr.Dataset(variables)


def tree(values=None, priors=PRIORS, information=INFORMATION, **groups) -> xr.DataTree:
    made = xr.DataTree.from_dict(
        {"posterior": posterior(draws() if values is None else values, priors), **groups}
    )
    made.attrs["inverse"] = json.dumps(information)
    return made


@dataclass
class Minimum:
    """One minimum of a least-squares result."""

    weight: float


@dataclass
class Fit:
    """What a least-squares result offers to tables."""

    names: tuple[str, ...]
    values: np.ndarray
    sd: np.ndarray
    units: tuple[str, ...]
    flags: tuple[str, ...]
    minima: tuple[Minimum, ...]

    @property
    def inversion(self) -> SimpleNamespace:
        """Priors and quantity of each name."""
        fields = {name: name.rsplit(".", 1)[1] for name in self.names}
        return SimpleNamespace(priors=PRIORS, fields=fields)
