"""A clear film whose trace is shorter than its echo: the light's interference must not be taken for knowledge of it.

Interference in a clear film multiplies every function of the trace by a factor of its thickness. Priors of fixed width
prefer the film with the smaller functions, and a scale taken from Im P of a clear film, about zero in truth, denies the
displacement its part. Either gave a film of another fringe order with small intervals.
"""

from dataclasses import replace

import numpy as np
import pytest
from problems import SETUP
from scipy import stats

import inverse as inv
from inverse.inference.checks.coefficients import coefficient_warnings
from inverse.inference.minima.starts import candidates, joined

DELAY = np.arange(-4, 60, 0.2)


def stack(clear, metal, compliance):
    return inv.Stack(
        inv.Layer("SiO2", **clear),
        inv.Layer("Al", **metal),
        inv.Interface(compliance=compliance, boundary_conductance=100.0),
        inv.Substrate("Si", orientation="100"),
    )


def film(name, thickness):
    return {"thickness": thickness, **{f: inv.film_prior(name, f) for f in ("velocity", "density")}}


SOUGHT = stack(
    film("SiO2", stats.uniform(200, 200)), film("Al", stats.uniform(40, 40)), stats.halfcauchy(scale=0.05)
)


def problem(seed, **true):
    values = {
        "SiO2.thickness": 300.0,
        "SiO2.velocity": 5.97,
        "SiO2.density": 2.2,
        "Al.thickness": 60.0,
        "Al.velocity": 6.42,
        "Al.density": 2.7,
        "Al|Si.compliance": 0.03,
        **{name.replace("__", "."): value for name, value in true.items()},
    }
    clean = inv.simulate(SOUGHT, SETUP, DELAY, values=values).reflectance_change.values
    level = 2e-3 * np.ptp(clean[DELAY > 3])
    noise = level * np.random.default_rng(seed).standard_normal(DELAY.size)
    trace = inv.make_trace(DELAY, reflectance_change=clean + noise)
    found = inv.Inversion(SOUGHT, SETUP, trace, time_zero=0.0, noise="white")
    return found, {**values, "noise.white": level}


def deviations(fit, truth):
    """Distance of the truth in standard deviations, in the variables in which the posterior is nearly normal."""
    known = np.array([[truth[name] for name in fit.names]])
    z = fit.inversion.posterior.parameters.to_z(known)[0]
    return (z - fit.best.z) / np.sqrt(fit.best.covariance_z.diagonal())


@pytest.mark.parametrize("thickness", [300.0, 260.0])
def test_intervals_hold_the_truth(thickness):
    found, truth = problem(1, SiO2__thickness=thickness)
    # A film of 260 nm has rivals of other fringe orders that are nearly as likely, and that a search finds first.
    fit = found.least_squares(seed=1, starts=4, points=[truth])
    assert np.abs(deviations(fit, truth)[:-1]).max() < 2.5
    assert inv.check_model(fit).describes


def test_a_search_finds_the_film_behind_its_fringes():
    # Every fringe of the light in the film holds a minimum; 512 draws of seven unknowns seldom fall near the right one
    found, _ = problem(1, SiO2__thickness=260.0)
    fit = found.least_squares(seed=1)
    thickness = np.array([basin.values[0] for basin in fit.minima])
    weight = np.array([basin.weight for basin in fit.minima])
    assert weight[np.abs(thickness - 260.0) < 5.0].sum() > 0.2
    assert len(thickness) > 1


def test_echoes_are_taken_for_those_of_the_film_that_makes_them():
    # Light is absorbed in the metal: the echo at 2 x 60 / 6.42 = 18.7 ps is its own, not that of the glass above
    found, _ = problem(1)
    physical = np.array([name not in found.noise_names for name in found.names])
    z = joined(np.zeros(len(found.names)), physical, candidates(found, physical, seed=1))
    values = dict(zip(found.names, found.posterior.parameters.to_values(z[2::2]).T, strict=True))
    metal, glass = (2 * values[f"{n}.thickness"] / values[f"{n}.velocity"] for n in ("Al", "SiO2"))
    assert metal.std() < 0.5 and metal.mean() == pytest.approx(2 * 60 / 6.42, abs=0.7)
    assert glass.std() > 10


def test_no_coefficient_of_the_truth_is_far_out_in_its_prior():
    found, truth = problem(1)
    (member,) = found.posterior.members
    named = member.local({name: np.array([truth[name]]) for name in found.names})
    assert np.abs(member.model.eliminated(named).mean).max() < 3


def test_a_coefficient_far_out_in_its_prior_is_told():
    found, truth = problem(1)
    values = np.array([truth[name] for name in found.names])
    assert coefficient_warnings(found, values) == []
    (member,) = found.posterior.members
    widths = member.model.widths * np.where(np.array(member.model.layout.names) == "Al.P.real", 0.02, 1.0)
    widths[-1] *= 0.01
    narrow = replace(member, model=replace(member.model, widths=widths))
    found.posterior = replace(found.posterior, members=(narrow,))
    metal, fluence = coefficient_warnings(found, values)
    assert "the coefficient Al.P.real lies" in metal and "give dn_dstrain of Al as a pair of priors" in metal
    assert "displacement lies" in fluence and "check the indices" in fluence


def test_a_thickness_of_another_fringe_order_is_no_likelier_for_smaller_functions():
    # Two films, of one trace to within its noise; twice the size of all functions in one of them
    found, truth = problem(2, SiO2__thickness=388.6, SiO2__velocity=6.27, Al__thickness=43.2)
    (member,) = found.posterior.members
    rows = [
        member.model.functions(
            member.local({n: np.array([truth[n] if n != "SiO2.thickness" else d]) for n in found.names})
        )["reflectance_change"][0, :-1]
        for d in (261.6, 388.6)
    ]
    first, second = (np.sqrt((r[~member.model.idle] ** 2).sum(axis=0).mean()) for r in rows)
    assert first == pytest.approx(second, rel=1e-9)
    free = replace(member.model, size=None)
    named = {n: np.array([truth[n], truth[n]]) for n in found.names}
    named["SiO2.thickness"] = np.array([261.6, 388.6])
    plain = free.functions(member.local(named))["reflectance_change"][:, :-1]
    size = np.sqrt((plain[:, ~member.model.idle] ** 2).sum(axis=1).mean(axis=1))
    assert size[1] > 1.5 * size[0]


def test_common_factor_of_the_widths_means_nothing():
    found, truth = problem(3)
    (member,) = found.posterior.members
    named = member.local({name: np.array([truth[name]]) for name in found.names})
    wide = replace(member.model, widths=7 * member.model.widths)
    np.testing.assert_allclose(wide.log_likelihood(named), member.model.log_likelihood(named), rtol=1e-10)
    np.testing.assert_allclose(
        wide.coefficient_scales(named), member.model.coefficient_scales(named), rtol=1e-10
    )


def test_coefficients_come_out_in_their_own_units():
    found, truth = problem(4)
    (member,) = found.posterior.members
    named = member.local({name: np.array([truth[name]]) for name in found.names})
    scaled = member.model.eliminated(named).mean * member.model.coefficient_scales(named)
    by_name = dict(zip(member.model.coefficient_names, scaled[0], strict=True))
    # What simulate takes where the tables give no more: P = 1 + 1i and, at 1 J/m2, one displacement
    assert by_name["Al.P.real"] == pytest.approx(1.0, abs=0.3)
    assert by_name["displacement"] == pytest.approx(1.0, abs=0.1)
