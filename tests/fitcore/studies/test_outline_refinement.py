"""Outlines with vertices where they turn."""

from __future__ import annotations

import numpy as np

from fitcore.minimise.minima import find_minima
from fitcore.minimise.profile import profile, threshold
from fitcore.minimise.regions import find_regions
from fitcore.studies.outline_refinement import refine_outline


def test_a_narrow_ellipse_becomes_smooth(linear):
    """Strongly correlated parameters on a coarse grid: the outline must be the ellipse of the covariance."""
    problem = linear.problem
    theta = find_minima(problem)[0].theta
    names = problem.parameter_names[:2]
    jacobian = problem.jacobian(theta)
    covariance = np.linalg.inv(jacobian.T @ jacobian)[:2, :2]
    errors = np.sqrt(np.diag(covariance))
    grids = [np.linspace(t - 5 * e, t + 5 * e, 12) for t, e in zip(theta, errors, strict=False)]
    found = profile(problem, names, grids, start=theta)
    level = threshold(0.683, 2)
    (rough,) = find_regions(found, level)
    smooth = refine_outline(found, rough, level)
    assert len(smooth.vertices) > len(rough.vertices)
    assert (smooth.vertices[0] == smooth.vertices[-1]).all()
    away = smooth.vertices - theta[:2]
    distance = np.einsum("ki,ij,kj->k", away, np.linalg.inv(covariance), away)
    assert np.abs(distance - level).max() < 0.02
    # the farthest points of the ellipse are reached
    assert (np.abs(np.abs(away).max(axis=0) / (np.sqrt(level) * errors) - 1) < 0.01).all()
    # nothing is left to add where it turns
    step = np.diff(smooth.vertices / np.ptp(smooth.vertices, axis=0), axis=0)
    angle = np.unwrap(np.arctan2(step[:, 1], step[:, 0]))
    assert np.degrees(np.abs(np.diff(angle))).max() < 25.0
