"""Inputs: everything that an inputs file says, checked, converted and ready to be compiled."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from likelihoods import resolved, selection
from likelihoods.bundled import find_inputs
from likelihoods.consistency import consistency_problems, with_group_scale_factors
from likelihoods.covariance import correlation_matrix, shared_sources
from likelihoods.document import CatalogueLike
from likelihoods.entries import Block, Correlation, Entry, Notice, ParameterSetting
from likelihoods.resolve import resolve
from likelihoods.terms import Terms
from observables.errors import InputError, UnknownNameError


def load_inputs(
    name_or_path: str | Path,
    *,
    only: Iterable[str] = (),
    without: Iterable[str] = (),
    settings: Iterable[str] = (),
    catalogue: CatalogueLike | None = None,
) -> Inputs:
    """Read an inputs file and everything that it includes.

    Parameters
    ----------
    name_or_path : str or Path
        An existing file, or else the name of a bundled set (`likelihoods.bundled_names`).
    only, without : iterable of str
        Selections as in `Inputs.select`, made before entries are checked against one another: of two
        alternatives in one file, one may be left out here.
    settings : iterable of str
        Changes as in `Inputs.with_settings`.
    catalogue : Catalogue, optional
        Where quantities are looked up; the public catalogue if not given.

    Returns
    -------
    Inputs

    Raises
    ------
    InputError
        With every problem found, each as ``file:line: [table number "id"] what is wrong; what to do``.
    UnknownNameError
        When a selection names no entry, block or group.

    Examples
    --------
    >>> from likelihoods import load_inputs
    >>> inputs = load_inputs("averages-2026")  # doctest: +SKIP
    >>> inputs.entries[0].id, inputs.entries[0].value, inputs.entries[0].unit  # doctest: +SKIP
    """
    if catalogue is None:
        from observables import catalogue as public

        catalogue = public.with_hypothesis_parameters()
    path, name = find_inputs(name_or_path)
    found = resolve(path, catalogue)
    inputs = Inputs(
        title=found.title or name,
        name=name,
        path=str(path),
        revision=found.revision,
        entries=tuple(found.entries.values()),
        blocks=tuple(found.blocks.values()),
        correlations=tuple(found.correlations),
        parameters=found.parameters,
        history=tuple(found.notices),
    )
    inputs = selection.change(inputs, tuple(settings), catalogue)
    return selection.keep(inputs, tuple(only), tuple(without)).checked()


@dataclass(frozen=True)
class Inputs:
    """The entries of an inputs file and what goes with them; all numbers in the catalogue's units.

    Attributes
    ----------
    title, name, path : str
        Title; bundled name or file name; where the file was.
    revision : int
        Revision of a published set.
    entries : tuple of Entry
        In order of the files: included ones first.
    blocks : tuple of Block
        Correlation matrices of ``[[correlated]]`` tables.
    correlations : tuple of Correlation
        Single coefficients of ``[[correlation]]`` tables.
    parameters : dict of str to ParameterSetting
        What ``[parameters.NAME]`` tables say.
    history : tuple of Notice
        What was replaced, dropped or changed on the way.
    """

    title: str
    name: str
    path: str
    revision: int
    entries: tuple[Entry, ...]
    blocks: tuple[Block, ...] = ()
    correlations: tuple[Correlation, ...] = ()
    parameters: dict[str, ParameterSetting] = field(default_factory=dict, hash=False)
    history: tuple[Notice, ...] = ()

    def checked(self) -> Inputs:
        """Check entries against one another and recompute scale factors of groups.

        Raises
        ------
        InputError
            With every problem found.
        """
        if not self.entries:
            raise InputError(f"{self.path}: no entries; add a [[measurement]] or include a set")
        problems = consistency_problems(self.entries, self.blocks, self.correlations)
        if problems:
            raise InputError(problems)
        return replace(self, entries=with_group_scale_factors(self.entries))

    @property
    def ids(self) -> tuple[str, ...]:
        """Ids of the entries, in order."""
        return tuple(entry.id for entry in self.entries)

    def __getitem__(self, identity: str) -> Entry:
        for entry in self.entries:
            if entry.id == identity:
                return entry
        raise UnknownNameError(identity, "entry", selection.close(identity, self.ids))

    @property
    def groups(self) -> dict[str, tuple[str, ...]]:
        """Group names to the ids of their entries, in order of appearance."""
        groups: dict[str, list[str]] = {}
        for entry in self.entries:
            for group in entry.groups:
                groups.setdefault(group, []).append(entry.id)
        return {group: tuple(ids) for group, ids in groups.items()}

    @cached_property
    def notices(self) -> tuple[Notice, ...]:
        """What the header of a result has to say about these inputs."""
        recalled = [
            Notice("recalled", entry.id, f"quoted from memory: {entry.source}")
            for entry in self.entries
            if entry.recalled
        ]
        inflated = []
        for entry in self.entries:
            if entry.inflate != 1.0:
                why = entry.note or (
                    f"scale factor of {entry.inflate_group}" if entry.inflate_group else "no reason given"
                )
                inflated.append(
                    Notice("inflated", entry.id, f"error multiplied by {entry.inflate:.4g}: {why}")
                )
        shared = [
            Notice("shared", source, f"error source common to {', '.join(self.entries[i].id for i in users)}")
            for source, users in shared_sources(self.entries).items()
        ]
        return (*self.history, *recalled, *inflated, *shared)

    def correlation_matrix(self) -> NDArray[np.float64]:
        """Correlation matrix of all entries, shape (m, m)."""
        return correlation_matrix(self.entries, self.blocks, self.correlations)

    @cached_property
    def terms(self) -> Terms:
        """The entries compiled into one vectorised statistical model."""
        return Terms.from_entries(self.entries, self.correlation_matrix())

    def select(self, only: Iterable[str] = (), without: Iterable[str] = ()) -> Inputs:
        """Keep some of the entries.

        Parameters
        ----------
        only : iterable of str
            Ids, block ids and groups to keep; all if empty.
        without : iterable of str
            Ids, block ids and groups to leave out.

        Raises
        ------
        UnknownNameError
            When a word selects nothing.
        InputError
            When nothing is left.
        """
        return selection.keep(self, tuple(only), tuple(without)).checked()

    def with_settings(self, settings: Sequence[str], catalogue: CatalogueLike | None = None) -> Inputs:
        """Change single numbers.

        Parameters
        ----------
        settings : sequence of str
            ``ID.value=``, ``ID.error=`` (a number or ``[plus, minus]``), ``ID.errors.SOURCE=``,
            ``ID.flat_halfwidth=``, ``ID.inflate=``, ``parameters.NAME.start=`` (``lower``, ``upper``,
            ``fixed``). Numbers are in the unit that the entry is written in, unless another follows them
            (``0.02 1/ps``).
        catalogue : Catalogue, optional
            For the parameters; the public catalogue if not given.

        Raises
        ------
        InputError, UnknownNameError
            When a setting is not understood, or names nothing.
        """
        return selection.change(self, tuple(settings), catalogue).checked()

    def resolved_toml(self) -> str:
        """Self-contained inputs file: includes merged, matrices inlined. Loading it gives the same terms."""
        return resolved.to_toml(self)

    @cached_property
    def sha256(self) -> str:
        """Checksum of `resolved_toml`: the same whenever the same numbers enter a fit."""
        return hashlib.sha256(self.resolved_toml().encode()).hexdigest()
