"""Compiling a catalogue and a hypothesis into a list of steps, and running it on batches.

Compilation keeps only what the targets need, orders it, and folds everything that rests on constants and fixed
parameters alone into numbers, once.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from observables.catalogue import Catalogue
from observables.errors import CatalogueError, InputError, UnknownNameError
from observables.nodes import Constant, Parameter, Quantity

if TYPE_CHECKING:
    from observables.hypothesis import Hypothesis

__all__ = ["Graph", "compile_graph", "compute", "find_parameters"]

#: Calls a quantity's function; differentiation puts its own in place of the plain call.
Caller = Callable[[Callable[..., Any], list[Any]], Any]


@dataclass(frozen=True)
class _Rule:
    """How one node is made: a function of other nodes, under the hypothesis in force."""

    function: Callable[..., Any]
    sources: tuple[str, ...]
    is_complex: bool


@dataclass(frozen=True)
class Graph:
    """A compiled computation.

    Attributes
    ----------
    inputs : tuple of str
        The leaves whose values `evaluate` takes, in that order.
    targets : tuple of str
        What it returns.
    supports : dict
        Target -> positions in ``inputs`` of the leaves it rests on, ascending.
    """

    inputs: tuple[str, ...]
    targets: tuple[str, ...]
    supports: dict[str, tuple[int, ...]]
    _folded: tuple[tuple[int, Any], ...]
    _steps: tuple[tuple[Callable[..., Any], tuple[int, ...], int, tuple[int, ...]], ...]
    _step_names: tuple[tuple[str, bool], ...]
    _target_slots: tuple[int, ...]
    _n_slots: int

    def evaluate(self, leaves: list[Any], call: Caller | None = None) -> list[Any]:
        """Values of the targets.

        Parameters
        ----------
        leaves : list
            One array (any shape, all broadcastable) per name in ``inputs``.
        call : callable, optional
            Used as ``call(function, arguments)`` in place of the plain call.

        Returns
        -------
        list
            One array per target; nan where a formula has no value. Constants come as scalars.
        """
        slots: list[Any] = [None] * self._n_slots
        for position, leaf in enumerate(leaves):
            slots[position] = leaf
        for slot, value in self._folded:
            slots[slot] = value
        with np.errstate(all="ignore"):
            for function, sources, slot, spent in self._steps:
                arguments = [slots[source] for source in sources]
                slots[slot] = function(*arguments) if call is None else call(function, arguments)
                for source in spent:  # lets a long batch run in the memory of its widest layer
                    slots[source] = None
        return [slots[slot] for slot in self._target_slots]

    def verify(self, leaves: list[Any]) -> None:
        """Run every formula once and name the one that fails or returns what it did not declare.

        Parameters
        ----------
        leaves : list
            As for `evaluate`; batches of at least two points.

        Raises
        ------
        CatalogueError
            A formula that raises, or that declares ``-> Real`` and returns complex numbers.
        """
        steps = iter(self._step_names)

        def call(function: Callable[..., Any], arguments: list[Any]) -> Any:
            name, is_complex = next(steps)
            code = getattr(function, "__code__", None)
            place = f"{code.co_filename}:{code.co_firstlineno}: " if code is not None else ""
            try:
                result = function(*arguments)
            except Exception as error:
                raise CatalogueError(
                    f"{place}the formula of {name!r} fails on arrays: {type(error).__name__}: {error}; use NumPy's "
                    "functions (np.sin, not math.sin) and np.where instead of if"
                ) from error
            if np.iscomplexobj(result) and not is_complex:
                raise CatalogueError(
                    f"{place}{name!r} declares '-> Real' but returns complex numbers; declare '-> Complex', or take "
                    "the real part, magnitude or phase"
                )
            return result

        self.evaluate(leaves, call)


def find_parameters(
    catalogue: Catalogue, targets: tuple[str, ...], hypothesis: Hypothesis, overrides: tuple[str, ...] = ()
) -> dict[str, Parameter | Constant]:
    """Every leaf that the targets rest on under a hypothesis, in order of declaration.

    Returns
    -------
    dict
        Name -> `Parameter` or `Constant`; the hypothesis' own parameters come last.
    """
    rules, leaves = _collect(catalogue, targets, hypothesis, frozenset(overrides))
    del rules
    known = [name for name in catalogue.names() if name in leaves]
    known += [name for name in hypothesis.parameters if name in leaves and name not in catalogue]
    return {name: leaves[name] for name in known}


def compile_graph(
    catalogue: Catalogue,
    targets: tuple[str, ...],
    inputs: tuple[str, ...],
    fixed: Mapping[str, float],
    hypothesis: Hypothesis,
) -> Graph:
    """Order, fold and prune.

    Parameters
    ----------
    catalogue : Catalogue
    targets : tuple of str
        Names to compute.
    inputs : tuple of str
        Nodes whose values vary: parameters, constants that were promoted, or overridden quantities.
    fixed : mapping
        Values of the other leaves; constants that are absent take their catalogue value.
    hypothesis : Hypothesis

    Returns
    -------
    Graph

    Raises
    ------
    InputError
        A parameter that is neither among ``inputs`` nor ``fixed``.
    CatalogueError
        A missing ingredient or a cycle.
    """
    rules, leaves = _collect(catalogue, targets, hypothesis, frozenset(inputs))
    values: dict[str, Any] = {}
    missing = []
    for name, leaf in leaves.items():
        if name in inputs:
            continue
        if name in fixed:
            values[name] = np.float64(fixed[name])
        elif isinstance(leaf, Constant):
            values[name] = np.float64(leaf.value)
        else:
            missing.append(f"{name} [{leaf.unit}]")
    if missing:
        raise InputError(f"no value for the parameter{'s' if len(missing) > 1 else ''} " + ", ".join(missing))

    position = {name: i for i, name in enumerate(inputs)}
    supports: dict[str, tuple[int, ...]] = {name: (i,) for name, i in position.items()}
    varying: list[str] = []
    for name, rule in rules.items():  # already in dependency order
        if all(source in values for source in rule.sources):
            with np.errstate(all="ignore"):
                values[name] = _as_number(rule.function(*(values[s] for s in rule.sources)), rule.is_complex)
        else:
            joined = set().union(*(supports.get(source, ()) for source in rule.sources))
            supports[name] = tuple(sorted(joined))
            varying.append(name)

    slot = dict(position)
    for name in [*values, *varying]:
        slot.setdefault(name, len(slot))
    last_use: dict[str, str] = {}
    for name in varying:
        for source in rules[name].sources:
            last_use[source] = name
    keep = set(targets) | set(values)
    spent: dict[str, list[int]] = {name: [] for name in varying}
    for source, user in last_use.items():
        if source not in keep:
            spent[user].append(slot[source])
    steps = tuple(
        (rules[name].function, tuple(slot[s] for s in rules[name].sources), slot[name], tuple(spent[name]))
        for name in varying
    )
    return Graph(
        inputs=inputs,
        targets=targets,
        supports={name: supports.get(name, ()) for name in targets},
        _folded=tuple((slot[name], value) for name, value in values.items()),
        _steps=steps,
        _step_names=tuple((name, rules[name].is_complex) for name in varying),
        _target_slots=tuple(slot[name] for name in targets),
        _n_slots=len(slot),
    )


def compute(
    catalogue: Catalogue,
    names: tuple[str, ...],
    values: Mapping[str, Any],
    hypothesis: Hypothesis,
    overrides: Mapping[str, Any],
) -> dict[str, Any]:
    """Evaluate quantities once; the work behind `Catalogue.compute`."""
    leaves = find_parameters(catalogue, names, hypothesis, tuple(overrides))
    for name in values:
        if name not in catalogue and name not in hypothesis.parameters:
            pool = [*catalogue.names("parameter"), *hypothesis.parameters]
            raise UnknownNameError(name, "parameter", catalogue.close_matches(name, pool))
        if name not in hypothesis.parameters and isinstance(catalogue[name], Quantity):
            raise InputError(f"{name!r} is computed from others; a value in its place goes into `overrides`")
    for name in overrides:
        if name not in catalogue and name not in hypothesis.parameters:
            raise UnknownNameError(name, "quantity or parameter", catalogue.close_matches(name))
    given = {name: values[name] for name in leaves if name in values} | dict(overrides)
    fixed = {name: leaf.start for name, leaf in leaves.items() if isinstance(leaf, Parameter) and leaf.fixed}
    graph = compile_graph(catalogue, names, tuple(given), fixed, hypothesis)
    arrays = [np.asarray(v) for v in given.values()]
    arrays = [a.astype(complex if np.iscomplexobj(a) else float)[()] for a in arrays]
    graph.verify([np.atleast_1d(array) for array in arrays])
    results = graph.evaluate(arrays)
    shape = np.broadcast_shapes(*(np.shape(a) for a in arrays))
    return {
        name: np.array(np.broadcast_to(result, shape))[()]
        for name, result in zip(names, results, strict=True)
    }


def _collect(
    catalogue: Catalogue, targets: tuple[str, ...], hypothesis: Hypothesis, stops: frozenset[str]
) -> tuple[dict[str, _Rule], dict[str, Parameter | Constant]]:
    """Rules in dependency order and leaves, of all that the targets need; ``stops`` are taken as given."""
    rules: dict[str, _Rule] = {}
    leaves: dict[str, Parameter | Constant] = {}
    open_names: list[str] = []

    def visit(name: str, wanted_by: str) -> None:
        if name in rules or name in leaves or (name in stops and not _is_leaf(catalogue, hypothesis, name)):
            return
        if name in open_names:
            raise CatalogueError("cycle " + " <- ".join([*open_names[open_names.index(name) :], name]))
        if name in hypothesis.parameters:
            leaves[name] = hypothesis.parameters[name]
            return
        if name not in catalogue:
            if wanted_by:
                raise CatalogueError(f"{wanted_by!r} needs {name!r}, which nobody declares")
            raise UnknownNameError(name, "quantity or parameter", catalogue.close_matches(name))
        node = catalogue[name]
        if isinstance(node, Parameter | Constant):
            leaves[name] = node
            return
        assert isinstance(node, Quantity)
        chain = [_Rule(node.function, tuple(node.ingredients.values()), node.is_complex)]
        labels = [name]
        for depth, layer in enumerate(hypothesis.layers.get(name, ())):
            below = f"{name} (layer {depth})"
            labels[-1:] = [below, name]
            sources = tuple(below if a == "standard" else s for a, s in layer.ingredients.items())
            chain.append(_Rule(layer.function, sources, layer.complex_valued))
        # A layer that does not build on the one below hides it.
        first = max((i for i, r in enumerate(chain) if i == 0 or labels[i - 1] not in r.sources), default=0)
        open_names.append(name)
        for label, rule in list(zip(labels, chain, strict=True))[first:]:
            for source in rule.sources:
                if source not in labels[:-1]:
                    visit(source, name)
            rules[label] = rule
        open_names.pop()

    for target in targets:
        visit(target, "")
    return rules, leaves


def _is_leaf(catalogue: Catalogue, hypothesis: Hypothesis, name: str) -> bool:
    return name in hypothesis.parameters or (name in catalogue and catalogue[name].kind != "quantity")


def _as_number(value: Any, is_complex: bool) -> Any:
    """A folded value as NumPy number or array, so that Python floats never enter a formula."""
    array = np.asarray(value, dtype=complex if is_complex else float)
    return array[()]
