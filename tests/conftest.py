"""What every test shares: one BLAS thread, no screen, reproducible Hypothesis runs, the reference data."""

import os

# Before numpy is imported anywhere: the libraries read these once. More threads only slow small arrays down.
for _variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS"):
    os.environ[_variable] = "1"
os.environ["MPLBACKEND"] = "Agg"

from pathlib import Path

import pytest
from hypothesis import settings

# No deadline: a busy machine is not a failure. Derandomised: a red run can be repeated.
settings.register_profile("inverse", deadline=None, derandomize=True)
settings.load_profile("inverse")

_TESTS = Path(__file__).parent


@pytest.fixture(scope="session")
def repository() -> Path:
    """Top level of the repository."""
    return _TESTS.parent


@pytest.fixture(scope="session")
def vectors() -> Path:
    """Folder of noise-free responses of eight stacks from an independent simulator; inputs in stacks.json."""
    return _TESTS / "data" / "vectors"


@pytest.fixture(scope="session")
def splits() -> Path:
    """Folder of 24 noisy traces of one Al/Si stack (three process splits); the truth is in truth.json."""
    return _TESTS / "data" / "splits"
