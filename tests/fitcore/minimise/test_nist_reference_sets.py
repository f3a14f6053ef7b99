"""The batch solver against the certified nonlinear regressions of the NIST Statistical Reference Datasets.

Source: NIST Statistical Reference Datasets, "Nonlinear Least Squares Regression", National Institute of Standards
and Technology; certified values to 11 digits, in the headers of the data files (tests/data/nist_strd/README.md).
Residuals are divided by the certified residual standard deviation, so chi-square at the minimum is the number of
degrees of freedom.
"""

from __future__ import annotations

import hashlib
from pathlib import Path

import numpy as np
import pytest

from fitcore.minimise.batch_solver import minimise_batch, solve_with_retries

FOLDER = Path(__file__).parents[2] / "data" / "nist_strd"


def exponentials(b, x):
    return b[0] * np.exp(-b[1] * x) + b[2] * np.exp(-b[3] * x) + b[4] * np.exp(-b[5] * x)


def two_peaks(b, x):
    peaks = b[2] * np.exp(-((x - b[3]) ** 2) / b[4] ** 2) + b[5] * np.exp(-((x - b[6]) ** 2) / b[7] ** 2)
    return b[0] * np.exp(-b[1] * x) + peaks


def cubic_ratio(b, x):
    return (b[0] + b[1] * x + b[2] * x**2 + b[3] * x**3) / (1 + b[4] * x + b[5] * x**2 + b[6] * x**3)


def decay_over_line(b, x):
    return np.exp(-b[0] * x) / (b[1] + b[2] * x)


def oscillations(b, x):
    def wave(cosine, sine, period):
        return cosine * np.cos(2 * np.pi * x / period) + sine * np.sin(2 * np.pi * x / period)

    return b[0] + wave(b[1], b[2], 12.0) + wave(b[4], b[5], b[3]) + wave(b[7], b[8], b[6])


MODELS = {
    "Bennett5": lambda b, x: b[0] * (b[1] + x) ** (-1 / b[2]),
    "BoxBOD": lambda b, x: b[0] * (1 - np.exp(-b[1] * x)),
    "Chwirut1": decay_over_line,
    "Chwirut2": decay_over_line,
    "DanWood": lambda b, x: b[0] * x ** b[1],
    "ENSO": oscillations,
    "Eckerle4": lambda b, x: b[0] / b[1] * np.exp(-0.5 * ((x - b[2]) / b[1]) ** 2),
    "Gauss1": two_peaks,
    "Gauss2": two_peaks,
    "Gauss3": two_peaks,
    "Hahn1": cubic_ratio,
    "Kirby2": lambda b, x: (b[0] + b[1] * x + b[2] * x**2) / (1 + b[3] * x + b[4] * x**2),
    "Lanczos1": exponentials,
    "Lanczos2": exponentials,
    "Lanczos3": exponentials,
    "MGH09": lambda b, x: b[0] * (x**2 + x * b[1]) / (x**2 + x * b[2] + b[3]),
    "MGH10": lambda b, x: b[0] * np.exp(b[1] / (x + b[2])),
    "MGH17": lambda b, x: b[0] + b[1] * np.exp(-x * b[3]) + b[2] * np.exp(-x * b[4]),
    "Misra1a": lambda b, x: b[0] * (1 - np.exp(-b[1] * x)),
    "Misra1b": lambda b, x: b[0] * (1 - (1 + b[1] * x / 2) ** -2),
    "Misra1c": lambda b, x: b[0] * (1 - (1 + 2 * b[1] * x) ** -0.5),
    "Misra1d": lambda b, x: b[0] * b[1] * x / (1 + b[1] * x),
    "Nelson": lambda b, x: b[0] - b[1] * x[0] * np.exp(-b[2] * x[1]),
    "Rat42": lambda b, x: b[0] / (1 + np.exp(b[1] - b[2] * x)),
    "Rat43": lambda b, x: b[0] / (1 + np.exp(b[1] - b[2] * x)) ** (1 / b[3]),
    "Roszman1": lambda b, x: b[0] - b[1] * x - np.arctan(b[2] / (x - b[3])) / np.pi,
    "Thurber": cubic_ratio,
}


class ReferenceSet:
    """One data file: starts, certified values and standard deviations, data."""

    def __init__(self, name):
        lines = (FOLDER / f"{name}.dat").read_text().splitlines()
        table = [line.split("=")[1].split() for line in lines[40:60] if line.strip().startswith("b")]
        numbers = np.array(table, dtype=float)
        self.starts, self.certified, self.deviations = numbers[:, :2].T, numbers[:, 2], numbers[:, 3]
        header = {line.split(":")[0].strip(): line.split(":")[1] for line in lines[40:60] if ":" in line}
        self.sum_of_squares = float(header["Residual Sum of Squares"])
        self.spread = float(header["Residual Standard Deviation"])
        self.degrees_of_freedom = int(header["Degrees of Freedom"])
        data = np.array([line.split() for line in lines[60:] if line.strip()], dtype=float).T
        self.y, self.x = data[0], data[1:] if len(data) > 2 else data[1]
        if name == "Nelson":
            self.y = np.log(self.y)


def make_problem(name, reference, problem_class, parameter_class):
    model = MODELS[name]
    parameters = [
        parameter_class(f"b{k + 1}", scale=float(abs(start)) or 1.0)
        for k, start in enumerate(reference.starts[1])
    ]
    return problem_class(lambda b: (model(b, reference.x) - reference.y) / reference.spread, parameters)


def digits(found, certified):
    """Decimal digits of agreement of the worst parameter (at most 11, what is certified)."""
    with np.errstate(divide="ignore"):
        return float(np.clip(-np.log10(np.max(np.abs(found - certified) / np.abs(certified))), 0.0, 11.0))


def best_digits(name, reference, found):
    """`digits` of the better labelling; MGH17 is symmetric under exchange of its two exponentials."""
    labels = [[0, 1, 2, 3, 4], [0, 2, 1, 4, 3]] if name == "MGH17" else [list(range(found.size))]
    return max(digits(found[order], reference.certified) for order in labels)


# What is expected, per set. Start 2: six digits for all 27. Start 1 (far away): the sets below do not get there in a
# plain call, but say so (or, for BoxBOD, sit in the true local minimum on the plateau b2 -> infinity); the ladder,
# given start 2 as the extra start, mends all but BoxBOD and MGH17 (which damping leads to such a plateau too).
PLAIN_START_1_FAILS = {"BoxBOD", "Lanczos1", "Lanczos2", "Lanczos3", "MGH10", "MGH17"}
LADDER_START_1_FAILS = {"BoxBOD", "MGH17"}
# Expected distance to the minimum that counts as converged; Lanczos1 has residuals of 1e-14, where rounding of the
# predictions alone moves this chi-square by 1e-5.
TOLERANCE = {"Lanczos1": 1e-3}


@pytest.mark.parametrize("name", sorted(MODELS))
def test_reaches_the_certified_values_from_start_2(name, least_squares_problem, free_parameter):
    reference = ReferenceSet(name)
    problem = make_problem(name, reference, least_squares_problem, free_parameter)
    result = minimise_batch(
        problem, reference.starts[1:], tolerance=TOLERANCE.get(name, 1e-16), max_iterations=1000
    )
    assert result.converged[0]
    assert best_digits(name, reference, result.theta[0]) >= 6.0


@pytest.mark.parametrize("name", sorted(set(MODELS) - PLAIN_START_1_FAILS))
def test_reaches_the_certified_values_from_start_1(name, least_squares_problem, free_parameter):
    reference = ReferenceSet(name)
    problem = make_problem(name, reference, least_squares_problem, free_parameter)
    result = minimise_batch(
        problem, reference.starts[:1], tolerance=TOLERANCE.get(name, 1e-16), max_iterations=1000
    )
    assert result.converged[0]
    assert best_digits(name, reference, result.theta[0]) >= 6.0


@pytest.mark.parametrize("name", sorted(PLAIN_START_1_FAILS))
def test_the_ladder_helps_from_start_1_or_says_so(name, least_squares_problem, free_parameter):
    reference = ReferenceSet(name)
    problem = make_problem(name, reference, least_squares_problem, free_parameter)
    result = solve_with_retries(
        problem,
        reference.starts[:1],
        extra_starts=reference.starts[1:],
        tolerance=TOLERANCE.get(name, 1e-16),
        max_iterations=1000,
    )
    if name not in LADDER_START_1_FAILS:
        assert result.converged[0]
        assert best_digits(name, reference, result.theta[0]) >= 6.0
    else:
        assert result.chi2[0] > reference.degrees_of_freedom + 1.0
        assert np.abs(result.gradient[0] * np.abs(result.theta[0])).max() < 1e-3


@pytest.mark.parametrize("name", sorted(PLAIN_START_1_FAILS - LADDER_START_1_FAILS))
def test_a_failure_from_start_1_is_never_silent(name, least_squares_problem, free_parameter):
    reference = ReferenceSet(name)
    problem = make_problem(name, reference, least_squares_problem, free_parameter)
    result = minimise_batch(
        problem, reference.starts[:1], tolerance=TOLERANCE.get(name, 1e-16), max_iterations=300
    )
    assert best_digits(name, reference, result.theta[0]) >= 6.0 or not result.converged[0]


@pytest.mark.parametrize("name", sorted(set(MODELS) - {"Lanczos1"}))
def test_certified_sum_of_squares_and_deviations(name, least_squares_problem, free_parameter):
    # the models and the data are read as NIST meant them: chi2 at the certified point is the degrees of freedom and
    # the certified standard deviations follow from J^T J (Lanczos1's residuals of 1e-14 drown in the certified digits)
    reference = ReferenceSet(name)
    problem = make_problem(name, reference, least_squares_problem, free_parameter)
    assert problem.chi2(reference.certified[None])[0] == pytest.approx(
        reference.sum_of_squares / reference.spread**2, rel=1e-5
    )
    jacobian = problem.jacobian(reference.certified[None])[0]
    triangle = np.linalg.qr(jacobian, mode="r")
    deviations = np.sqrt((np.linalg.inv(triangle) ** 2).sum(axis=1))
    np.testing.assert_allclose(deviations, reference.deviations, rtol=1e-5)


def test_files_are_the_ones_vendored():
    sums = dict(
        line.split()[::-1] for line in (FOLDER / "SHA256SUMS").read_text().splitlines() if line.strip()
    )
    assert set(sums) == {f"{name}.dat" for name in MODELS}
    for file, expected in sums.items():
        assert hashlib.sha256((FOLDER / file).read_bytes()).hexdigest() == expected
