"""Figures of profiles, planes and studies by what they hold: positions, lines, texts; the look is judged by eye."""

from __future__ import annotations

import csv
import io
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from matplotlib.collections import LineCollection
from matplotlib.colors import to_hex
from matplotlib.text import Text

from fitcore.figures import budget, direct_indirect, one_parameter, outlook, plane, style
from fitcore.figures.margin_rail import find_exit, spread
from fitcore.figures.outlines import contour_lines, inward_ticks, refine
from fitcore.figures.scales import scale_for

LEVELS = [("68.3 %", 2.296), ("95.4 %", 6.180)]
X, Y = np.linspace(-1.0, 1.0, 61), np.linspace(-1.2, 1.2, 71)
TREE = style.family_of(["tree"])
WAVE = style.family_of(["oscillation"])


def texts(figure):
    return [item.get_text() for item in figure.findobj(Text) if item.get_text()]


def by_gid(figure, gid):
    return [artist for artist in figure.findobj() if artist.get_gid() == gid]


def line_of(figure, gid):
    (line,) = by_gid(figure, gid)
    return np.asarray(line.get_xydata())


def rows_of(drawing):
    return list(csv.DictReader(io.StringIO(drawing.csv_text())))


# -- plane -------------------------------------------------------------------------------------------------------------


def band(name, family, x_slope, y_slope, width, share=0.0, overview=None):
    delta = ((x_slope * X[:, None] + y_slope * Y[None, :]) / width) ** 2
    return plane.Band(name, "", family, X, Y, delta, share=share, overview=overview)


@pytest.fixture
def drawing():
    together = plane.Band(
        "everything",
        "",
        style.OTHER,
        X,
        Y,
        (X[:, None] / 0.1) ** 2 + (Y[None, :] / 0.15) ** 2,
        overview=(X * 5, Y * 5, (X[:, None] * 50) ** 2 + (Y[None, :] * 33) ** 2),
    )
    bands = [
        band("level", TREE, 0.1, 1.0, 0.1, share=1.5),
        band("steep", TREE, 1.0, 0.1, 0.1, share=0.5),
        band("wave", WAVE, 1.0, -1.0, 0.1, share=2.0),
    ]
    axes = (plane.PlaneAxis("first", r"\bar\rho"), plane.PlaneAxis("second", "", "deg"))
    return plane.draw(
        axes,
        together,
        bands,
        levels=LEVELS,
        best=(0.0, 0.0),
        chi2=10.0,
        guides=[np.array([[0.0, 0.0], [0.5, 0.5]])],
        title="Invented world",
        footer="invented revision 1 - 01234567",
        caption="as made",
    )


def test_combined_region_is_the_ellipse(drawing):
    edge = line_of(drawing.figure, "all:0")
    distance = (edge[:, 0] / 0.1) ** 2 + (edge[:, 1] / 0.15) ** 2
    assert distance == pytest.approx(2.296, rel=0.02)
    white, navy = to_hex("white"), style.NAVY
    (outline,) = by_gid(drawing.figure, "all:0")
    assert to_hex(outline.get_color()) == white
    main = outline.axes
    assert navy in {to_hex(patch.get_facecolor()) for patch in main.patches}


def test_members_of_a_family_share_a_colour_and_differ_by_line(drawing):
    level, steep = by_gid(drawing.figure, "level:0")[0], by_gid(drawing.figure, "steep:0")[0]
    wave = by_gid(drawing.figure, "wave:0")[0]
    assert level.get_color() == steep.get_color() == TREE.colour
    assert level.get_linestyle() != steep.get_linestyle() or level._dash_pattern != steep._dash_pattern
    assert wave.get_color() == WAVE.colour


def test_nothing_is_written_on_the_plane_and_every_band_has_a_leader(drawing):
    main = by_gid(drawing.figure, "all:0")[0].axes
    inside = [item.get_text() for item in main.texts]
    assert inside == []
    said = texts(drawing.figure)
    for name in ("level", "steep", "wave"):
        assert name in said
        assert line_of(drawing.figure, f"leader:{name}").shape == (4, 2)
    assert "invented revision 1 - 01234567" in said
    assert any("95.4 % region, two parameters" in text for text in said)
    assert not any("exclu" in text.lower() for text in said)


def test_leaders_start_where_bands_leave(drawing):
    main = by_gid(drawing.figure, "all:0")[0].axes
    box = main.get_position()
    sheet_width, sheet_height = drawing.figure.get_size_inches()
    start = line_of(drawing.figure, "leader:level")[0]
    page = by_gid(drawing.figure, "leader:level")[0].axes
    left = page.get_xlim()[0]
    assert start[0] - left == pytest.approx(box.x1 * sheet_width, abs=1e-6)
    # 0.1 x + y = 0 at x = 1
    share = (start[1] / sheet_height - box.y0) / box.height
    assert Y[0] + share * (Y[-1] - Y[0]) == pytest.approx(-0.1, abs=2 * (Y[1] - Y[0]))


def test_strips_show_shares_of_chi_square(drawing):
    widths = {
        name: by_gid(drawing.figure, f"share:{name}")[0].get_width() for name in ("level", "steep", "wave")
    }
    assert widths["level"] == pytest.approx(3 * widths["steep"])
    assert widths["wave"] == pytest.approx(4 * widths["steep"])


def test_plane_data(drawing):
    rows = rows_of(drawing)
    assert len(rows) == X.size * Y.size
    assert list(rows[0]) == [
        "first",
        "second",
        "delta_chi2",
        *(f"delta_chi2 {n}" for n in ("level", "steep", "wave")),
    ]
    assert float(rows[0]["delta_chi2 wave"]) == pytest.approx(((-1.0 + 1.2) / 0.1) ** 2)


def test_a_band_inside_the_frame_is_tied_to_its_name():
    together = plane.Band(
        "everything", "", style.OTHER, X, Y, (X[:, None] / 0.1) ** 2 + (Y[None, :] / 0.1) ** 2
    )
    delta = ((X[:, None] - 0.3) / 0.2) ** 2 + ((Y[None, :] + 0.1) / 0.2) ** 2
    spot = plane.Band("spot", "", TREE, X, Y, delta)
    axes = (plane.PlaneAxis("first"), plane.PlaneAxis("second"))
    drawn = plane.draw(axes, together, [spot], levels=LEVELS)
    main = by_gid(drawn.figure, "spot:0")[0].axes
    leader = by_gid(drawn.figure, "leader:spot")[-1]
    start = leader.axes.transData.transform(leader.get_xydata()[0])
    # it starts where the band is lowest
    step = float(np.hypot(X[1] - X[0], Y[1] - Y[0]))
    assert main.transData.inverted().transform(start) == pytest.approx((0.3, -0.1), abs=step)


def test_a_plane_without_bands_and_with_impossible_points():
    delta = (X[:, None] / 0.5) ** 2 + (Y[None, :] / 0.6) ** 2
    delta = np.where(X[:, None] > 0.6, np.inf, delta)
    lone = plane.Band("everything", "", style.OTHER, X, Y, delta)
    axes = (plane.PlaneAxis("first"), plane.PlaneAxis("second"))
    drawn = plane.draw(axes, lone, levels=LEVELS)
    assert rows_of(drawn)[-1]["delta_chi2"] == ""
    edge = line_of(drawn.figure, "all:0")
    assert edge[:, 0].max() <= 0.6 + (X[1] - X[0])


def test_ticks_point_inwards(drawing):
    main = by_gid(drawing.figure, "all:0")[0].axes
    line = contour_lines(X, Y, X[:, None] ** 2 + Y[None, :] ** 2, 0.36)[0]
    ticks = inward_ticks(main, line, X, Y, X[:, None] ** 2 + Y[None, :] ** 2, length=4.0, spacing=8.0)
    assert len(ticks) > 10
    foot, tip = ticks[:, 0], ticks[:, 1]
    assert (np.hypot(*tip.T) < np.hypot(*foot.T)).all()
    assert np.hypot(*foot.T) == pytest.approx(0.6, rel=0.02)
    assert main.findobj(LineCollection)


def test_refining_keeps_narrow_valleys_whole():
    x = y = np.linspace(-1.0, 1.0, 21)
    width = 0.02  # a fifth of a cell
    delta = ((x[:, None] - 0.37 * y[None, :]) / width) ** 2
    slopes = np.stack(
        [
            2 * (x[:, None] - 0.37 * y[None, :]) / width**2,
            -0.74 * (x[:, None] - 0.37 * y[None, :]) / width**2,
        ],
        -1,
    )
    fine_x, fine_y, fine = refine(x, y, delta, slopes)
    exact = ((fine_x[:, None] - 0.37 * fine_y[None, :]) / width) ** 2
    # zero twist costs little; without slopes the valley would be missed between the points
    assert (fine < 4.0).any(axis=0).all()
    along = [0, 50, 100]
    assert fine[:, along] == pytest.approx(exact[:, along], rel=1e-9, abs=1e-6)
    assert fine_x[:: (fine_x.size - 1) // (x.size - 1)] == pytest.approx(x)


def test_exits_prefer_the_free_margins():
    right = (Y[None, :] / 0.1) ** 2 + 0 * X[:, None]
    assert find_exit(X, Y, right, 1.0).side == "right"
    assert find_exit(X, Y, right, 1.0).at == pytest.approx(0.0, abs=0.05)
    up = (X[:, None] / 0.1) ** 2 + 0 * Y[None, :]
    assert find_exit(X, Y, up, 1.0).side == "top"
    corner = ((X[:, None] + 1) + (Y[None, :] + 1.2) - 0.8) ** 2 / 0.01
    assert find_exit(X, Y, corner, 1.0).side in ("left", "bottom")
    closed = (X[:, None] ** 2 + Y[None, :] ** 2) / 0.01
    assert find_exit(X, Y, closed, 1.0) is None


@settings(max_examples=60, deadline=None)
@given(st.lists(st.floats(0.0, 10.0), max_size=8))
def test_names_spread_without_overlap(wanted):
    size = 0.7
    placed = spread(wanted, [size] * len(wanted), 0.0, 10.0)
    ordered = np.sort(placed)
    assert (np.diff(ordered) >= size - 1e-9).all()
    if placed:
        assert ordered[0] >= 0.5 * size - 1e-9
        assert ordered[-1] <= 10.0 - 0.5 * size + 1e-9
        # order is kept, so that leaders do not cross
        assert [placed[i] for i in np.argsort(wanted, kind="stable")] == sorted(placed)
    if len(wanted) == 1 and 0.35 <= wanted[0] <= 9.65:
        assert placed[0] == pytest.approx(wanted[0])


# -- one parameter -----------------------------------------------------------------------------------------------------


def test_one_parameter_curve_and_rail():
    x = np.linspace(-3.0, 3.0, 121)
    levels = [("68.3 %", 1.0), ("95.4 %", 4.0)]
    curves = [
        one_parameter.Curve(
            "gaussian", x, x**2, (((-1.0, 1.0, False, False),), ((-2.0, 2.0, False, False),)), 0.0
        ),
        one_parameter.Curve(
            "flat",
            x,
            np.where(x > 2.5, np.inf, np.maximum(np.abs(x) - 1, 0) ** 2),
            (((-2.0, 2.0, False, False),), ((-3.0, 2.5, True, True),)),
            0.0,
        ),
    ]
    drawn = one_parameter.draw(
        "angle", curves, levels=levels, unit="deg", latex=r"\alpha", footer="made of nothing"
    )
    assert line_of(drawn.figure, "curve:gaussian")[:, 1] == pytest.approx(np.minimum(x**2, 62.0))
    inner, outer = line_of(drawn.figure, "interval:flat:0"), line_of(drawn.figure, "interval:flat:1")
    assert inner[:, 0].tolist() == [-2.0, 2.0]
    assert outer[:, 0].tolist() == [-3.0, 2.5]
    said = texts(drawn.figure)
    assert any("68.3 % at 1, 95.4 % at 4" in text for text in said)
    assert any("[deg]" in text for text in said)
    rows = rows_of(drawn)
    assert len(rows) == 2 * x.size
    assert rows[-1] == {"curve": "flat", "angle": "3.0", "delta_chi2": ""}


# -- studies -----------------------------------------------------------------------------------------------------------


def pair(name, value, error, direct, own, tension):
    inner, outer = (value - error, value + error), (value - 2 * error, value + 2 * error)
    return direct_indirect.Pair(name, "", "1", TREE, value, inner, outer, direct, own, tension)


def test_paired_bars_sorted_by_tension():
    pairs = [
        pair("calm", 1.0, 0.1, 1.05, (0.1, 0.1), 0.3),
        pair("tense", 5.0, 0.2, 4.0, (0.3, 0.2), -2.9),
        pair("open", 2.0, 0.1, None, None, None),
    ]
    pairs[0] = direct_indirect.Pair(**{**pairs[0].__dict__, "interval_95": (-math.inf, 1.2)})
    drawn = direct_indirect.draw(pairs, footer="made of nothing")
    assert [row["quantity"] for row in rows_of(drawn)] == ["tense", "calm", "open"]
    assert rows_of(drawn)[1]["indirect_low_95"] == ""
    own, other = by_gid(drawn.figure, "direct:tense")[0], by_gid(drawn.figure, "indirect:tense")[-1]
    assert own.get_color() == style.tint(TREE.colour, 1.0)
    assert other.get_color() == style.tint(style.NAVY, 1.0)
    # on one scale: direct [3.8, 4.3] lies left of indirect [4.8, 5.2], in proportion
    own_x, other_x = np.asarray(own.get_xdata()), np.asarray(other.get_xdata())
    assert np.ptp(own_x) / np.ptp(other_x) == pytest.approx(0.5 / 0.4)
    assert (other_x[0] - own_x[1]) / np.ptp(other_x) == pytest.approx((4.8 - 4.3) / 0.4)
    assert not by_gid(drawn.figure, "direct:open")
    assert "\N{MINUS SIGN}2.90" in texts(drawn.figure)


def test_budget_bars_are_sorted_and_to_scale():
    bars = [
        budget.Bar("small", TREE, 0.1, 0.2),
        budget.Bar("large", WAVE, -0.8, 0.9),
        *(budget.Bar(f"tiny-{k}", TREE, 0.001 * k, 0.001) for k in range(25)),
    ]
    groups = [budget.Bar("theory", style.OTHER, 0.5, 0.6)]
    drawn = budget.draw("angle", bars, groups, error=1.0, unit="deg", footer="made of nothing")
    rows = rows_of(drawn)
    assert [row["name"] for row in rows[:2]] == ["large", "small"]
    assert len(rows) == len(bars) + 1
    large, small = (by_gid(drawn.figure, f"shift:{name}")[0] for name in ("large", "small"))
    assert large.get_width() == pytest.approx(8 * small.get_width())
    assert large.get_y() < small.get_y()
    stroke = line_of(drawn.figure, "removal:large")[0, 0] - large.get_x()
    assert stroke == pytest.approx(large.get_width() * 0.9 / 0.8)
    said = texts(drawn.figure)
    assert "\N{MINUS SIGN}80 %" in said
    assert any("the 18 largest of 27 inputs" in text for text in said)
    assert "tiny-24" in said
    assert "tiny-1" not in said


def test_outlook_bars_shrink_in_proportion():
    rows = [
        outlook.BeforeAfter(
            "angle", "", "deg", 66.0, (64.0, 68.0), (62.0, 70.0), (65.0, 67.0), (64.0, 68.0), 2.0
        ),
        outlook.BeforeAfter("loose", "", "1", 1.0, (0.5, 1.5), (-math.inf, 2.0), (0.8, 1.2), (0.6, 1.4), 2.5),
    ]
    drawn = outlook.draw(rows, title="Tomorrow", footer="made of nothing")
    now, later = by_gid(drawn.figure, "now:angle")[-1], by_gid(drawn.figure, "future:angle")[-1]
    assert np.ptp(now.get_xdata()) == pytest.approx(2 * np.ptp(later.get_xdata()))
    assert "\N{MULTIPLICATION SIGN}2.00" in texts(drawn.figure)
    assert rows_of(drawn)[1]["now_low_95"] == ""
    assert "Tomorrow" in texts(drawn.figure)


@given(st.lists(st.floats(-1e6, 1e6), min_size=1, max_size=6))
def test_scales_hold_their_values(values):
    scale = scale_for(values, 2.0, 6.0)
    places = [scale.at(value) for value in values]
    assert all(2.0 <= place <= 6.0 for place in places)
    assert all(scale.holds(value) for value in values)
