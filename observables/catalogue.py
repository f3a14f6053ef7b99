"""Declaring quantities and their leaves; the dependency graph over their names.

A quantity is a function, its arguments are its ingredients: the argument ``M12_Bd`` is the quantity, parameter or
constant of that name, and no other wiring is needed. ``catalogue`` is the catalogue that ships with weakmix; the
decorators of this module add to it. A catalogue of one's own is ``Catalogue()`` with the same methods.

>>> from observables import catalogue
>>> catalogue["mixing_frequency_Bd"].unit
'1/ps'
>>> catalogue.ingredients("mixing_frequency_Bd")
('M12_Bd', 'reduced_planck_constant')
"""

from __future__ import annotations

import difflib
import inspect
import math
from collections.abc import Callable, Iterable, Iterator, Mapping
from typing import TYPE_CHECKING, Any, TypeVar

from observables.errors import CatalogueError, UnknownNameError
from observables.nodes import (
    Complex,
    Constant,
    Node,
    Parameter,
    Quantity,
    Real,
    caller_origin,
    caller_owner,
    declared_complex,
    make_parameter,
)

if TYPE_CHECKING:
    from observables.hypothesis import Hypothesis

__all__ = [
    "Catalogue",
    "Complex",
    "Constant",
    "Node",
    "Parameter",
    "Quantity",
    "Real",
    "catalogue",
    "constant",
    "parameter",
    "quantity",
]

Function = TypeVar("Function", bound=Callable[..., Any])


class Catalogue:
    """Named quantities, parameters and constants, and the hypotheses that overlay them."""

    def __init__(self) -> None:
        self._nodes: dict[str, Node] = {}
        self._hypotheses: dict[str, Hypothesis] = {}

    # -- declaring ----------------------------------------------------------------------------------------------

    def parameter(
        self,
        name: str,
        *,
        unit: str,
        start: float,
        lower: float = -math.inf,
        upper: float = math.inf,
        scale: float,
        title: str,
        latex: str = "",
        source: str = "",
        cp_odd: bool = False,
        period: float | None = None,
        fixed: bool = False,
    ) -> Parameter:
        """Declare a leaf that a fit may vary; see `Parameter` for the meaning of the arguments.

        Raises
        ------
        CatalogueError
            The name is taken, the bounds are reversed, or the start value lies outside them.
        """
        node = make_parameter(
            name,
            unit=unit,
            start=start,
            lower=lower,
            upper=upper,
            scale=scale,
            title=title,
            latex=latex,
            source=source,
            cp_odd=cp_odd,
            period=period,
            fixed=fixed,
            origin=caller_origin(),
            owner=caller_owner(),
        )
        self._add(node)
        return node

    def constant(
        self,
        name: str,
        value: float,
        *,
        error: float = 0.0,
        unit: str,
        source: str,
        pdg: str | None = None,
        title: str = "",
        latex: str = "",
    ) -> Constant:
        """Declare a leaf that a fit does not vary.

        Raises
        ------
        CatalogueError
            The name is taken, or the value or error is not a finite number.
        """
        origin = caller_origin()
        if not (math.isfinite(value) and math.isfinite(error) and error >= 0):
            raise CatalogueError(f"{origin}: constant {name!r} needs a finite value and an error >= 0")
        node = Constant(
            name=name,
            unit=unit,
            title=title or name.replace("_", " "),
            latex=latex,
            source=source,
            value=float(value),
            error=float(error),
            pdg=pdg,
            origin=origin,
            owner=caller_owner(),
        )
        self._add(node)
        return node

    def quantity(
        self,
        *,
        unit: str,
        title: str,
        latex: str = "",
        source: str,
        cp: str | None = None,
        period: float | None = None,
        physical: bool = True,
        recalled: bool = False,
        name: str | None = None,
        ingredients: Mapping[str, str] | None = None,
    ) -> Callable[[Function], Function]:
        """Declare the decorated function as a quantity; the function itself is returned unchanged.

        Parameters
        ----------
        unit, title, latex, source : str
            ``unit`` is compulsory, ``"1"`` for dimensionless; ``source`` names the published formula.
        cp : str, optional
            What the CP operation does: ``"even"`` (default for real), ``"odd"``, ``"conjugate"`` (default for
            complex), or the name of the quantity it is exchanged with.
        period : float, optional
            For angles.
        physical : bool
            False for what depends on the phase convention of the matrix.
        recalled : bool
            Formula quoted from memory.
        name : str, optional
            Name in the catalogue, if not the function's own (families of quantities).
        ingredients : mapping, optional
            Argument -> node name, where they differ.

        Raises
        ------
        CatalogueError
            The name is taken, or the return annotation is neither ``Real`` nor ``Complex``.
        """

        def declare(function: Function) -> Function:
            code = function.__code__
            origin = f"{code.co_filename}:{code.co_firstlineno}"
            label = name or function.__name__
            is_complex = declared_complex(function, label, origin)
            arguments = tuple(inspect.signature(function).parameters)
            renamed = dict(ingredients or {})
            if unknown := set(renamed) - set(arguments):
                raise CatalogueError(
                    f"{origin}: {label!r} renames {sorted(unknown)}, which are not its arguments"
                )
            self._add(
                Quantity(
                    name=label,
                    unit=unit,
                    title=title,
                    latex=latex,
                    source=source,
                    period=period,
                    function=function,
                    ingredients={argument: renamed.get(argument, argument) for argument in arguments},
                    complex_valued=is_complex,
                    cp=cp or ("conjugate" if is_complex else "even"),
                    physical=physical,
                    recalled=recalled,
                    origin=origin,
                    owner=f"{function.__module__}.{function.__qualname__}:{label}",
                )
            )
            return function

        return declare

    def hypothesis(self, name: str, *, title: str, source: str) -> Hypothesis:
        """Declare and register an overlay of extra parameters and replaced quantities."""
        from observables.hypothesis import Hypothesis

        overlay = Hypothesis(name, title=title, source=source)
        self.register(overlay)
        return overlay

    def register(self, overlay: Hypothesis) -> None:
        """Make a hypothesis known by its name."""
        if overlay.name == "standard":
            raise CatalogueError("'standard' is the name of the empty hypothesis")
        self._hypotheses[overlay.name] = overlay

    def _add(self, node: Node) -> None:
        if not node.name.isidentifier():
            raise CatalogueError(f"{node.origin}: {node.name!r} is no identifier")
        held = self._nodes.get(node.name)
        # A notebook cell that is run again declares the same function anew.
        if held is not None and not (held.owner and held.owner == node.owner):
            raise CatalogueError(f"two owners of the name {node.name!r}: {held.origin} and {node.origin}")
        self._nodes[node.name] = node

    # -- looking up ---------------------------------------------------------------------------------------------

    def __getitem__(self, name: str) -> Node:
        try:
            return self._nodes[name]
        except KeyError:
            raise UnknownNameError(name, "quantity or parameter", self.close_matches(name)) from None

    def __contains__(self, name: object) -> bool:
        return name in self._nodes

    def __iter__(self) -> Iterator[str]:
        return iter(self._nodes)

    def __len__(self) -> int:
        return len(self._nodes)

    def names(self, kind: str | None = None) -> tuple[str, ...]:
        """Names in order of declaration, of one kind (``"quantity"``, ``"parameter"``, ``"constant"``) or all."""
        return tuple(name for name, node in self._nodes.items() if kind in (None, node.kind))

    def close_matches(self, name: str, among: Iterable[str] | None = None) -> tuple[str, ...]:
        """The three names that look most like ``name``, best first."""
        pool = list(self._nodes if among is None else among)
        return tuple(difflib.get_close_matches(name, pool, n=3, cutoff=0.3))

    def ingredients(self, name: str) -> tuple[str, ...]:
        """Direct ingredients of a quantity; none for a leaf."""
        node = self[name]
        return tuple(node.ingredients.values()) if isinstance(node, Quantity) else ()

    def leaves_of(self, name: str) -> tuple[str, ...]:
        """Every parameter and constant that a node rests on, in order of declaration."""
        seen: set[str] = set()
        waiting = [name]
        while waiting:
            current = waiting.pop()
            if current not in seen:
                seen.add(current)
                waiting.extend(self.ingredients(current))
        return tuple(leaf for leaf in self._nodes if leaf in seen and self._nodes[leaf].kind != "quantity")

    def parameters_of(self, name: str) -> tuple[str, ...]:
        """Every parameter that a node rests on, in order of declaration."""
        return tuple(leaf for leaf in self.leaves_of(name) if isinstance(self._nodes[leaf], Parameter))

    def hypothesis_names(self) -> tuple[str, ...]:
        """Names of the registered hypotheses, ``"standard"`` first."""
        return ("standard", *self._hypotheses)

    def get_hypothesis(self, which: str | Hypothesis | Iterable[str | Hypothesis]) -> Hypothesis:
        """Find a hypothesis by name (``"a+b"`` and sequences compose), or pass one through.

        Raises
        ------
        UnknownNameError
            No hypothesis of that name.
        CatalogueError
            Two hypotheses that cannot be composed.
        """
        from observables.hypothesis import STANDARD, Hypothesis

        if isinstance(which, Hypothesis):
            self._check_overlay(which)
            return which
        parts = which.split("+") if isinstance(which, str) else list(which)
        combined = STANDARD
        for part in parts:
            if isinstance(part, Hypothesis):
                combined = combined + part
                continue
            label = part.strip()
            if label == "standard":
                continue
            if label not in self._hypotheses:
                close = self.close_matches(label, self.hypothesis_names())
                raise UnknownNameError(label, "hypothesis", close or self.hypothesis_names())
            combined = combined + self._hypotheses[label]
        self._check_overlay(combined)
        return combined

    def _check_overlay(self, overlay: Hypothesis) -> None:
        """A misspelt replacement would change nothing, and a parameter that is taken would hide its owner."""
        faults = []
        for name, layers in overlay.layers.items():
            node = self._nodes.get(name)
            if not isinstance(node, Quantity):
                close = ", ".join(self.close_matches(name, self.names("quantity"))) or "nothing like it"
                faults.append(
                    f"hypothesis {overlay.name!r} replaces {name!r}, which is no quantity; there is {close}"
                )
            elif any(layer.complex_valued != node.complex_valued for layer in layers):
                kind = "Complex" if node.complex_valued else "Real"
                faults.append(
                    f"hypothesis {overlay.name!r} replaces {name!r}, which must stay '-> {kind}' ({node.origin})"
                )
        faults.extend(
            f"two owners of the name {name!r}: hypothesis {overlay.name!r} ({node.origin}) and "
            f"{self._nodes[name].origin}"
            for name, node in overlay.parameters.items()
            if name in self._nodes
        )
        if faults:
            raise CatalogueError("\n".join(faults))

    # -- computing ----------------------------------------------------------------------------------------------

    def compute(
        self,
        names: Iterable[str],
        values: Mapping[str, Any],
        hypothesis: str | Hypothesis | Iterable[str | Hypothesis] = "standard",
        overrides: Mapping[str, Any] | None = None,
    ) -> dict[str, Any]:
        """Evaluate quantities at given values of the parameters.

        Parameters
        ----------
        names : iterable of str
            What to compute.
        values : mapping
            Parameter name -> value or array; all arrays broadcast. Parameters that are fixed by default may be
            left out. Constants may be given too.
        hypothesis : str or Hypothesis
            The overlay.
        overrides : mapping, optional
            Values that stand in for quantities, as when a matrix element is replaced by hand.

        Returns
        -------
        dict
            Name -> float64 or complex128 array (scalar for scalar input); nan where the formula has no value.

        Raises
        ------
        UnknownNameError
            An unknown quantity.
        InputError
            Parameters without a value, listed.
        """
        from observables.graph import compute

        return compute(self, tuple(names), values, self.get_hypothesis(hypothesis), overrides or {})

    def check(self) -> None:
        """Find missing ingredients, cycles and CP partners that do not exist.

        Raises
        ------
        CatalogueError
            Every fault, with the place of its declaration.
        """
        faults: list[str] = []
        for name, node in self._nodes.items():
            if not isinstance(node, Quantity):
                continue
            faults.extend(
                f"{node.origin}: {name!r} needs {needed!r}, which nobody declares"
                for needed in node.ingredients.values()
                if needed not in self._nodes
            )
            if node.cp not in ("even", "odd", "conjugate") and node.cp not in self._nodes:
                faults.append(
                    f"{node.origin}: {name!r} names the CP partner {node.cp!r}, which nobody declares"
                )
        if not faults:
            faults = self._cycles()
        if faults:
            raise CatalogueError("\n".join(faults))

    def _cycles(self) -> list[str]:
        done: set[str] = set()
        faults: list[str] = []

        def walk(name: str, path: tuple[str, ...]) -> None:
            if name in path:
                loop = (*path[path.index(name) :], name)
                places = ", ".join(self._nodes[member].origin for member in loop[:-1])
                faults.append(f"cycle {' <- '.join(loop)} ({places})")
                return
            if name in done:
                return
            for needed in self.ingredients(name):
                walk(needed, (*path, name))
            done.add(name)

        for name in self._nodes:
            walk(name, ())
        return faults

    def with_hypothesis_parameters(self) -> Catalogue:
        """A copy that also knows the parameters of all registered hypotheses, for reading what a file sets."""
        twin = self.copy()
        for overlay in self._hypotheses.values():
            for name, node in overlay.parameters.items():
                twin._nodes.setdefault(name, node)
        return twin

    def copy(self) -> Catalogue:
        """An independent catalogue with the same declarations."""
        twin = Catalogue()
        twin._nodes = dict(self._nodes)
        twin._hypotheses = dict(self._hypotheses)
        return twin


catalogue = Catalogue()
parameter = catalogue.parameter
constant = catalogue.constant
quantity = catalogue.quantity
