"""Elastic constants from velocities: published numbers, closed forms, missing labels, what is not reached."""

import json

import numpy as np
import pytest
from scipy import integrate, stats

import inverse as inv
from inverse.elastic import StiffnessTensor, averages, plane_waves
from inverse.study.stiffness.constants import ConstantsInversion
from inverse.study.stiffness.measurements import BrillouinShift, EchoTime, Velocity

LABELS = (
    "longitudinal",
    "transverse",
    "longitudinal",
    "fast transverse",
    "slow transverse",
    "longitudinal",
    "transverse",
)
DIRECTIONS = ("100", "100", "110", "110", "110", "111", "111")


def table(velocity: list[float], uncertainty: float, labels: tuple[str, ...] = LABELS) -> dict:
    return {
        "direction": list(DIRECTIONS),
        "branch": list(labels),
        "velocity": velocity,
        "uncertainty": [uncertainty] * len(velocity),
    }


# Density, c11, c12, c44, and [100] L T, [110] L T1 T2, [111] L T in km/s as printed.
PUBLISHED = {
    # Ioffe Institute, NSM archive; constants of McSkimin and Andreatch 1972.
    "diamond": ((3.515, 1079.0, 124.0, 578.0), [17.52, 12.82, 18.32, 12.82, 11.66, 18.58, 12.06]),
    # Ioffe Institute, NSM archive, AlGaAs at x = 0 (Adachi 1985); constants of "Elastic Moduli of GaAs at
    # Moderate Pressures".
    "GaAs": ((5.3169, 118.77, 53.72, 59.44), [4.73, 3.34, 5.24, 3.34, 2.47, 5.40, 2.79]),
    # matprop.ru, GaInP at x = 0.
    "InP": ((4.81, 101.1, 56.1, 45.6), [4.58, 3.08, 5.08, 3.08, 2.16, 5.23, 2.51]),
}


@pytest.mark.parametrize("labels", [LABELS, (None,) * 7], ids=["labelled", "unlabelled"])
@pytest.mark.parametrize("name", sorted(PUBLISHED))
def test_published_velocities_give_the_published_constants(name: str, labels: tuple) -> None:
    (density, *constants), printed = PUBLISHED[name]
    # Two printed digits: half a digit either way, and the sources differ by 0.007 at most.
    fit = ConstantsInversion("cubic", table(printed, 0.004, labels), density=density).least_squares(seed=1)
    assert fit.names == ("c11", "c12", "c44")
    np.testing.assert_allclose(fit.values, constants, atol=3.0 * fit.sd.max())
    assert np.all(np.abs(fit.values - constants) < 3.0 * fit.sd)
    assert fit.sd.max() < 0.01 * constants[0]


@pytest.mark.parametrize(
    ("constants", "velocities"),
    [
        # CRC constants of Si, Cu and Mo; velocities computed from them outside this library, 0.1 m/s.
        ((2.3296, 165.78, 63.94, 79.62), [8435.8, 5846.2, 9136.9, 5846.2, 4675.2, 9358.9, 5095.5]),
        ((8.932, 168.3, 121.2, 75.7), [4340.8, 2911.2, 4968.0, 2911.2, 1623.8, 5160.1, 2140.7]),
        ((10.2284, 463.7, 157.8, 109.2), [6733.1, 3267.4, 6407.6, 3867.0, 3267.4, 6295.4, 3678.0]),
    ],
    ids=["Si", "Cu", "Mo"],
)
def test_velocities_of_cubic_crystals_give_back_their_constants(constants: tuple, velocities: list) -> None:
    given = table([v / 1000 for v in velocities], 3e-5)
    fit = ConstantsInversion("cubic", given, density=constants[0]).least_squares(seed=3)
    np.testing.assert_allclose(fit.values, constants[1:], atol=0.02)
    assert len(fit.minima) == 1 and fit.flags == ("", "", "")


def sapphire() -> ConstantsInversion:
    # CRC constants at 3.99 g/cm3; c: L T, x and y: L T1 T2 in m/s, computed outside this library.
    rows = {"c": (11184.4, 6077.8), "x": (11164.6, 6763.4, 5742.2), "y": (11182.4, 6463.5, 6045.1)}
    labels = ("longitudinal", "fast transverse", "slow transverse")
    given = [
        Velocity(direction=d, value=v / 1000, uncertainty=1e-3, branch=labels[i], name=f"{d}{i}")
        for d, values in rows.items()
        for i, v in enumerate(values)
    ]
    return ConstantsInversion("trigonal_6", given, density=3.99)


def test_sapphire_along_its_axes_leaves_the_sign_of_c14_open_and_reports_both_minima() -> None:
    # Along c, x and y only the square of c14 enters the secular equations, with c13 beside it along y.
    problem = sapphire()
    fit = problem.least_squares(seed=1)
    values = dict(zip(fit.names, fit.values, strict=True))
    published = {"c11": 497.35, "c12": 163.97, "c33": 499.11, "c44": 147.39}
    for name, value in published.items():
        assert values[name] == pytest.approx(value, abs=0.7)
    signs = {int(np.sign(b.values[fit.names.index("c14")])) for b in fit.minima}
    assert signs == {-1, 1}
    for basin in fit.minima:
        assert abs(basin.values[fit.names.index("c14")]) == pytest.approx(23.58, abs=0.7)


def test_what_is_not_reached_is_said_and_its_posterior_is_the_prior_of_stable_crystals() -> None:
    labels = ("longitudinal", "transverse")
    rows = [
        Velocity(direction="c", value=v, uncertainty=0.005, branch=b)
        for v, b in zip((11.1844, 6.0778), labels, strict=True)
    ]
    priors = {
        "c11": stats.norm(497, 20),
        "c12": stats.norm(164, 20),
        "c13": stats.norm(112, 20),
        "c14": -23.58,
    }
    problem = ConstantsInversion("trigonal_6", rows, density=3.99, priors=priors)
    said = problem.reached(problem.least_squares(seed=1).values)
    assert said == (
        "c33 and c44 are reached.",
        "c11, c12, c13 and c14 are not reached by any of the 2 velocities.",
    )
    result = problem.sample_posterior(seed=2, ess=400, progress=False)
    warnings = json.loads(result.attrs["inverse"])["warnings"]
    assert "c11, c12, c13: prior only" in warnings[-1]
    rows_by_name = inv.table(result)
    for name in ("c11", "c12", "c13"):
        assert "prior only" in rows_by_name[name].flags
    assert "prior only" not in rows_by_name["c33"].flags
    assert rows_by_name["c33"].median == pytest.approx(499.11, abs=1.5)
    assert "c14" in str(inv.constants_table(result))


def test_one_velocity_gives_the_density_of_a_closed_form() -> None:
    # c11 = rho v^2 with everything else known: posterior = prior x normal(v), by quadrature.
    given = [Velocity(direction="x", value=6.0, uncertainty=0.3, branch="longitudinal")]
    prior = stats.norm(90.0, 15.0)
    problem = ConstantsInversion("isotropic", given, density=2.7, priors={"c11": prior, "c44": 25.0})
    assert problem.names == ("c11",)

    def density(c: float) -> float:
        return float(prior.pdf(c) * stats.norm(np.sqrt(c / 2.7), 0.3).pdf(6.0))

    grid = np.array([[60.0], [95.0], [130.0]])
    np.testing.assert_allclose(problem.log_prob(grid), np.log([density(c) for c in grid[:, 0]]), rtol=1e-12)
    mass, mean = (integrate.quad(lambda c, p=p: c**p * density(c), 34.0, 200.0)[0] for p in (0, 1))
    square = integrate.quad(lambda c: c**2 * density(c), 34.0, 200.0)[0]
    sd = np.sqrt(square / mass - (mean / mass) ** 2)
    draws = problem.sample_posterior(seed=5, ess=4000, progress=False)["posterior"]["c11"].to_numpy()
    assert draws.mean() == pytest.approx(mean / mass, abs=4 * sd / np.sqrt(4000))
    assert draws.std() == pytest.approx(sd, rel=0.05)


def test_least_squares_propagates_as_the_gum_does() -> None:
    # dc = 2 rho v dv and c / rho drho in quadrature (JCGM 100, 5.1.2), priors too wide to matter.
    given = [Velocity(direction="x", value=6.42, uncertainty=0.02, branch="longitudinal")]
    priors = {"c11": stats.uniform(40.0, 1900.0), "c44": 25.0}
    density = stats.norm(2.70, 0.01)
    fit = ConstantsInversion("isotropic", given, density=density, priors=priors).least_squares(seed=1)
    expected = 2.70 * 6.42**2 * np.hypot(2 * 0.02 / 6.42, 0.01 / 2.70)
    assert fit.sd[fit.names.index("c11")] == pytest.approx(expected, rel=2e-3)


def test_brillouin_shifts_of_vitreous_silica_give_its_velocities() -> None:
    # Stoicheff, Flubacher, Leadbetter and Morrison 1959: 1.68 and 1.04 cm-1 = 50.3 and 31.2 GHz at 253.65 nm,
    # taken at 90 degrees (inferred). Malitson's index 1.50551; handbook velocities 5968 and 3764 m/s.
    rows = [
        BrillouinShift(
            direction="x",
            value=f,
            uncertainty=2e-4,
            branch=b,
            wavelength=253.65,
            refractive_index=1.50551,
            angle=90.0,
        )
        for f, b in ((0.0503, "longitudinal"), (0.0312, "transverse"))
    ]
    fit = ConstantsInversion("isotropic", rows, density=2.203).least_squares(seed=1)
    velocities = np.sqrt(fit.values / 2.203)
    np.testing.assert_allclose(velocities, [5.968, 3.764], rtol=0.014)
    sharp = BrillouinShift(
        direction="x",
        value=0.07084,
        uncertainty=1e-5,
        branch="longitudinal",
        wavelength=253.65,
        refractive_index=1.50551,
    )
    # 70.84 GHz in backscattering, computed outside this library.
    alone = ConstantsInversion("isotropic", [sharp], density=2.203, priors={"c44": 31.2}).least_squares(
        seed=1
    )
    assert np.sqrt(alone.values[0] / 2.203) == pytest.approx(5.968, abs=2e-3)


def test_index_and_thickness_may_be_unknown_and_shared() -> None:
    # 100 nm Al: 31.153 ps at 6.420 nm/ps (2 d / v). Two echoes of one film share its thickness.
    thickness = inv.Unknown("d_film", stats.norm(100.0, 2.0))
    n = inv.Unknown("n_film", stats.norm(1.5, 0.01))
    rows = [
        EchoTime(direction="x", value=31.153, uncertainty=0.01, branch="longitudinal", thickness=thickness),
        EchoTime(direction="x", value=65.789, uncertainty=0.01, branch="transverse", thickness=thickness),
        BrillouinShift(
            direction="x", value=2 * 1.5 * 6.42 / 532, uncertainty=1e-6, branch="longitudinal", wavelength=532.0,
            refractive_index=n,
        ),
    ]  # fmt: skip
    priors = {"c11": stats.uniform(20, 200), "c44": stats.uniform(5, 50)}
    problem = ConstantsInversion("isotropic", rows, density=2.70, priors=priors)
    assert problem.names == ("c11", "c44", "d_film", "n_film")
    fit = problem.least_squares(seed=1)
    by_name = dict(zip(fit.names, fit.values, strict=True))
    assert by_name["c11"] == pytest.approx(2.70 * 6.42**2, rel=5e-3)
    assert by_name["c44"] == pytest.approx(2.70 * 3.04**2, rel=5e-3)
    # Two routes to one velocity: n is known to 0.67 %, the thickness to 2 %, so n decides.
    spread = 2 * 2.70 * 6.42**2 / np.hypot(1.5 / 0.01, 100.0 / 2.0)
    assert fit.sd[0] == pytest.approx(spread, rel=0.03)
    assert problem.reached(fit.values)[-2:] == (
        "The size of what is reached rests on the prior of d_film: an echo time gives velocity over thickness.",
        "The size of what is reached rests on the prior of n_film: a Brillouin shift gives velocity times "
        "refractive index.",
    )


def test_a_missing_label_is_marginalised_with_the_probability_of_bayes_theorem() -> None:
    # One wave of an isotropic solid at 3.1 nm/ps: transverse (c44 known, predicts 3.043) or longitudinal.
    # P(longitudinal) is its share of the evidence, by quadrature over c11.
    density, c44, sigma = 2.7, 25.0, 0.05
    prior = stats.uniform(35.0, 100.0)
    given = [Velocity(direction="x", value=3.1, uncertainty=sigma)]
    wide = [Velocity(direction="x", value=3.85, uncertainty=0.4)]
    for rows in (given, wide):
        value, sd = rows[0].value, rows[0].uncertainty
        problem = ConstantsInversion("isotropic", rows, density=density, priors={"c11": prior, "c44": c44})
        likelihood = [
            integrate.quad(
                lambda c, x=value, s=sd: prior.pdf(c) * stats.norm(np.sqrt(c / density), s).pdf(x), 35, 135
            )[0],
            *[float(stats.norm(np.sqrt(c44 / density), sd).pdf(value))] * 2,
        ]
        expected = np.array(likelihood) / np.sum(likelihood)
        result = problem.sample_posterior(seed=4, ess=3000, progress=False)
        found = result["labels"]["probability"].sel(measurement="m1").to_numpy()
        np.testing.assert_allclose(found, expected, atol=0.03)
    assert 0.1 < expected[0] < 0.9  # the second case is a real question


def test_the_likelihood_of_an_unknown_branch_is_the_mean_of_all_three() -> None:
    tensor = StiffnessTensor.cubic(c11=165.78, c12=63.94, c44=79.62)
    direction = [1.0, 2.0, 0.5]
    waves = plane_waves(tensor, 2.3296, direction)
    one = ConstantsInversion(
        "cubic", [Velocity(direction=direction, value=5.5, uncertainty=0.4)], density=2.3296
    )
    prior = sum(p.logpdf(v) for p, v in zip(one.priors.values(), tensor.vector, strict=True))
    expected = prior + np.log(stats.norm(waves.phase_velocity, 0.4).pdf(5.5).mean())
    assert one.log_prob(tensor.vector) == pytest.approx([expected], rel=1e-12)


def test_impossible_values_have_probability_zero() -> None:
    problem = ConstantsInversion("cubic", table([8.4, 5.8, 9.1, 5.8, 4.7, 9.4, 5.1], 0.1), density=2.33)
    unstable = [[100.0, 120.0, 80.0], [np.nan, 60.0, 80.0], [160.0, 60.0, -1.0], [160.0, -90.0, 80.0]]
    assert problem.log_prob(unstable).tolist() == [-np.inf] * 4
    assert np.isfinite(problem.log_prob([[165.0, 64.0, 79.0]])).all()
    with pytest.raises(
        ValueError, match=r"values has shape \(2,\); give \(n, 3\) in the order c11, c12, c44"
    ):
        problem.log_prob([1.0, 2.0])


@pytest.mark.parametrize(
    ("symmetry", "changes", "message"),
    [
        (
            "cubic",
            {"priors": {"c13": 100.0}},
            "priors names c13; the independent constants of a cubic crystal are c11, c12, c44",
        ),
        ("cubic", {"priors": {"c11": 1.6e11}}, r"c11 = 1\.6e\+11 is outside .*looks like Pa"),
        ("cubic", {"priors": {"c11": 166.0, "c12": 64.0, "c44": 80.0}}, "nothing is sought"),
        ("kubic", {}, "symmetry 'kubic' is not known"),
        ("cubic", {"density": 2330.0}, r"density = 2330 is outside .*looks like kg/m3"),
        (
            "cubic",
            {
                "density": inv.Unknown("a", stats.norm(2.3, 0.1)),
                "priors": {"c11": inv.Unknown("a", stats.norm(166, 1))},
            },
            "The name 'a' stands for a c11 and a density",
        ),
    ],
)
def test_a_problem_that_makes_no_sense_is_refused(symmetry: str, changes: dict, message: str) -> None:
    given = [Velocity(direction="100", value=8.4, uncertainty=0.1)]
    with pytest.raises(ValueError, match=message):
        ConstantsInversion(symmetry, given, **{"density": 2.33, **changes})


def test_velocities_that_no_stable_crystal_of_the_priors_has_still_give_the_nearest_one() -> None:
    # [110] T2 = 0 would need c11 = c12: least squares stops at the edge of stability, inside it.
    given = table([8.4357, 5.8462, 9.1369, 5.8462, 0.2, 9.3588, 5.0955], 0.005)
    fit = ConstantsInversion("cubic", given, density=2.3296).least_squares(seed=1)
    c11, c12, _ = fit.values
    assert c11 > c12 and fit.best.minimum.cost > 100


@pytest.fixture(scope="module")
def silicon() -> tuple[ConstantsInversion, object]:
    given = table([8.4357, 5.8462, 9.1369, 5.8462, 4.6752, 9.3588, 5.0955], 0.02)
    problem = ConstantsInversion("cubic", given, density=stats.norm(2.3296, 0.002))
    return problem, problem.sample_posterior(seed=7, progress=False)


def test_the_result_has_the_schema_of_every_other(silicon: tuple, tmp_path: object) -> None:
    result = silicon[1]
    posterior = result["posterior"].to_dataset()
    assert posterior["c11"].dims == ("chain", "draw") and posterior.sizes["chain"] == 4
    assert posterior["c11"].attrs["units"] == "GPa" and posterior["c11"].attrs["role"] == "unknown"
    assert json.loads(posterior["density"].attrs["prior"])["family"] == "norm"
    assert posterior["poisson_ratio"].attrs["role"] == "derived"
    assert set(result.children) >= {
        "sample_stats",
        "prior",
        "observed_data",
        "posterior_predictive",
        "labels",
    }
    assert json.loads(result.attrs["inverse"])["convergence"]["converged"]
    path = inv.save(result, tmp_path / "silicon.nc")
    loaded = inv.load(path)
    again = ConstantsInversion.from_result(loaded).sample_posterior(seed=7, progress=False)
    np.testing.assert_array_equal(again["posterior"]["c12"], posterior["c12"])
    text = str(inv.table(loaded))
    assert "Data: 7 measurements" in text and "c44" in text and "young_modulus" in text
    assert "rests on the prior of density" in text


def test_another_kind_of_result_cannot_be_rebuilt_as_constants(silicon: tuple) -> None:
    other = silicon[1].copy()
    other.attrs["inverse"] = json.dumps({"record": {"parts": []}})
    with pytest.raises(ValueError, match="not one of ConstantsInversion"):
        ConstantsInversion.from_result(other)


def test_what_is_for_traces_says_so(silicon: tuple) -> None:
    with pytest.raises(
        ValueError, match=r"not of traces; constants are rebuilt by ConstantsInversion\.from_result"
    ):
        inv.what_data_added(silicon[1])
    with pytest.raises(ValueError, match=r"plot\.fit draws traces"):
        inv.plot.fit(silicon[1])


def test_the_corner_plot_shows_constants_and_their_priors(silicon: tuple) -> None:
    figure = inv.plot.corner(silicon[1], names=["c11", "c12", "c44"])
    assert len(figure.axes) == 9


def test_moduli_are_those_of_every_draw(silicon: tuple) -> None:
    posterior = silicon[1]["posterior"].to_dataset().isel(draw=slice(0, None, 97))
    for chain in range(4):
        for draw in range(posterior.sizes["draw"]):
            one = posterior.isel(chain=chain, draw=draw)
            hill = averages(
                StiffnessTensor.cubic(c11=one["c11"].item(), c12=one["c12"].item(), c44=one["c44"].item())
            )
            assert one["young_modulus"].item() == pytest.approx(float(hill.young), rel=1e-12)
            assert one["universal_anisotropy"].item() == pytest.approx(
                float(hill.universal_anisotropy), rel=1e-10
            )
            assert one["bulk_modulus"].item() == pytest.approx(
                (one["c11"].item() + 2 * one["c12"].item()) / 3
            )


def test_predictions_lie_on_the_measurements(silicon: tuple) -> None:
    problem, result = silicon
    predicted = result["posterior_predictive"]["value"].mean(["chain", "draw"]).to_numpy()
    assert np.all(np.abs(predicted - problem.posterior.value) < 0.02)


def test_equal_seeds_give_equal_draws_and_numpy_is_left_alone(silicon: tuple) -> None:
    problem, result = silicon
    before = np.random.get_state()[1].copy()
    again = problem.sample_posterior(seed=7, progress=False)
    np.testing.assert_array_equal(again["posterior"]["c11"], result["posterior"]["c11"])
    other = problem.sample_posterior(seed=8, progress=False)
    assert not np.array_equal(other["posterior"]["c11"][:, :50], result["posterior"]["c11"][:, :50])
    np.testing.assert_array_equal(np.random.get_state()[1], before)


def test_a_checkpoint_of_other_data_is_refused_and_ensembles_may_run_elsewhere(
    silicon: tuple, tmp_path
) -> None:
    from concurrent.futures import ProcessPoolExecutor

    problem, result = silicon
    path = tmp_path / "run.h5"
    with ProcessPoolExecutor(2) as pool:
        elsewhere = problem.sample_posterior(seed=7, progress=False, checkpoint=path, executor=pool)
    np.testing.assert_array_equal(elsewhere["posterior"]["c11"], result["posterior"]["c11"])
    other = ConstantsInversion(
        "cubic", table([8.5, 5.8, 9.1, 5.8, 4.7, 9.4, 5.1], 0.02), density=problem.density
    )
    with pytest.raises(ValueError, match="belongs to another run"):
        other.sample_posterior(seed=7, progress=False, checkpoint=path)
