"""More vertices where the outline of a region turns sharply, each brought onto the profile itself."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from fitcore.minimise.held_quantities import HeldQuantities
from fitcore.minimise.profile import Profile
from fitcore.minimise.regions import Region

__all__ = ["refine_outline"]

#: Turns sharper than this, in degrees, get neighbours.
TURN = 6.0
#: Segments shorter than this share of the outline's size stay whole.
SHORTEST = 2e-3
ROUNDS, NEWTON_STEPS = 5, 6
#: Accepted distance from the level, in chi-square.
CLOSE = 0.01


def refine_outline(profile: Profile, region: Region, level: float) -> Region:
    """Add vertices to an outline until it turns smoothly.

    Parameters
    ----------
    profile : Profile
        Of two quantities.
    region : Region
        One of its regions.
    level : float
        Delta chi-square of the outline.

    Returns
    -------
    Region
        The old vertices and the new ones between them, which lie within 0.01 of the level in chi-square; a new vertex
        that cannot be brought there is left out.
    """
    vertices, polished = region.vertices, region.polished
    size = np.ptp(vertices, axis=0)
    if len(vertices) < 3 or not (size > 0.0).all():
        return region
    for _ in range(ROUNDS):
        split = _sharp_segments(vertices / size, region.closed)
        if not split.size:
            break
        middle = 0.5 * (vertices[split] + vertices[split + 1])
        reach = np.linalg.norm((vertices[split + 1] - vertices[split]) / size, axis=1)
        points, good = _onto_level(profile, middle, level, size)
        good &= np.linalg.norm((points - middle) / size, axis=1) < 0.6 * reach
        if not good.any():
            break
        vertices = np.insert(vertices, split[good] + 1, points[good], axis=0)
        polished = np.insert(polished, split[good] + 1, True)
    return replace(region, vertices=vertices, polished=polished)


def _sharp_segments(line: np.ndarray, closed: bool) -> np.ndarray:
    """Indices of segments that touch a sharp turn and are long enough to split."""
    step = np.diff(line, axis=0)
    length = np.linalg.norm(step, axis=1)
    angle = np.arctan2(step[:, 1], step[:, 0])
    turn = np.abs((np.diff(angle) + np.pi) % (2.0 * np.pi) - np.pi)  # between segment i and i + 1
    sharp = np.zeros(len(step), dtype=bool)
    at = turn > np.radians(TURN)
    sharp[:-1] |= at
    sharp[1:] |= at
    if closed:
        last = abs((angle[0] - angle[-1] + np.pi) % (2.0 * np.pi) - np.pi) > np.radians(TURN)
        sharp[0] |= last
        sharp[-1] |= last
    return np.flatnonzero(sharp & (length > SHORTEST))


def _onto_level(
    profile: Profile, points: np.ndarray, level: float, size: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Newton steps along the gradient of the profile, in units of the outline's size."""
    held = HeldQuantities(profile.problem, profile.names)
    nearest = tuple(
        np.abs(points[:, k, None] - grid[None]).argmin(axis=1) for k, grid in enumerate(profile.grids)
    )
    theta = profile.parameters[nearest]
    known = np.isfinite(theta).all(axis=1)
    theta = np.where(known[:, None], theta, profile.minimum_parameters)
    low = np.array([grid[0] for grid in profile.grids])
    high = np.array([grid[-1] for grid in profile.grids])
    points, good = points.copy(), np.zeros(len(points), dtype=bool)
    for _ in range(NEWTON_STEPS):
        todo = np.flatnonzero(~good)
        found = held.solve(points[todo], theta[todo], tolerance=1e-5)
        delta = np.where(found.good, found.chi2 - profile.minimum, np.nan)
        theta[todo] = np.where(found.good[:, None], found.theta, theta[todo])
        good[todo] = np.abs(delta - level) < CLOSE
        if good.all():
            break
        slope = found.slopes * size
        root = np.sqrt(np.maximum(delta, 1e-12))
        steep = np.maximum((slope**2).sum(axis=1), 1e-300)
        step = ((np.sqrt(level) - root) * 2.0 * root / steep)[:, None] * slope * size
        move = ~good[todo] & np.isfinite(step).all(axis=1)
        points[todo[move]] += step[move]
    inside = ((points >= low) & (points <= high)).all(axis=1)
    return points, good & inside
