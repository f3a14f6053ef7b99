"""The one function everything else calls: a batch of parameter points in, a batch of residuals out.

Knows a compiled graph and the statistical terms of the entries, but no physics. Arrays are laid out with the batch
axis last, ``(n, B)``, so that every step of a formula runs along contiguous memory.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from fitcore.minimise.derivatives import call_with_derivatives, seed, tangents_of
from fitcore.minimise.normal_matrix import Linearisation, SparseNormal

__all__ = ["ChiSquare"]

#: Points evaluated at once: intermediate arrays of this length stay in the processor's cache.
CHUNK = 2048
#: Bytes; just under the largest size that glibc's malloc learns from.
ALLOCATOR_HINT = 31 << 20


class ChiSquare:
    """-2 ln L of all entries, and its derivatives, on batches.

    Parameters
    ----------
    graph : observables.graph.Graph
        Computes the predictions; its inputs are the first parameters, in order.
    terms : likelihoods.terms.Terms
        The statistics of the ``m`` entries.
    targets : sequence of int
        For each entry, which of the graph's targets it measures.
    shifts : sequence of int or None
        For each entry, the position of the parameter that is added to its prediction (a flat theory range).
    n_parameters : int
    """

    def __init__(self, graph: Any, terms: Any, targets: Any, shifts: Any, n_parameters: int) -> None:
        self.graph = graph
        self.terms = terms
        self.n_parameters = n_parameters
        self.n_entries = len(targets)
        self._measured = terms.values[:, None]
        self._targets = list(targets)
        self._shifts = list(shifts)

        # Entries that measure the same thing share one channel: its tangents are used once.
        keys = list(dict.fromkeys(zip(self._targets, self._shifts, strict=True)))
        self._channels = keys
        self._channel_of = [keys.index(key) for key in zip(self._targets, self._shifts, strict=True)]
        self._supports = []
        for target, shift in keys:
            support = graph.supports[graph.targets[target]]
            self._supports.append(support if shift is None else (*support, shift))
        self._plan()
        # Freeing one large block, never touched, makes glibc keep what later evaluations free instead of handing
        # it back: fresh pages cost more than the arithmetic done on them. Elsewhere it does nothing.
        np.empty(ALLOCATOR_HINT, dtype=np.uint8)

    def _plan(self) -> None:
        """Lay out the nonzero lower triangle of the normal matrix and where each product goes in it."""
        correlated = {int(i) for block in self.terms.correlation_blocks for i in block.indices}
        self._own_entries: list[list[int]] = [[] for _ in self._channels]
        for entry, channel in enumerate(self._channel_of):
            if entry not in correlated:
                self._own_entries[channel].append(entry)
        # (channel, channel) -> list of (entry, entry, coefficient of R^-1), first channel <= second
        self._pairs: dict[tuple[int, int], list[tuple[int, int, float]]] = {}
        for block in self.terms.correlation_blocks:
            for a, i in enumerate(block.indices):
                for b, j in enumerate(block.indices):
                    key = (self._channel_of[i], self._channel_of[j])
                    if key[0] <= key[1] and block.inverse[a, b] != 0.0:
                        self._pairs.setdefault(key, []).append((int(i), int(j), float(block.inverse[a, b])))

        used = [c for c in range(len(self._channels)) if self._own_entries[c] or (c, c) in self._pairs]
        crossing = [pair for pair in self._pairs if pair[0] != pair[1]]
        places = {(i, i) for i in range(self.n_parameters)}
        for first, second in [*((c, c) for c in used), *crossing]:
            places |= {(max(p, q), min(p, q)) for p in self._supports[first] for q in self._supports[second]}
        # Row by row, so that a channel's share of a row is mostly one contiguous stretch.
        ordered = sorted(places)
        slots = {place: slot for slot, place in enumerate(ordered)}
        self._rows = np.array([place[0] for place in ordered], dtype=int)
        self._cols = np.array([place[1] for place in ordered], dtype=int)

        self._outer: dict[int, list[Any]] = {
            c: [_stretch([slots[p, q] for q in support[: i + 1]]) for i, p in enumerate(support)]
            for c in used
            for support in [self._supports[c]]
        }
        self._cross = []
        for first, second in crossing:
            left, right = self._supports[first], self._supports[second]
            rows = [
                (
                    np.array([slots[max(p, q), min(p, q)] for q in right], dtype=int),
                    np.array([2.0 if p == q else 1.0 for q in right])[:, None],
                )
                for p in left
            ]
            self._cross.append((first, second, self._pairs[first, second], rows))
        # A parameter that one uncorrelated entry measures directly: its derivative is 1, all of them go in one stroke.
        plain = [
            c
            for c, (target, shift) in enumerate(self._channels)
            if shift is None
            and self.graph.targets[target] in self.graph.inputs
            and len(self._own_entries[c]) == 1
            and self._channel_of.count(c) == 1
        ]
        self._plain_entries = np.array([self._own_entries[c][0] for c in plain], dtype=int)
        self._plain_parameters = np.array([self._supports[c][0] for c in plain], dtype=int)
        self._plain_slots = np.array([slots[p, p] for p in self._plain_parameters], dtype=int)
        self._other_channels = [c for c in range(len(self._channels)) if c not in plain]
        self._support_rows = [_stretch(list(support)) for support in self._supports]
        self._members = [
            [entry for entry, own in enumerate(self._channel_of) if own == channel]
            for channel in range(len(self._channels))
        ]

    # -- values -------------------------------------------------------------------------------------------------

    def predictions(self, theta: np.ndarray) -> np.ndarray:
        """Predicted value of every entry, ``(n, B) -> (m, B)``."""
        results = self.graph.evaluate(list(theta[: len(self.graph.inputs)]))
        out = np.empty((self.n_entries, theta.shape[1]))
        for entry, (target, shift) in enumerate(zip(self._targets, self._shifts, strict=True)):
            out[entry] = results[target] if shift is None else results[target] + theta[shift]
        return out

    def residuals(self, theta: np.ndarray, data: np.ndarray | None = None) -> np.ndarray:
        """Whitened residuals, ``(n, B) -> (m, B)``; nan where a formula has no value."""
        with np.errstate(all="ignore"):
            predicted = self.predictions(theta)
            measured = self._measured if data is None else data
            return np.asarray(self.terms.whiten(self.terms.standardised(predicted, measured)))

    def chi2(self, theta: np.ndarray, data: np.ndarray | None = None) -> np.ndarray:
        """Sum of the squared residuals, ``(n, B) -> (B,)``; +inf at impossible points."""
        out = np.empty(theta.shape[1])
        for start in range(0, len(out), CHUNK):
            part = slice(start, start + CHUNK)
            residuals = self.residuals(theta[:, part], None if data is None else data[:, part])
            out[part] = _sum_of_squares(residuals)
        return out

    # -- derivatives --------------------------------------------------------------------------------------------

    def _differentiate(self, theta: np.ndarray) -> tuple[np.ndarray, list[np.ndarray]]:
        batch = theta.shape[1]
        results = self.graph.evaluate(seed(theta[: len(self.graph.inputs)]), call_with_derivatives)
        predicted = np.empty((self.n_entries, batch))
        tangents = []
        for (target, shift), members in zip(self._channels, self._members, strict=True):
            result = results[target]
            value = getattr(result, "value", result)
            rows = tangents_of(result, self.graph.supports[self.graph.targets[target]], batch)
            if shift is not None:
                value = value + theta[shift]
                rows = np.concatenate([rows, np.ones((1, batch))])
            tangents.append(rows)
            for entry in members:
                predicted[entry] = value
        return predicted, tangents

    def jacobian(self, theta: np.ndarray, data: np.ndarray | None = None) -> np.ndarray:
        """Derivatives of the whitened residuals, ``(n, B) -> (m, n, B)``."""
        with np.errstate(all="ignore"):
            predicted, tangents = self._differentiate(theta)
            measured = self._measured if data is None else data
            slopes = self.terms.standardised_derivative(predicted, measured)
            out = np.zeros((self.n_entries, self.n_parameters, theta.shape[1]))
            for entry, channel in enumerate(self._channel_of):
                out[entry, list(self._supports[channel])] = slopes[entry] * tangents[channel]
            return np.asarray(self.terms.whiten(out))

    def linearise(self, theta: np.ndarray, data: np.ndarray | None = None) -> Linearisation:
        """chi-square, its gradient and the sparse normal matrix J^T J; never a dense Jacobian.

        Returns
        -------
        Linearisation
            ``gradient`` has shape (B, n) and is the derivative of chi-square; impossible points have chi2 +inf
            and zeros elsewhere.
        """
        batch = theta.shape[1]
        chi2 = np.empty(batch)
        gradient = np.empty((self.n_parameters, batch))
        normal = np.empty((len(self._rows), batch))
        for start in range(0, batch, CHUNK):
            part = slice(start, start + CHUNK)
            self._linearise_chunk(
                theta[:, part],
                None if data is None else data[:, part],
                chi2[part],
                gradient[:, part],
                normal[:, part],
            )
        return Linearisation(chi2, gradient.T, SparseNormal(self._rows, self._cols, normal))

    def _linearise_chunk(
        self,
        theta: np.ndarray,
        data: np.ndarray | None,
        chi2: np.ndarray,
        gradient: np.ndarray,
        normal: np.ndarray,
    ) -> None:
        with np.errstate(all="ignore"):
            predicted, tangents = self._differentiate(theta)
            measured = self._measured if data is None else data
            u = self.terms.standardised(predicted, measured)
            slopes = self.terms.standardised_derivative(predicted, measured)
            chi2[:] = _sum_of_squares(np.asarray(self.terms.whiten(u)))
            pulled = u.copy()  # R^-1 u
            for block in self.terms.correlation_blocks:
                columns = block.inverse.T[:, :, None] * u[block.indices][:, None, :]
                pulled[block.indices] = _total(columns, range(len(columns)))
            push = pulled * slopes
            squares = slopes * slopes

            gradient[:] = 0.0
            normal[:] = 0.0
            gradient[self._plain_parameters] = 2.0 * push[self._plain_entries]
            normal[self._plain_slots] = squares[self._plain_entries]
            for channel in self._other_channels:
                rows = tangents[channel]
                gradient[self._support_rows[channel]] += 2.0 * _total(push, self._members[channel]) * rows
                if channel not in self._outer:
                    continue
                weight = _total(squares, self._own_entries[channel])
                for i, j, coefficient in self._pairs.get((channel, channel), ()):
                    weight = weight + coefficient * slopes[i] * slopes[j]
                for i, (where, scaled) in enumerate(zip(self._outer[channel], weight * rows, strict=True)):
                    normal[where] += scaled * rows[: i + 1]
            for first, second, pairs, places in self._cross:
                weight = sum(coefficient * slopes[i] * slopes[j] for i, j, coefficient in pairs)
                scaled = weight * tangents[first]
                for row, (where, factor) in zip(scaled, places, strict=True):
                    normal[where] += factor * (row * tangents[second])

            # A kink (|z| at z = 0) has no slope: its nan is left out rather than spread.
            for array in (gradient, normal):
                if not np.isfinite(array).all():
                    array[~np.isfinite(array)] = 0.0
            impossible = ~np.isfinite(chi2)
            if impossible.any():
                gradient[:, impossible] = 0.0
                normal[:, impossible] = 0.0


def _stretch(index: list[int]) -> slice | np.ndarray:
    """An index as a slice where it is one: a view costs nothing."""
    if index and index == list(range(index[0], index[0] + len(index))):
        return slice(index[0], index[0] + len(index))
    return np.array(index, dtype=int)


# Sums add one row after another and never call a matrix library: one point and a batch agree bit for bit.


def _total(rows: np.ndarray, members: Sequence[int]) -> np.ndarray | float:
    if not members:
        return 0.0
    total: np.ndarray = rows[members[0]]
    for member in members[1:]:
        total = total + rows[member]
    return total


def _sum_of_squares(residuals: np.ndarray) -> np.ndarray:
    total = np.zeros(residuals.shape[1])
    with np.errstate(all="ignore"):
        for row in residuals:
            total += row * row
    total[~np.isfinite(total)] = np.inf
    return total
