"""Correlation and covariance matrices of ``[[correlated]]`` tables: nested lists or CSV files."""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from likelihoods.covariance import LOWEST_EIGENVALUE, lowest_eigenvalue
from likelihoods.fields import Fields, describe, real

#: Elements that should be equal or 1 may differ by this much, the rounding of a matrix computed elsewhere.
_ROUNDING = 1e-9
#: Correlations beyond this are no matter of definiteness, and would overflow.
_ABSURD = 1e6


@dataclass(frozen=True)
class Matrix:
    """A checked matrix: correlations, and the errors where a covariance was given (else empty)."""

    correlation: tuple[tuple[float, ...], ...]
    errors: tuple[float, ...]


def read_matrix(fields: Fields, key: str, size: int, folder: Path) -> Matrix | None:
    """Read and check the matrix under ``key``.

    Parameters
    ----------
    fields : Fields
        The table; problems are reported there.
    key : {"correlation", "covariance"}
        What the matrix is.
    size : int
        Rows it must have.
    folder : Path
        Where a CSV file is looked for.

    Returns
    -------
    Matrix or None
        None when there was a problem.
    """
    written = fields.table[key]
    rows = _read_csv(fields, key, folder / written) if isinstance(written, str) else written
    if rows is None:
        return None
    numbers = _numbers(fields, key, rows, size)
    if numbers is None:
        return None
    scale = np.ones(size)
    if key == "covariance":
        diagonal = np.diagonal(numbers)
        if not (diagonal > 0.0).all():
            row = int(np.argmin(diagonal))
            fields.problem(
                (key, row),
                f"the covariance has {diagonal[row]:g} on its diagonal (row {row + 1}); must be positive",
            )
            return None
        scale = np.sqrt(diagonal)
    elif (np.abs(np.diagonal(numbers) - 1.0) > _ROUNDING).any():
        row = int(np.argmax(np.abs(np.diagonal(numbers) - 1.0)))
        mend = "must be 1; write covariance = ... if it is one"
        fields.problem(
            (key, row), f"the correlation has {numbers[row, row]:g} on its diagonal (row {row + 1}); {mend}"
        )
        return None
    with np.errstate(over="ignore", invalid="ignore"):
        correlation = numbers / scale[:, None] / scale
        asymmetry = np.abs(correlation - correlation.T)
    if not (np.abs(correlation) < _ABSURD).all():
        fields.problem(key, f"the {key} has elements far beyond its diagonal; check the numbers")
        return None
    if (asymmetry > _ROUNDING).any():
        i, j = (int(k) for k in np.unravel_index(np.argmax(asymmetry), asymmetry.shape))
        fields.problem(
            (key, i),
            f"the {key} is not symmetric: row {i + 1} column {j + 1} has {numbers[i, j]:g}, "
            f"row {j + 1} column {i + 1} has {numbers[j, i]:g}",
        )
        return None
    correlation = 0.5 * (correlation + correlation.T)
    np.fill_diagonal(correlation, 1.0)
    lowest = lowest_eigenvalue(correlation)
    if not lowest > LOWEST_EIGENVALUE:
        fields.problem(
            key,
            f"the {key} of this block is not positive definite: lowest eigenvalue "
            f"{'of its correlations ' if key == 'covariance' else ''}{lowest:.3g}; "
            "give more digits or check the signs",
        )
        return None
    errors = tuple(scale.tolist()) if key == "covariance" else ()
    return Matrix(tuple(tuple(row) for row in correlation.tolist()), errors)


def _numbers(fields: Fields, key: str, rows: object, size: int) -> NDArray[np.float64] | None:
    if not isinstance(rows, list) or not all(isinstance(row, list) for row in rows):
        fields.problem(key, f"{key} must be a nested list or the name of a CSV file, not {describe(rows)}")
        return None
    lengths = sorted({len(row) for row in rows})
    if len(rows) != size or lengths != [size]:
        shape = f"{len(rows)} rows of {' or '.join(map(str, lengths)) or 'no'} elements"
        fields.problem(key, f"{key} has {shape}; {size} quantities need {size} x {size}")
        return None
    matrix = np.empty((size, size))
    for i, row in enumerate(rows):
        for j, element in enumerate(row):
            number = real(element)
            if isinstance(number, str):
                fields.problem((key, i, j), f"{key} row {i + 1} column {j + 1} {number}")
                return None
            matrix[i, j] = number
    return matrix


def _read_csv(fields: Fields, key: str, path: Path) -> list[list[float]] | None:
    try:
        text = path.read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError, ValueError) as error:
        reason = error.strerror if isinstance(error, OSError) else "it is not text"
        fields.problem(key, f"the CSV file {path} cannot be read: {reason}")
        return None
    rows: list[list[float]] = []
    lines = text.splitlines()
    for number, line in enumerate(lines, start=1):
        if not line.strip() or line.lstrip().startswith("#"):
            continue
        row = []
        for cell in next(csv.reader([line])):
            try:
                value = float(cell)
            except ValueError:
                value = math.nan
            if not math.isfinite(value):
                fields.problem(key, f'{path}:{number}: "{cell.strip()[:40]}" is not a finite number')
                return None
            row.append(value)
        rows.append(row)
    return rows
