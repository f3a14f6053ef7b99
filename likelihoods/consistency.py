"""What must hold between entries: no double counting, sensible correlations, scale factors of groups."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from itertools import combinations

from likelihoods.averaging import average
from likelihoods.covariance import (
    LOWEST_EIGENVALUE,
    connected_components,
    correlation_matrix,
    lowest_eigenvalue,
    shared_sources,
)
from likelihoods.entries import Block, Correlation, Entry, convert_numbers

_SMALLEST, _LARGEST = 1e-100, 1e100
_MOST_ASYMMETRIC = 1e6


def consistency_problems(
    entries: Sequence[Entry], blocks: Sequence[Block], correlations: Sequence[Correlation]
) -> list[str]:
    """Check entries against one another.

    Returns
    -------
    list of str
        One message per problem.
    """
    numbers = _numbers(entries)
    if numbers:
        return numbers
    return [
        *_overlaps(entries),
        *_same_pdg_identifier(entries),
        *_inflate_groups(entries),
        *_correlations(entries, blocks, correlations),
    ]


def with_group_scale_factors(entries: Sequence[Entry]) -> tuple[Entry, ...]:
    """Recompute the scale factor of every ``inflate_group`` from the members present.

    The factor is that of their weighted average (`likelihoods.averaging.average`), before any scaling and
    without correlations; 1 for a single member.
    """
    groups: dict[str, list[Entry]] = {}
    for entry in entries:
        if entry.inflate_group is not None:
            groups.setdefault(entry.inflate_group, []).append(entry)
    factors = {}
    for name, members in groups.items():
        plain = [convert_numbers(entry.declared, entry.unit, 1.0) for entry in members]
        columns = ([numbers[key] for numbers in plain] for key in ("value", "plus", "minus"))
        factors[name] = average(*columns).scale  # type: ignore[arg-type]
    return tuple(
        entry if entry.inflate_group is None else entry.restated(entry.declared, factors[entry.inflate_group])
        for entry in entries
    )


def _numbers(entries: Iterable[Entry]) -> list[str]:
    """Find numbers whose squares or ratios would leave the range of floating point."""
    problems = []
    for entry in entries:
        small, large = sorted((entry.plus, entry.minus))
        if not (small > _SMALLEST and max(large, abs(entry.value), entry.flat_halfwidth) < _LARGEST):
            what = f"a value or error outside {_SMALLEST:g} to {_LARGEST:g} {entry.unit}"
        elif large / small > _MOST_ASYMMETRIC:
            what = f"errors that differ by more than a factor {_MOST_ASYMMETRIC:g}"
        else:
            continue
        problems.append(f"{entry.where} has {what}; check the numbers and the unit")
    return problems


def _overlaps(entries: Iterable[Entry]) -> list[str]:
    by_name: dict[str, Entry] = {}
    for entry in entries:
        by_name[entry.id] = entry
        if entry.block is not None:
            by_name.setdefault(entry.block, entry)
    problems: dict[frozenset[str], str] = {}
    for entry in by_name.values():
        for name in entry.overlaps:
            other = by_name.get(name)
            if other is None or other is entry or (entry.block is not None and entry.block == other.block):
                continue
            pair = frozenset((entry.block or entry.id, other.block or other.id))
            problems.setdefault(
                pair,
                f'{entry.where} overlaps with "{name}" ({other.file}:{other.line}): the same '
                f"information would count twice; remove one, drop an included one, or use --without {name}",
            )
    return list(problems.values())


def _same_pdg_identifier(entries: Iterable[Entry]) -> list[str]:
    users: dict[str, list[Entry]] = {}
    for entry in entries:
        if entry.pdg is not None:
            users.setdefault(entry.pdg, []).append(entry)
    problems = []
    for identifier, same in users.items():
        for first, second in combinations(same, 2):
            one_block = first.block is not None and first.block == second.block
            if not one_block and (first.part_of is None or first.part_of != second.part_of):
                problems.append(
                    f'{second.where} has the PDG identifier {identifier} of "{first.id}" '
                    f'({first.file}:{first.line}); drop one, or write the same part_of = "NAME" in both if '
                    "they are to be combined"
                )
                break
    return problems


def _inflate_groups(entries: Iterable[Entry]) -> list[str]:
    first: dict[str, Entry] = {}
    problems = []
    for entry in entries:
        if entry.inflate_group is None:
            continue
        other = first.setdefault(entry.inflate_group, entry)
        if other.quantity != entry.quantity:
            problems.append(
                f'{entry.where} is in the inflate_group "{entry.inflate_group}" of "{other.id}", '
                f"which measures {other.quantity}, not {entry.quantity}; a scale factor needs one quantity"
            )
    return problems


def _correlations(
    entries: Sequence[Entry], blocks: Sequence[Block], correlations: Sequence[Correlation]
) -> list[str]:
    already: dict[frozenset[str], str] = {}
    for block in blocks:
        already |= {frozenset(pair): f'the block "{block.id}"' for pair in combinations(block.ids, 2)}
    for source, users in shared_sources(entries).items():
        for i, j in combinations(users, 2):
            already[frozenset((entries[i].id, entries[j].id))] = f'the shared error source "{source}"'
    problems = []
    for correlation in correlations:
        by = already.get(frozenset(correlation.between))
        if by is not None:
            first, second = correlation.between
            problems.append(
                f'{correlation.file}:{correlation.line}: [correlation] "{first}" and "{second}" are already '
                f"correlated by {by}; state a correlation once"
            )
    if problems:
        return problems
    matrix = correlation_matrix(entries, blocks, correlations)
    for component in connected_components(matrix):
        lowest = lowest_eigenvalue(matrix[component][:, component])
        if lowest <= LOWEST_EIGENVALUE:
            names = ", ".join(f'"{entries[i].id}"' for i in component)
            problems.append(
                f"{entries[component[0]].where} the combined correlation matrix of {names} is not positive "
                f"definite: lowest eigenvalue {lowest:.3g}; check coefficients and shared error sources"
            )
    return problems
