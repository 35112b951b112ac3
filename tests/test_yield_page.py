"""The page of first yield: its curves are the parent's yield over the largest fibre stress, in every direction."""

import re

import numpy as np
import pytest

from homog import cli, directional
from homog.columns import evaluate
from homog.effective import homogenize
from homog.errors import InputError
from homog.families import build
from homog.materials import material
from homog.plots import polar_figure
from homog.plots.dial import TURN
from homog.plots.page import _yield_panels
from homog.results import Results

PLA = material("PLA")


def effective(name, **given):
    return homogenize(build(name, material=PLA, **given), model="timoshenko")


def said(figure):
    return "\n".join(t.get_text() for t in [*figure.texts, *(t for ax in figure.axes for t in ax.texts)])


@pytest.mark.parametrize("name", ["reentrant-honeycomb", "square-grid", "octet"])
def test_curves_meet_the_columns_on_the_axes(name):
    found = effective(name)
    values = {k: v[0] for k, v in evaluate(found).items() if k.startswith("yield")}
    pull, shear, strain = _yield_panels(Results(found))
    for panel in (pull, shear, strain):
        for column, degrees in panel.on_axis.items():
            at = np.argmin(np.abs(np.degrees(TURN) - degrees))
            assert panel.curves[0][at] == pytest.approx(values[column], rel=1e-9), column
        curve = panel.curves[0]
        low, high = panel.lowest, panel.highest
        assert low[0] == pytest.approx(curve.min(), rel=1e-5) and high[0] == pytest.approx(curve.max(), rel=1e-5)


def test_a_square_grid_in_every_direction():
    # pull at a: walls along 1 and 2 carry N = l c^2, l s^2, and M = l^2 s c/2 each; t = 1, l = 10
    pull, shear, strain = _yield_panels(Results(effective("square-grid", length=10.0, thickness=1.0)))
    c, s = np.cos(TURN), np.sin(TURN)
    fibre = 10.0 * np.maximum(c**2, s**2) + 6.0 * 50.0 * np.abs(s * c)
    np.testing.assert_allclose(pull.curves[0], PLA.yield_MPa / fibre, rtol=1e-9)
    # shear at a: N = l sin 2a, M = l^2 cos 2a/2
    fibre = 10.0 * np.abs(np.sin(2.0 * TURN)) + 6.0 * 50.0 * np.abs(np.cos(2.0 * TURN))
    np.testing.assert_allclose(shear.curves[0], PLA.yield_MPa / fibre, rtol=1e-9)
    C = effective("square-grid", length=10.0, thickness=1.0).stiffness
    np.testing.assert_allclose(strain.curves[0], pull.curves[0] / directional.young(C, angle=TURN), rtol=1e-12)


def test_a_spatial_cell_has_a_second_plane():
    # an octet turned by 90 deg about axis 1 is itself: its dashed curve is symmetric, and at 0 deg both planes meet
    pull, shear, _ = _yield_panels(Results(effective("octet")))
    assert len(pull.curves) == 2 and pull.curves[0][0] == pytest.approx(pull.curves[1][0], rel=1e-9)
    quarter = np.argmin(np.abs(np.degrees(TURN) - 90.0))
    at45 = np.argmin(np.abs(np.degrees(TURN) - 45.0))
    assert pull.curves[1][quarter] == pytest.approx(pull.curves[0][at45], rel=1e-9)  # [011] is as good as [110]
    assert np.abs(shear.curves[0] / shear.curves[1] - 1.0).max() > 0.1


def test_the_page_says_what_it_is():
    words = said(polar_figure(effective("hexagonal-honeycomb"), quantity="yield"))
    for part in ("Pull at first yield, MPa", "Shear at first yield, MPa", "Strain at first yield", "extreme fibre",
                 "inner corners of the solid see more", "the parent yields at 50 MPa", "no buckling", "screening only",
                 "yield 12"):  # fmt: skip
        assert part in re.sub(r"\s+", " ", words), part
    assert "Poisson" not in words


def test_what_has_no_first_yield_is_refused():
    with pytest.raises(InputError, match="has no yield"):
        polar_figure(homogenize(build("square-grid"), model="timoshenko"), quantity="yield")
    with pytest.raises(InputError, match="without a cross section"):
        polar_figure(homogenize(build("miura-fold", material=PLA)), quantity="yield")
    with pytest.raises(InputError, match="Unknown quantity 'yeld'; nearest known: yield"):
        polar_figure(effective("square-grid"), quantity="yeld")


def test_on_the_command_line(tmp_path, capsys):
    out = tmp_path / "y.png"
    line = ["polar", "square-grid", "--quantity", "yield", "--model", "timoshenko", "--out", str(out)]
    assert cli.main([*line, "--modulus", "2000", "--yield", "40"]) == 0
    assert out.stat().st_size > 10_000
    assert cli.main([*line, "--overwrite"]) == 2
    assert "has no yield" in capsys.readouterr().err
    assert cli.main(["evaluate", "square-grid", "--model", "timoshenko", "--yield", "forty"]) == 2
    assert "--yield = 'forty' is not a number" in capsys.readouterr().err.replace("Option ", "")
    assert cli.main(["evaluate", "square-grid", "length=10", "thickness=1", "--yield", "40", "--modulus", "2000"]) == 0
    assert re.search(r"yield_1_MPa +4\b", capsys.readouterr().out)
