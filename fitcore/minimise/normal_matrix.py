"""The linearised chi-square of a batch of points: gradient and sparse normal matrix.

Layout: batch axis last inside (``(nnz, B)``), first in what people see (``(B, n, n)``).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, eq=False)
class SparseNormal:
    """Lower triangles of the normal matrices J^T J of a batch of points, all with one sparsity pattern.

    The Hessian of chi-square is about 2 J^T J, so the Gauss-Newton step is -(J^T J)^-1 gradient / 2.

    Attributes
    ----------
    rows, cols : ndarray of int, shape (nnz,)
        Positions, ``rows >= cols``. The whole diagonal must be present, zeros included; no position twice.
    values : ndarray of float, shape (nnz, B)
        Elements in units of 1 / (unit of the row parameter x unit of the column parameter).
    """

    rows: np.ndarray
    cols: np.ndarray
    values: np.ndarray

    @property
    def size(self) -> int:
        """Number of parameters n (the diagonal is complete, so the largest row tells it)."""
        return int(self.rows.max()) + 1

    def dense(self) -> np.ndarray:
        """Full symmetric matrices, shape (B, n, n)."""
        full = np.zeros((self.values.shape[1], self.size, self.size))
        full[:, self.rows, self.cols] = self.values.T
        full[:, self.cols, self.rows] = self.values.T
        return full


@dataclass(frozen=True, eq=False)
class Linearisation:
    """Chi-square, its gradient and its normal matrix at a batch of points.

    Attributes
    ----------
    chi2 : ndarray, shape (B,)
        Chi-square (dimensionless), +inf at impossible points.
    gradient : ndarray, shape (B, n)
        d chi2 / d theta, in 1 / unit of the parameter; 0 at impossible points.
    normal : SparseNormal
        J^T J; 0 at impossible points.
    """

    chi2: np.ndarray
    gradient: np.ndarray
    normal: SparseNormal
