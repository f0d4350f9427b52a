"""Pictures of the diagnostics, tested on their artists, labels and data."""

import json
import math

import numpy as np
import pytest
import xarray as xr
from fake_results import draws, tree
from matplotlib.figure import Figure

from inverse import plot
from inverse.inference.checks.combinations import Combination
from inverse.inference.checks.diagnostics import DataAdded, Learned
from inverse.inference.checks.model_checks import ChannelCheck, ModelCheck
from inverse.plot.style import COLUMN


def one(name: str, narrowed: float, data: float, shares: tuple, bits: float = 1.5) -> Learned:
    role = "noise" if math.isnan(data) else "unknown"
    return Learned(name, "nm", role, (0.0, 1.0), (0.4, 0.6), narrowed, bits, bits, data, shares, (), ())


@pytest.fixture(scope="module")
def added() -> DataAdded:
    unknowns = (
        one("Al.thickness", 15.0, 0.2, (("Al.velocity", 0.8),), 3.4),
        one("Al.velocity", 1.0, 0.1, (("Al.velocity", 0.9),), 0.0),
        one("noise.white", 12.0, math.nan, ()),
    )
    names = ("Al.thickness", "Al.velocity")
    tied = Combination(
        names, (1.0, -1.0), "product", "Al.thickness/Al.velocity", 9.3, 4e-3, "", (0.015, 0.015)
    )
    return DataAdded(unknowns, (tied,), (), names, np.array([1e-4, 0.9]), np.eye(2))


def channel(**changes) -> ChannelCheck:
    delay = np.linspace(-5, 60, 100)
    sd = np.array([-1.96, -1.0, 0.0, 1.0, 1.96])[:, None]
    given = {
        "name": "reflectance_change",
        "unit": "1",
        "delay": delay,
        "residual": 1e-6 * np.sin(delay),
        "innovation": np.sin(delay),
        "bands": 1e-4 + 1e-6 * sd * np.ones(100),
        "inside": (0.7, 0.95),
        "autocorrelation": 0.5 ** np.arange(1, 21),
        "p_correlation": 0.4,
        "p_chi_square": 0.5,
        "p_largest": 0.5,
        "outliers": np.array([]),
        "noise_model": "white",
        "white": 1e-6,
        "p_drift": 0.3,
        "size": 0.1,
        "time": 3.0,
        "excess": math.nan,
        **changes,
    }
    return ChannelCheck(**given)


def profiled(open_end: str = "") -> xr.Dataset:
    value = np.linspace(59.6, 60.4, 17)
    intervals = {68: [[59.9, 60.1]], 95: [[59.8, 60.2]]}
    return xr.Dataset(
        {"deviance": ("value", ((value - 60) / 0.1) ** 2)},
        {"value": value},
        {
            "name": "Al.thickness",
            "units": "nm",
            "open": open_end,
            **{f"interval_{k}": json.dumps(v) for k, v in intervals.items()},
        },
    )


def texts(figure: Figure) -> str:
    return " ".join(t.get_text() for t in figure.findobj(lambda a: hasattr(a, "get_text")))


def test_learned_draws_narrowing_bits_and_shares(added: DataAdded) -> None:
    figure = plot.learned(added)
    assert figure.get_size_inches()[0] == pytest.approx(COLUMN)
    left, right = figure.axes
    assert [p.get_width() for p in left.patches] == [12.0, 1.0, 15.0]
    assert left.get_xscale() == "log"
    assert [t.get_text() for t in left.get_yticklabels()][::-1] == [
        "Al.thickness",
        "Al.velocity",
        "noise.white",
    ]
    data, own, other = right.containers
    np.testing.assert_allclose([p.get_width() for p in data], [10.0, 20.0])
    np.testing.assert_allclose([p.get_width() for p in own], [90.0, 0.0], atol=1e-12)
    np.testing.assert_allclose([p.get_width() for p in other], [0.0, 80.0], atol=1e-12)
    assert "3.4 bits" in texts(figure)
    assert "Al.thickness/Al.velocity is measured" in texts(figure).replace("\n", " ")


def test_shares_differ_without_colour(added: DataAdded) -> None:
    _, right = plot.learned(added).axes
    looks = {(c[0].get_facecolor(), c[0].get_hatch()) for c in right.containers}
    assert len(looks) == 3
    assert all(len(set(face[:3])) == 1 for face, _ in looks)


def test_residuals_draw_bands_about_zero_and_the_verdict() -> None:
    check = ModelCheck((channel(p_drift=0.001, size=4.0),))
    figure = plot.residuals(check)
    above, below = figure.axes
    line = next(a for a in above.get_lines() if a.get_label() == "residual")
    np.testing.assert_allclose(line.get_ydata(), np.sin(check.channels[0].delay))
    assert above.get_ylabel() == "residual (10⁻⁶)"
    band = above.collections[0].get_paths()[0].vertices[:, 1]
    assert (band.min(), band.max()) == pytest.approx((-1.96, 1.96))
    np.testing.assert_allclose([p.get_height() for p in below.patches], check.channels[0].autocorrelation)
    said = figure.get_suptitle().replace("\n", " ")
    assert said == check.verdict
    assert "residuals are correlated over 3 ps and 4 times the noise" in said


def test_two_channels_give_four_panels() -> None:
    check = ModelCheck((channel(), channel(name="optical_phase", unit="rad")))
    figure = plot.residuals(check)
    assert len(figure.axes) == 4
    assert figure.axes[2].get_ylabel() == "residual (10⁻⁶ rad)"
    assert figure.get_suptitle().replace("\n", " ") == check.verdict


def test_profile_draws_the_likelihood_and_where_the_intervals_end() -> None:
    figure = plot.profile(profiled())
    (ax,) = figure.axes
    curve = next(a for a in ax.get_lines() if a.get_label() == "profile likelihood")
    np.testing.assert_allclose(curve.get_ydata(), np.exp(-0.5 * ((curve.get_xdata() - 60) / 0.1) ** 2))
    dashed = [a for a in ax.get_lines() if a.get_linestyle() == "--"]
    np.testing.assert_allclose([a.get_xdata() for a in dashed], [[59.9, 60.1], [59.8, 60.2]])
    np.testing.assert_allclose([a.get_ydata()[0] for a in dashed], [0.6099, 0.1465], atol=1e-4)
    assert ax.get_xlabel() == "Al.thickness (nm)"


def test_profile_stands_beside_the_posterior() -> None:
    """The histogram peaks at one and where the draws do."""
    figure = plot.profile(profiled(), tree())
    (ax,) = figure.axes
    outline = ax.collections[0].get_paths()[0].vertices
    assert outline[:, 1].max() == pytest.approx(1.0)
    at = outline[outline[:, 1] > 0.9, 0].mean()
    assert at == pytest.approx(np.median(draws()["Al.thickness"]), abs=0.1)


def test_wrong_arguments_are_refused() -> None:
    with pytest.raises(ValueError, match=r"plot\.profile takes what inverse\.profile gave, not DataTree"):
        plot.profile(tree())
    other = profiled()
    other.attrs["name"] = "Cu.thickness"
    with pytest.raises(ValueError, match=r"The posterior has no 'Cu\.thickness'"):
        plot.profile(other, tree())
    with pytest.raises(ValueError, match="Got int instead of a result"):
        plot.learned(1)
