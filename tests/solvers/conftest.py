"""Media that the solver's own tests share: aluminium and silicon as in the vectors."""

import json

import pytest

from .samples import from_mapping


@pytest.fixture(scope="module")
def stacks(vectors):
    return json.loads((vectors / "stacks.json").read_text())


@pytest.fixture(scope="module")
def al(stacks):
    return from_mapping(stacks["al_si_perfect"])[0].media[0]


@pytest.fixture(scope="module")
def si(stacks):
    return from_mapping(stacks["al_si_perfect"])[0].media[1]
