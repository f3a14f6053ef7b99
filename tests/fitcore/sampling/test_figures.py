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
    assert any("profile likelihood" in t.get_text() for t in drawing.figure.texts)


def test_densities_show_credible_intervals_and_those_of_the_fit_with_their_methods(chain):
    from fitcore.result import Estimate

    fit = {
        "p0": Estimate(0.0, 1.0, (-1.0, 1.0), (-1.96, 1.96), "profile", "1"),
        "p1": Estimate(0.0, 1.0, (-1.0, 1.0), (-1.96, 1.96), "linear", "1"),
    }
    drawing = posterior.densities(chain, fit=fit)
    rails = {line.get_gid(): line for axes in drawing.figure.axes for line in axes.lines if line.get_gid()}
    assert rails["credible:p0:0.6827"].get_xdata() == pytest.approx((-1, 1), abs=0.12)
    patches = {p.get_gid(): p.get_linestyle() for axes in drawing.figure.axes for p in axes.patches}
    assert set(patches) == {"fit:p0:profile", "fit:p1:linear"}
    assert len(set(map(str, patches.values()))) == 2
    text = " ".join(t.get_text() for t in drawing.figure.texts)
    assert "full outline: profile, dashed: linear" in text
    assert "range" not in text
    assert {row[0] for row in drawing.rows} == {"p0", "p1"}


def many_quantities(problems, count=14):
    problem = problems.gaussian(np.eye(count), lower=np.full(count, -9), upper=np.full(count, 9))
    return sample(problem, until=60, rng=1, check_widths=False).chain


def test_nothing_is_cut_and_what_is_left_out_is_said(problems):
    from fitcore.result import Estimate

    chain = many_quantities(problems)
    fit = {
        name: Estimate(0.0, 1.0, (-1.0, 1.0), (-1.96, 1.96), method, "1")
        for name, method in zip(chain.parameter_names, ("profile", "linear", "range"), strict=False)
    }
    triangle = posterior.triangle(chain)
    text = " ".join(t.get_text() for t in triangle.figure.texts)
    assert "9 of 14 quantities drawn; not drawn: p9, p10, p11, p12, p13" in text
    assert "f - 00 - standard - 60 steps" in text  # title of the inputs first
    for drawing in (
        triangle,
        posterior.densities(chain, chain.parameter_names[:3], fit=fit),
        posterior.densities(chain, ["p0"], fit=fit),
    ):
        drawing.figure.draw_without_rendering()
        width, height = drawing.figure.bbox.size
        for words in drawing.figure.texts:
            box = words.get_window_extent()
            assert 0 <= box.x0 < box.x1 <= width, words.get_text()
            assert 0 <= box.y0 < box.y1 <= height, words.get_text()


def test_triangle_has_a_panel_per_pair(chain):
    drawing = posterior.triangle(chain)
    assert len(drawing.figure.axes) == 3
    assert {row[:2] for row in drawing.rows} == {("p0", "p1")}


def test_unknown_name(chain):
    with pytest.raises(UnknownNameError):
        posterior.densities(chain, ["p7"])
