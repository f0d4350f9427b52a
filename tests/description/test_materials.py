"""Materials of the user's own, and priors for films."""

from __future__ import annotations

import math
import pickle
import re

import pytest
from scipy import stats

from inverse.description.material.film import film_prior
from inverse.description.material.properties import Material, material
from inverse.description.material.refractive_index import IndexTable
from inverse.description.unknowns import Unknown


@pytest.mark.parametrize(
    ("field", "value", "unit"),
    [
        ("density", 2700.0, "kg/m3"),
        ("velocity", 6420.0, "m/s"),
        ("heat_capacity", 2.4e6, "J/m3/K"),
        ("thermal_stress_coefficient", 5.3e6, "Pa/K"),
        ("expansion", 23.1, "1e-6/K"),
        ("bulk_modulus", 7.6e10, "Pa"),
        ("electron_heat_capacity", 2.7e4, "J/m3/K"),
    ],
)
def test_si_values_are_refused_by_name(field: str, value: float, unit: str) -> None:
    with pytest.raises(ValueError, match=rf"film\.{field} = .*looks like .*{re.escape(unit)}"):
        Material("film", **{field: value})


@pytest.mark.parametrize(
    "field", ["density", "velocity", "heat_capacity", "conductivity", "electron_phonon_coupling"]
)
@pytest.mark.parametrize("value", [0.0, -1.0, math.nan])
def test_values_must_be_positive(field: str, value: float) -> None:
    with pytest.raises(ValueError, match=rf"film\.{field} = .* is outside"):
        Material("film", **{field: value})


def test_priors_are_checked_like_numbers() -> None:
    with pytest.raises(ValueError, match=r"quantile does not fit.*film\.velocity.*m/s"):
        Material("film", velocity=stats.norm(6420, 100))
    shared = Unknown("v", stats.norm(6.42, 0.1))
    assert Material("film", velocity=shared).velocity is shared


def test_text_is_no_number() -> None:
    with pytest.raises(ValueError, match=r"film\.density = 'heavy' is not a number"):
        Material("film", density="heavy")


@pytest.mark.parametrize("name", ["", "Al|Si", "Al#2", "a/b"])
def test_names_that_would_break_result_names_are_refused(name: str) -> None:
    with pytest.raises(ValueError, match="give a non-empty text without"):
        Material(name)


def test_thermal_stress_from_expansion_and_bulk_modulus() -> None:
    film = Material("film", expansion=23.1e-6, bulk_modulus=76.0)
    assert film.thermal_stress_coefficient == pytest.approx(3 * 76.0 * 23.1e-6, rel=1e-12)


def test_contradictory_thermal_stress_is_refused() -> None:
    with pytest.raises(
        ValueError, match=r"3 x bulk modulus x expansion is 0.0052668 GPa/K; give one or the other"
    ):
        Material("film", expansion=23.1e-6, bulk_modulus=76.0, thermal_stress_coefficient=0.0050)


def test_amplifying_index_is_refused() -> None:
    with pytest.raises(ValueError, match=r"negative imaginary part.*complex conjugate"):
        Material("film", n={800: 2.77 - 8.35j})
    with pytest.raises(ValueError, match=r"negative imaginary part"):
        Material("film", n=2.77 - 8.35j)


def test_index_in_all_its_forms() -> None:
    prior = stats.norm(2.77, 0.1)
    assert Material("film", n=1.5).index_at(633) == 1.5
    assert Material("film", n={800: 2.77 + 8.35j, 400: 0.49 + 4.84j}).index_at(400) == 0.49 + 4.84j
    assert Material("film", n={800: (2.77, 8.35)}).index_at(800) == 2.77 + 8.35j
    assert Material("film", n={800: (prior, 8.35)}).index_at(800) == (prior, 8.35)
    assert Material("film", n=(prior, 8.35)).index_at(400) == (prior, 8.35)
    table = IndexTable((400.0, 800.0), (0.49 + 4.84j, 2.77 + 8.35j))
    assert Material("film", n=table).index_at(800) == 2.77 + 8.35j


def test_index_that_cannot_be_given_is_refused() -> None:
    prior = stats.norm(2.77, 0.1)
    with pytest.raises(ValueError, match="film has no refractive index; give n="):
        Material("film").index_at(800)
    with pytest.raises(ValueError, match=r"known from 800 to 800 nm and was asked at 400 nm"):
        Material("film", n={800: 2.77 + 8.35j}).index_at(400)
    with pytest.raises(ValueError, match=r"unknowns are not interpolated. Add n at 600 nm"):
        Material("film", n={400: 0.49 + 4.84j, 800: (prior, 8.35)}).index_at(600)
    with pytest.raises(ValueError, match="give a pair"):
        Material("film", n=prior)
    with pytest.raises(ValueError, match="got 3 parts; give a pair"):
        Material("film", n=(1.0, 2.0, 3.0))
    with pytest.raises(ValueError, match="not a complex number"):
        Material("film", n="metal")
    with pytest.raises(ValueError, match="empty mapping"):
        Material("film", n={})
    with pytest.raises(ValueError, match=r"looks like m or um"):
        Material("film", n={0.8: 2.77 + 8.35j})


def test_optical_coefficients_may_be_pairs() -> None:
    assert Material("film", dn_dstrain=(1.0, 2.0)).dn_dstrain == 1 + 2j
    assert Material("film", dn_dT=1e-4).dn_dT == 1e-4
    prior = stats.norm(0, 3)
    assert Material("film", dn_dstrain=(prior, 0.0)).dn_dstrain == (prior, 0.0)
    with pytest.raises(ValueError, match=r"film.dn_dstrain is complex: give a pair"):
        Material("film", dn_dstrain=prior)


def test_materials_travel_to_other_processes() -> None:
    copy = pickle.loads(pickle.dumps(material("Si", "100")))
    assert copy.velocity == material("Si", "100").velocity
    assert copy.sources == material("Si", "100").sources
    assert copy.index_at(800) == material("Si", "100").index_at(800)


# --- priors for films -------------------------------------------------------------------------------------


def test_film_priors_are_wider_than_the_bulk_is_known() -> None:
    velocity = film_prior("Al", "velocity")
    assert velocity.mean() == pytest.approx(6.42)
    assert velocity.std() == pytest.approx(0.03 * 6.42)
    coupling = film_prior(material("Al"), "electron_phonon_coupling")
    assert coupling.median() == pytest.approx(2.45e17)
    # one standard deviation of the logarithm is a factor of two
    assert coupling.cdf(2 * 2.45e17) - coupling.cdf(0.5 * 2.45e17) == pytest.approx(0.6827, abs=1e-4)
    assert film_prior("Al", "conductivity").median() < material("Al").conductivity
    for field in ("velocity", "density", "conductivity", "electron_phonon_coupling"):
        Material("film", **{field: film_prior("Al", field)})


def test_film_prior_is_as_wide_as_the_sources_disagree() -> None:
    doubtful = Material("film", velocity=5.0, spread={"velocity": 0.5})
    assert film_prior(doubtful, "velocity").std() == pytest.approx(0.5)


def test_film_prior_refusals() -> None:
    with pytest.raises(ValueError, match="no film prior for 'thickness'; there is one for velocity"):
        film_prior("Al", "thickness")
    with pytest.raises(ValueError, match=r"Si3N4\.velocity is None; a film prior needs a number"):
        film_prior("Si3N4", "velocity")
