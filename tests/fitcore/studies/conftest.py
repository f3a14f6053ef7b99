"""A linear Gaussian problem with its closed form."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest

# rows: derivatives of the predictions by slope and offset, of the small catalogue's straight lines
LINES = {
    "slope": (1.0, 0.0),
    "offset": (0.0, 1.0),
    "at_one": (1.0, 1.0),
    "at_two": (2.0, 1.0),
    "at_three": (3.0, 1.0),
}


def closed_form(quantities, values, covariance, leave_out=()):
    """Weighted least squares by its normal equations: parameters, their covariance, smallest chi-square."""
    keep = [i for i in range(len(quantities)) if i not in set(leave_out)]
    design = np.array([LINES[quantities[i]] for i in keep])
    measured = np.array(values)[keep]
    weight = np.linalg.inv(np.asarray(covariance)[np.ix_(keep, keep)])
    spread = np.linalg.inv(design.T @ weight @ design)
    best = spread @ design.T @ weight @ measured
    residual = measured - design @ best
    return SimpleNamespace(
        theta=best,
        covariance=spread,
        chi2=float(residual @ weight @ residual),
        design=design,
        gain=spread @ design.T @ weight,
    )


@pytest.fixture
def linear(make, tables):
    """Five measurements of straight lines, two of them correlated: problem, quantities, values, covariance."""
    quantities = ("at_one", "at_two", "at_three", "slope", "at_two")
    ids = ("one", "two", "three", "incline", "two-again")
    values = np.array([1.35, 2.1, 3.4, 0.93, 2.35])
    errors = np.array([0.1, 0.12, 0.2, 0.08, 0.15])
    correlation = np.eye(5)
    correlation[0, 2] = correlation[2, 0] = 0.6
    covariance = correlation * np.outer(errors, errors)
    block = tables.correlated(
        "pair",
        ["at_one", "at_three"],
        [1.35, 3.4],
        [0.1, 0.2],
        [[1.0, 0.6], [0.6, 1.0]],
        ids=["one", "three"],
        groups=["block", "early"],
    )
    problem = make(
        tables.measurement("two", "at_two", 2.1, 0.12, groups=["early"]),
        tables.measurement("incline", "slope", 0.93, 0.08, groups=["late"]),
        tables.measurement("two-again", "at_two", 2.35, 0.15, groups=["late"]),
        block,
    )
    order = [ids.index(entry.id) for entry in problem.entries]
    return SimpleNamespace(
        problem=problem,
        ids=tuple(ids[i] for i in order),
        quantities=tuple(quantities[i] for i in order),
        values=values[order],
        errors=errors[order],
        covariance=covariance[np.ix_(order, order)],
        closed_form=closed_form,
        lines=LINES,
    )
