"""What the public calls of a problem refuse, and what they say."""

import json
import re
from dataclasses import replace

import numpy as np
import pytest
from problems import SETUP, bonded, noisy
from scipy import stats

import inverse as inv
from inverse.description.sample.optic_slots import eliminated_numbers
from inverse.description.sample.places import bind
from inverse.description.sample.stack_file import read_stack
from inverse.inference.checks.interlayer import interlayers
from inverse.inference.checks.posterior_draws import PosteriorDraws
from inverse.inference.mcmc.checkpoint import Checkpoint, Identity
from inverse.inference.minima.least_squares import Fit
from inverse.inference.problem.parameters import parameters

TRUTH = {"Al.thickness": 60.0, "Al.velocity": 6.42, "Al|Si.compliance": 0.02}


@pytest.fixture(scope="module")
def problem():
    trace = noisy(bonded(), TRUTH, 0.01, seed=1)
    return inv.Inversion(bonded(), SETUP, trace, time_zero=stats.norm(0, 0.05), noise="white")


def medians(problem):
    return np.array([[float(prior.median()) for prior in problem.priors.values()]])


def test_a_value_that_is_no_number_has_no_probability(problem):
    values = np.repeat(medians(problem), 2, axis=0)
    values[0, 0] = np.nan
    impossible, possible = problem.log_prob(values)
    assert impossible == -np.inf and np.isfinite(possible)
    z = np.zeros((2, len(problem.names)))
    z[1, 1] = np.nan
    assert np.isfinite(problem.posterior(z)[0]) and problem.posterior(z)[1] == -np.inf


@pytest.mark.parametrize("value", [20.0, 1e9, np.nan, np.inf])
def test_predict_refuses_what_the_prior_makes_impossible(problem, value):
    values = medians(problem)
    values[0, 0] = value
    with pytest.raises(
        ValueError, match=r"Al.thickness = \S+ in row 0 of values is impossible.*from 40 to 80 nm"
    ):
        problem.predict(values)


def test_predict_takes_the_edges_of_a_prior(problem):
    values = medians(problem)
    values[0, 0] = 80.0
    assert np.ptp(problem.predict(values)["reflectance_change"].values) > 0


def test_predict_needs_a_delay_and_a_whole_seed(problem):
    with pytest.raises(ValueError, match="There is no delay; give one or more"):
        problem.predict(medians(problem), delay=[])
    for seed in ("a", -1, 1.5, True):
        with pytest.raises(ValueError, match=r"seed must be a whole number, 0 or more, not"):
            problem.predict(medians(problem), seed=seed)


@pytest.mark.parametrize("seed", ["a", None, -1, 1.5, True])
def test_every_search_and_every_draw_has_a_whole_seed(problem, seed):
    with pytest.raises(ValueError, match=r"seed must be a whole number, 0 or more, not"):
        problem.least_squares(seed=seed)
    with pytest.raises(ValueError, match=r"seed must be a whole number, 0 or more, not"):
        problem.sample_posterior(seed=seed)


@pytest.mark.parametrize(
    ("options", "said"),
    [
        ({"ensembles": 2.5}, "ensembles must be a whole number"),
        ({"walkers": "many"}, "walkers must be a whole number, 10 or more, not 'many'"),
        ({"walkers": 3}, "walkers must be a whole number, 10 or more, not 3"),
        ({"ess": "many"}, "ess must be a positive number of effective draws, not 'many'"),
        ({"rhat": None}, "rhat must be above 1"),
        ({"max_steps": 1e4}, "max_steps must be a whole number of steps"),
    ],
)
def test_sampling_refuses_its_arguments_before_the_search(problem, monkeypatch, options, said):
    monkeypatch.setattr(inv.Inversion, "least_squares", lambda *_, **__: pytest.fail("searched"))
    with pytest.raises(ValueError, match=said):
        problem.sample_posterior(seed=1, **options)


def test_least_squares_needs_a_whole_number_of_starts(problem):
    for starts in ("a", 0, 2.5):
        with pytest.raises(ValueError, match="starts must be a whole number, 1 or more, not"):
            problem.least_squares(seed=1, starts=starts)


@pytest.mark.parametrize(
    ("options", "said"),
    [
        ({"time_zero": stats.norm(1e4, 1)}, r"Time zero is at 10000 ps .* and 0 of the .* come after it"),
        ({"time_zero": 5e3}, r"Time zero is at 5000 ps .* at least 20 must"),
        (
            {"time_zero": stats.norm},
            "time_zero = stats.norm is a family of distributions, not yet one of them",
        ),
        (
            {"time_zero": stats.norm(0, -1)},
            r"time_zero has norm\(0, -1\) as its prior, which has no quantiles",
        ),
        ({"noise": 3}, "noise = 3; give 'correlated', 'white', 'student' or a mapping"),
        ({"noise": {"white": 1e-5}}, r"noise\.white = 1e-05; it is always sought"),
        ({"noise": {"discrepancy": stats.norm(0, 1)}}, r"1% quantile does not fit. noise\.discrepancy"),
    ],
)
def test_an_inversion_refuses(problem, options, said):
    with pytest.raises(ValueError, match=said):
        inv.Inversion(bonded(), SETUP, problem.trace, **options)


def test_a_trace_that_ends_before_the_pulse_is_refused():
    delay = np.linspace(-50, -5, 300)
    trace = inv.make_trace(delay, reflectance_change=np.random.default_rng(1).standard_normal(300))
    with pytest.raises(ValueError, match=r"0 of the 300 fitted delays, from -50 to -5 ps, come after it"):
        inv.Inversion(bonded(), SETUP, trace, time_zero=0.0)


def test_swapped_arguments_are_named(problem):
    with pytest.raises(ValueError, match="Got a PumpProbe and a Stack; give a Stack first, then a PumpProbe"):
        inv.Inversion(SETUP, bonded(), problem.trace)
    with pytest.raises(ValueError, match="Got a PumpProbe and a Stack; give a Stack first, then a PumpProbe"):
        inv.simulate(SETUP, bonded(), [1.0, 2.0])
    with pytest.raises(ValueError, match="joint takes a sequence of Inversion, and got a NoneType"):
        inv.Inversion.joint([problem, None])


@pytest.mark.parametrize(
    ("delay", "options", "said"),
    [
        ([], {}, "There is no delay; give one or more"),
        (
            [1.0, 2.0],
            {"values": {"Al.thickness": np.nan}},
            r"Al\.thickness = nan is outside 0\.1 to 1e\+06 nm",
        ),
        ([1.0, 2.0], {"values": {"Al.thickness": -3.0}}, r"Al\.thickness = -3 is outside"),
        ([1.0, 2.0], {"time_zero": np.nan}, "time_zero = nan is outside"),
    ],
)
def test_simulate_refuses(delay, options, said):
    with pytest.raises(ValueError, match=said):
        inv.simulate(bonded(), SETUP, delay, **options)


def test_the_fingerprint_holds_the_priors_that_are_used(problem):
    """The same arguments with other defaults, as after an update of the library, are another problem."""
    again = inv.Inversion(bonded(), SETUP, problem.trace, **problem.arguments)
    assert again.fingerprint() == problem.fingerprint()
    again.posterior = replace(
        again.posterior,
        parameters=parameters({**again.priors, "noise.white": stats.lognorm(1.0, scale=1e-8)}),
    )
    assert again.fingerprint() != problem.fingerprint()
    near = again.priors["time_zero"].args[1] * (1 + 1e-12)
    same = inv.Inversion(bonded(), SETUP, problem.trace, **problem.arguments)
    same.posterior = replace(
        same.posterior, parameters=parameters({**same.priors, "time_zero": stats.norm(0, near)})
    )
    assert same.fingerprint() == problem.fingerprint()


def test_the_constants_say_who_gave_them():
    bond = inv.Interface(boundary_conductance=100.0, areal_mass=1.0)
    parts = (inv.Layer("Al", thickness=60.0), bond, inv.Layer("Ti", thickness=5.0))
    bound = bind(inv.Stack(*parts, inv.Substrate("Si", orientation="100")), SETUP)
    source = {(c["place"], c["field"]): c["source"] for c in bound.constants}
    assert source["Al|Ti", "boundary_conductance"] == source["Al|Ti", "areal_mass"] == "given by the user"
    assert source["Al|Ti", "roughness"] == source["Al|Ti", "compliance"] == "the default"
    assert source["Ti|Si", "boundary_conductance"] == "welded: no Interface stands there"
    assert source["Si", "electron_phonon_coupling"] == source["Al", "attenuation_time"] == "the default"


def test_a_coefficient_given_as_a_number_is_said_to_be_eliminated():
    film = inv.Layer("Al", thickness=60.0, dn_dstrain=1.5 + 0.2j, dn_dT=(stats.norm(1e-4, 1e-5), 0.0))
    said = eliminated_numbers(inv.Stack(film, film, inv.Substrate("Si", orientation="100")))
    assert said == [
        "Al.dn_dstrain = 1.5+0.2j was given as a number and is not used in a fit, which finds the coefficients by "
        "itself; to hold it to what you know, give its parts as priors, dn_dstrain=(stats.norm(...), stats.norm(...))."
    ]


def test_the_result_warns_of_coefficients_that_a_fit_eliminates(problem):
    film = inv.Layer("Al", thickness=stats.uniform(40, 40), dn_dT=1e-4)
    parts = (film, inv.Interface(compliance=0.02, boundary_conductance=100.0))
    stack = inv.Stack(*parts, inv.Substrate("Si", orientation="100"))
    own = inv.Inversion(stack, SETUP, problem.trace, time_zero=stats.norm(0, 0.05), noise="white")
    result = own.sample_posterior(seed=1, max_steps=10, ensembles=2, progress=False)
    assert any(
        "Al.dn_dT = 0.0001+0j was given as a number" in w
        for w in json.loads(result.attrs["inverse"])["warnings"]
    )


def test_a_bond_that_stands_in_several_places_is_compared_with_no_interlayer(problem):
    """A layer in its place would be one in every period, and one more below them."""
    bond = inv.Interface(compliance=stats.halfcauchy(scale=0.05), boundary_conductance=100.0)
    period = (inv.Layer("Al", thickness=20.0), bond, inv.Layer("W", thickness=10.0))
    stack = inv.Stack(inv.Repeat(2, *period), bond, inv.Substrate("Si", orientation="100"))
    own = inv.Inversion(stack, SETUP, problem.trace, time_zero=stats.norm(0, 0.05), noise="white")
    assert own.names[:2] == ("Al|W.compliance", "W|Si.compliance")
    assert interlayers(PosteriorDraws(own, medians(own)[None], False), "SiO2") == ()


def test_a_problem_shows_its_unknowns_and_their_priors(problem):
    lines = repr(problem).splitlines()
    assert lines[0] == "Inversion of air / Al / Si, 130 delays of reflectance_change: 5 unknowns, 1 of noise"
    assert lines[1].split() == ["Al.thickness", "uniform(40,", "40)", "nm"]
    assert len(lines) == 6
    joint = inv.Inversion.joint([problem, problem])
    assert repr(joint).startswith(
        "Inversion of air / Al / Si, 130 delays of reflectance_change and air / Al / Si, "
    )


def test_a_fit_shows_its_values_with_units(problem):
    fit = problem.least_squares(seed=1, starts=2)
    lines = repr(fit).splitlines()
    assert lines[0].startswith("Fit of 5 unknowns, ")
    assert re.fullmatch(r"  Al\.thickness +\d\d\.\d+ ± 0\.\d+ nm", lines[1])
    assert len(repr(fit)) < 500


@pytest.mark.parametrize("name", ["time_zero", "noise.white"])
def test_an_unknown_must_not_bear_the_name_of_another(problem, name):
    """Two quantities under one name would be one unknown, with the prior of the second."""
    thickness = inv.Unknown(name, stats.uniform(40, 40))
    with pytest.raises(
        ValueError, match=f"An Unknown is called '{name}', which is the name of another unknown"
    ):
        inv.Inversion(bonded(thickness=thickness), SETUP, problem.trace)
    with pytest.raises(ValueError, match="'d', which is the name of another unknown"):
        time = inv.Unknown("d", stats.norm(0, 0.05))
        own = inv.Unknown("d", stats.uniform(40, 40))
        inv.Inversion(bonded(thickness=own), SETUP, problem.trace, time_zero=time)


@pytest.mark.parametrize("values", ["a", {"Al.thickness": 60.0}])
def test_log_prob_takes_arrays_of_numbers(problem, values):
    with pytest.raises(
        ValueError, match=r"values is a \w+ that is not an array of numbers; give .* \(n, 5\)"
    ):
        problem.log_prob(values)


def test_a_fit_must_be_one_of_this_problem(problem):
    with pytest.raises(ValueError, match="fit is a str; give what least_squares returned"):
        problem.sample_posterior(seed=1, fit="best")
    other = Fit(problem, ("Al.thickness",), (), 1)
    with pytest.raises(
        ValueError, match=r"fit is one of Al\.thickness, but the unknowns here are Al\.thickness, "
    ):
        problem.sample_posterior(seed=1, fit=other)


def test_a_starting_point_holds_numbers(problem):
    point = dict.fromkeys(problem.names, np.nan)
    with pytest.raises(ValueError, match="A starting point holds NaN"):
        problem.least_squares(seed=1, starts=1, points=[point])


def test_a_checkpoint_needs_a_folder(tmp_path):
    identity = Identity("", "1", ("x",), 1, 2, "")
    with pytest.raises(ValueError, match=r"The folder '.*nowhere' of the checkpoint does not exist"):
        Checkpoint(tmp_path / "nowhere" / "run.h5", identity, np.zeros((1, 2, 1)), None, 10)


def test_functions_of_results_say_what_they_take(problem, tmp_path):
    with pytest.raises(ValueError, match="joint takes a sequence of Inversion, such as"):
        inv.Inversion.joint(problem)
    with pytest.raises(ValueError, match="profile takes an Inversion first, not a NoneType"):
        inv.profile(None, "Al.thickness")
    with pytest.raises(ValueError, match="The NoneType carries no list of constants"):
        inv.constants_table(None)
    with pytest.raises(ValueError, match="budget_table got a int; give a mapping of quantities"):
        inv.budget_table(3)
    for call in (inv.load, inv.read_trace, inv.read_index, read_stack):
        with pytest.raises(ValueError, match="Got a NoneType in place of a path; give a text or"):
            call(None)


def test_delays_that_no_pulse_resolves_are_refused_before_they_fill_the_memory():
    with pytest.raises(ValueError, match=r"are \d+ frequencies, more than 1000000; are the delays in ps\?"):
        inv.simulate(bonded(), SETUP, [1.0, 1e7])
    with pytest.raises(ValueError, match=r"delay has shape \(2, 3\); give an array of one dimension"):
        inv.simulate(bonded(), SETUP, np.ones((2, 3)))
    with pytest.raises(ValueError, match="delay is a str that is not numbers"):
        inv.simulate(bonded(), SETUP, "abc")
    with pytest.raises(ValueError, match="values is a list; give a mapping of unknowns to numbers"):
        inv.simulate(bonded(), SETUP, [1.0, 2.0], values=[60.0])


def test_one_channel_may_be_named_without_a_sequence():
    assert list(inv.simulate(bonded(), SETUP, [1.0, 2.0], channels="optical_phase").data_vars) == [
        "optical_phase"
    ]


def test_what_cannot_be_unknown_says_so():
    with pytest.raises(
        ValueError, match=r"PumpProbe\.pulse_rms = a prior, norm, where only a number can stand"
    ):
        inv.PumpProbe(pump=400, probe=800, pulse_rms=stats.norm(0.3, 0.01))


def test_more_functions_say_what_they_take():
    with pytest.raises(
        ValueError, match="heating takes a Stack first, then a PumpProbe, and got a Stack second"
    ):
        inv.heating(SETUP, bonded(), power=10.0)
    with pytest.raises(ValueError, match="check_coverage takes an Inversion first, not a NoneType"):
        inv.check_coverage(None, seed=1)
    with pytest.raises(ValueError, match="There is no delay; give one or more"):
        inv.plot.echoes(bonded(), SETUP, [])
    with pytest.raises(ValueError, match="Repeat got True as its count"):
        inv.Repeat(True, inv.Layer("Al", thickness=5.0))


def test_a_prior_that_no_file_could_rebuild_is_refused_before_the_search(problem, monkeypatch):
    drawn = np.histogram(np.random.default_rng(1).normal(60, 3, 1000))
    own = inv.Inversion(bonded(thickness=stats.rv_histogram(drawn)()), SETUP, problem.trace)
    monkeypatch.setattr(inv.Inversion, "least_squares", lambda *_, **__: pytest.fail("searched"))
    with pytest.raises(
        ValueError, match=r"is not a named scipy\.stats family.*use a named family such as stats\.norm"
    ):
        own.sample_posterior(seed=1)


def test_a_strain_map_takes_the_same_values_as_a_trace():
    with pytest.raises(ValueError, match=r"Al\.thickness = -3 is outside 0\.1 to"):
        inv.strain_map(bonded(), SETUP, [1.0, 2.0], [5.0], values={"Al.thickness": -3.0})
    with pytest.raises(ValueError, match="delay is a str that is not numbers"):
        inv.strain_map(bonded(), SETUP, "a", [5.0])
