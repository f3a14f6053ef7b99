"""Small problems that several tests of the minimisers use."""

from __future__ import annotations

from typing import Any

import numpy as np

#: Gradients of the quantities of `linear_problem`, parameters included.
DIRECTIONS = {
    **{f"p{k}": np.eye(6)[k] for k in range(6)},
    "combination": np.array([1.0, 2.0, 0.0, -1.0, 0.0, 0.0]),
}


def bent_valley(t: Any) -> np.ndarray:
    """Residuals of a bent valley in (t0, t1) with the nuisance parameters t2 and t3."""
    terms = [
        (t[0] - 1.0) / 0.5,
        (t[1] - t[0] ** 2 + 0.3 * t[2]) / 0.1,
        t[2],
        (t[3] - t[2] * t[0]) / 0.3,
        t[3] / 2.0,
    ]
    return np.concatenate(terms, axis=-1)


def linear_problem(problem_class: Any, parameter_class: Any, seed: int) -> tuple[Any, np.ndarray, np.ndarray]:
    """A Gaussian linear problem in six parameters: problem, best fit, covariance."""
    rng = np.random.default_rng(seed)
    jacobian, measured = rng.normal(size=(12, 6)), rng.normal(size=12)
    problem = problem_class(
        lambda t: sum(jacobian[:, k] * t[k] for k in range(6)) - measured,
        [parameter_class(f"p{k}") for k in range(6)],
        quantities={"combination": lambda t: t[0] + 2 * t[1] - t[3]},
    )
    best = np.linalg.lstsq(jacobian, measured, rcond=None)[0]
    return problem, best, np.linalg.inv(jacobian.T @ jacobian)
