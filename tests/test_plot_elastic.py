"""The picture of slowness, velocity and ray curves."""

import numpy as np
import pytest
from matplotlib.figure import Figure

from inverse.elastic import StiffnessTensor, plane_section
from inverse.plot.elastic_figure import elastic_section

COPPER = StiffnessTensor.cubic(c11=168.3, c12=121.2, c44=75.7)


@pytest.mark.parametrize(
    ("quantity", "unit"),
    [("slowness", "ps/nm"), ("phase velocity", "nm/ps"), ("group velocity", "nm/ps")],
)
def test_picture_shows_the_curves_with_units_and_names(quantity: str, unit: str) -> None:
    section = plane_section(COPPER, 8.932, "1-10", "001", points=61)
    ax = elastic_section(section, quantity)
    for branch, line in enumerate(ax.lines):
        np.testing.assert_array_equal(line.get_xydata(), section.curve(quantity)[:, branch])
    assert [line.get_label() for line in ax.lines] == list(section.labels)
    assert ax.get_xlabel() == f"{quantity} along [0 0 1] ({unit})"
    assert ax.get_ylabel() == f"{quantity} along [-1 -1 0] ({unit})"
    assert ax.get_aspect() == 1.0
    # Told apart without colour.
    assert len({line.get_linestyle() for line in ax.lines}) == 3
    assert ax.figure.get_size_inches()[0] == pytest.approx(90 / 25.4, abs=0.01)
    ax.figure.canvas.draw()


def test_picture_is_drawn_where_asked() -> None:
    ax = Figure().subplots()
    assert elastic_section(plane_section(COPPER, 8.932, (1.0, np.pi, 0.0)), ax=ax) is ax
    assert ax.get_xlabel() == "slowness along [0 0 1] (ps/nm)"
    assert ax.get_ylabel() == "slowness along [0.953 -0.303 0.000] (ps/nm)"


def test_unknown_quantity_is_refused() -> None:
    with pytest.raises(ValueError, match="quantity 'energy' is not known; expected 'slowness'"):
        elastic_section(plane_section(COPPER, 8.932, "001"), "energy")
