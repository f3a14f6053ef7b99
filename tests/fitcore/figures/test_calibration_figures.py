"""Calibration figures: their data, and nothing written beyond the page."""

from __future__ import annotations

import numpy as np
import pytest
from linear_problem import Axis, LinearProblem

from fitcore.figures import calibration
from fitcore.studies.calibration import calibrate


@pytest.fixture(scope="module")
def result():
    problem = LinearProblem(
        [[1.0, 0.0], [1.0, 1.0], [0.0, 1.0]],
        [0.3, 1.0, -0.2],
        [Axis("mass", start=0.5, lower=0.0), Axis("width")],
    )
    intervals = {
        "mass": np.linspace(0.0, 3.0, 5),
        ("mass", "width"): (np.linspace(0.0, 3.0, 4), np.linspace(-3, 3, 4)),
    }
    return calibrate(problem, 300, rng=1, intervals=intervals, coverage="all", cl=(0.683, 0.9))


def drawings(result):
    yield calibration.draw_goodness(result, footer="invented")
    for region in result.regions:
        yield calibration.draw_thresholds(region, latex={"mass": "m"}, footer="invented")
    yield calibration.draw_coverage(result, footer="invented")


def test_nothing_is_written_beyond_the_page(result):
    for drawing in drawings(result):
        figure = drawing.figure
        figure.canvas.draw()
        width, height = figure.canvas.get_width_height()
        texts = list(figure.texts)
        for axes in figure.axes:  # ticks outside the axes exist too, unseen: left out
            texts += [*axes.texts, axes.xaxis.label, axes.yaxis.label]
        for text in texts:
            box = text.get_window_extent()
            if text.get_visible() and box.width > 0:
                assert box.x0 >= -1, text
                assert box.x1 <= width + 1, text
                assert box.y0 >= -1, text
                assert box.y1 <= height + 1, text


def test_data_of_the_figures(result):
    goodness, line, plane, coverage = drawings(result)
    assert sum(row[2] for row in goodness.rows) == 300
    assert len(line.rows) == 2 * 5
    assert len(plane.rows) == 2 * 16
    assert len(coverage.rows) == 2 * 2
    for drawing in (goodness, line, plane, coverage):
        assert all(len(row) == len(drawing.columns) for row in drawing.rows)
