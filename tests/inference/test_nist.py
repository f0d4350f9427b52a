"""Least squares against NIST's certified nonlinear regressions (Statistical Reference Datasets, data/nist)."""

import re
from dataclasses import dataclass

import numpy as np
import pytest

from inverse.inference.minima.minimise import minimise

exp = np.exp


def cubics(x, b1, b2, b3, b4, b5, b6, b7):
    return (b1 + b2 * x + b3 * x**2 + b4 * x**3) / (1 + b5 * x + b6 * x**2 + b7 * x**3)


def lanczos(x, b1, b2, b3, b4, b5, b6):
    return b1 * exp(-b2 * x) + b3 * exp(-b4 * x) + b5 * exp(-b6 * x)


def gauss(x, b1, b2, b3, b4, b5, b6, b7, b8):
    return b1 * exp(-b2 * x) + b3 * exp(-((x - b4) ** 2) / b5**2) + b6 * exp(-((x - b7) ** 2) / b8**2)


MODELS = {
    "Misra1a": lambda x, b1, b2: b1 * (1 - exp(-b2 * x)),
    "Chwirut2": lambda x, b1, b2, b3: exp(-b1 * x) / (b2 + b3 * x),
    "DanWood": lambda x, b1, b2: b1 * x**b2,
    "Gauss1": gauss,
    "Lanczos3": lanczos,
    "MGH09": lambda x, b1, b2, b3, b4: b1 * (x**2 + x * b2) / (x**2 + x * b3 + b4),
    "MGH10": lambda x, b1, b2, b3: b1 * exp(b2 / (x + b3)),
    "MGH17": lambda x, b1, b2, b3, b4, b5: b1 + b2 * exp(-x * b4) + b3 * exp(-x * b5),
    "Thurber": cubics,
    "Eckerle4": lambda x, b1, b2, b3: b1 / b2 * exp(-0.5 * ((x - b3) / b2) ** 2),
    "BoxBOD": lambda x, b1, b2: b1 * (1 - exp(-b2 * x)),
    "Rat42": lambda x, b1, b2, b3: b1 / (1 + exp(b2 - b3 * x)),
    "Rat43": lambda x, b1, b2, b3, b4: b1 / (1 + exp(b2 - b3 * x)) ** (1 / b4),
    "Hahn1": cubics,
    "Kirby2": lambda x, b1, b2, b3, b4, b5: (b1 + b2 * x + b3 * x**2) / (1 + b4 * x + b5 * x**2),
    "Bennett5": lambda x, b1, b2, b3: b1 * (b2 + x) ** (-1 / b3),
}


@dataclass(frozen=True)
class Certified:
    """One of NIST's files: both starts, certified values, standard deviations, residual sum of squares, data."""

    starts: np.ndarray
    values: np.ndarray
    deviations: np.ndarray
    squares: float
    x: np.ndarray
    y: np.ndarray


def read(path):
    text = path.read_text()
    rows = np.array(
        [line.split("=")[1].split() for line in text.splitlines() if re.match(r"\s+b\d+ =", line)], float
    )
    squares = float(re.search(r"Residual Sum of Squares:\s+(\S+)", text)[1])
    data = text.rsplit("Data:", 1)[1].splitlines()[1:]
    y, x = np.array([line.split() for line in data if line.strip()], float).T
    return Certified(rows[:, :2].T, rows[:, 2], rows[:, 3], squares, x, y)


@pytest.fixture(scope="module")
def folder(repository):
    return repository / "tests" / "data" / "nist"


@pytest.mark.parametrize("start", [0, 1], ids=["far start", "near start"])
@pytest.mark.parametrize("name", MODELS)
def test_reaches_certified_values_to_six_digits(folder, name, start):
    certified = read(folder / f"{name}.dat")

    def residuals(points):
        with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
            return np.stack([certified.y - MODELS[name](certified.x, *b) for b in points])

    found = minimise(residuals, certified.starts[start])
    freedom = certified.y.size - certified.values.size
    deviations = np.sqrt(found.covariance.diagonal() * found.cost / freedom)
    assert found.converged
    np.testing.assert_allclose(found.x, certified.values, rtol=1e-6)
    np.testing.assert_allclose(found.cost, certified.squares, rtol=1e-6)
    np.testing.assert_allclose(deviations, certified.deviations, rtol=1e-6)
