"""What the figures of a posterior draw, read back from their artists and data."""

import numpy as np
import pytest

pytest.importorskip("emcee")

from fitcore.figures import posterior
from fitcore.sampling.posterior import sample
from observables.errors import UnknownNameError


@pytest.fixture(scope="module")
def chain(problems):
    problem = problems.gaussian(np.array([[1.0, 0.6], [0.6, 1.0]]), lower=[-9, -9], upper=[9, 9])
    return sample(problem, effective=20_000, rng=1, check_widths=False).chain


def area(lines):
    return sum(abs(np.sum(a[:-1, 0] * a[1:, 1] - a[1:, 0] * a[:-1, 1])) / 2 for a in lines)


@pytest.mark.stat
def test_regions_of_the_plane_hold_what_they_say(chain):
    drawing = posterior.plane(chain, "p0", "p1")
    for words, chi2 in (("68.27 %", 2.296), ("95.45 %", 6.180)):
        numbers = {row[1] for row in drawing.rows if row[0] == words}
        lines = [np.array([row[2:] for row in drawing.rows if row[1] == k]) for k in numbers]
        assert area(lines) == pytest.approx(np.pi * chi2 * 0.8, rel=0.1)
    text = " ".join(t.get_text() for t in drawing.figure.texts)
    assert "two parameters" in text
    assert "68.27 %" in text


def test_profile_contours_lie_on_the_same_axes(chain):
    circle = np.stack([np.cos(np.linspace(0, 6.3, 50)), np.sin(np.linspace(0, 6.3, 50))], axis=1)
    drawing = posterior.plane(chain, "p0", "p1", profile=[("68.27 %, two parameters", [circle])])
    assert any(row[0] == "profile 68.27 %, two parameters" for row in drawing.rows)
    assert any("profile of the fit" in t.get_text() for t in drawing.figure.texts)


def test_densities_show_credible_and_profile_intervals(chain):
    from fitcore.result import Estimate

    profile = {"p0": Estimate(0.0, 1.0, (-1.0, 1.0), (-1.96, 1.96), "profile", "1")}
    drawing = posterior.densities(chain, profile=profile)
    rails = {line.get_gid(): line for axes in drawing.figure.axes for line in axes.lines if line.get_gid()}
    assert rails["credible:p0:0.6827"].get_xdata() == pytest.approx((-1, 1), abs=0.12)
    patches = [p.get_gid() for axes in drawing.figure.axes for p in axes.patches]
    assert patches.count("profile:p0") == 2
    assert {row[0] for row in drawing.rows} == {"p0", "p1"}


def test_triangle_has_a_panel_per_pair(chain):
    drawing = posterior.triangle(chain)
    assert len(drawing.figure.axes) == 3
    assert {row[:2] for row in drawing.rows} == {("p0", "p1")}


def test_unknown_name(chain):
    with pytest.raises(UnknownNameError):
        posterior.densities(chain, ["p7"])
