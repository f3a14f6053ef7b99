"""Hypotheses: named overlays of extra parameters and replaced quantities.

>>> from observables.hypothesis import Hypothesis
>>> from observables.catalogue import Complex
>>> extra = Hypothesis("extra-Bd", title="Something added to the B_d mixing amplitude", source="invented")
>>> _ = extra.parameter("added_real_Bd", unit="1", start=0.0, scale=0.1, title="real part of the added term")
>>> @extra.replaces("M12_Bd")
... def M12_Bd(standard, added_real_Bd) -> Complex:
...     return standard * (1 + added_real_Bd)
"""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, TypeVar

from observables.errors import CatalogueError
from observables.nodes import Parameter, caller_origin, caller_owner, declared_complex, make_parameter

__all__ = ["STANDARD", "Hypothesis", "Layer"]

Function = TypeVar("Function", bound=Callable[..., Any])


@dataclass(frozen=True)
class Layer:
    """One replacement of a quantity.

    Attributes
    ----------
    function : callable
        May take ``standard``: the quantity without this layer.
    ingredients : mapping
        Argument -> node name, ``standard`` left out.
    takes_standard : bool
    owner : str
        Name of the hypothesis.
    complex_valued : bool
    """

    function: Callable[..., Any]
    ingredients: Mapping[str, str]
    takes_standard: bool
    owner: str
    complex_valued: bool


class Hypothesis:
    """A named overlay on the catalogue.

    Parameters
    ----------
    name, title, source : str

    Attributes
    ----------
    parameters : dict
        Extra parameters by name.
    layers : dict
        Quantity name -> tuple of `Layer`, applied in order.
    """

    def __init__(self, name: str, *, title: str, source: str) -> None:
        self.name = name
        self.title = title
        self.source = source
        self.parameters: dict[str, Parameter] = {}
        self.layers: dict[str, tuple[Layer, ...]] = {}

    def __repr__(self) -> str:
        return f"Hypothesis({self.name!r})"

    def parameter(
        self, name: str, *, unit: str, start: float, scale: float, title: str, **more: Any
    ) -> Parameter:
        """Declare a parameter that exists only under this hypothesis; arguments as `Catalogue.parameter`."""
        origin, owner = caller_origin(), caller_owner()
        held = self.parameters.get(name)
        if held is not None and held.owner != owner:
            raise CatalogueError(
                f"{self.name!r} declares the parameter {name!r} twice: {held.origin} and {origin}"
            )
        node = make_parameter(
            name, origin=origin, owner=owner, unit=unit, start=start, scale=scale, title=title, **more
        )
        self.parameters[name] = node
        return node

    def replaces(
        self, name: str, ingredients: Mapping[str, str] | None = None
    ) -> Callable[[Function], Function]:
        """Make the decorated function stand in for the quantity ``name``."""

        def declare(function: Function) -> Function:
            origin = f"{function.__code__.co_filename}:{function.__code__.co_firstlineno}"
            renamed = dict(ingredients or {})
            arguments = tuple(inspect.signature(function).parameters)
            if unknown := set(renamed) - set(arguments):
                raise CatalogueError(
                    f"{origin}: {name!r} renames {sorted(unknown)}, which are not its arguments"
                )
            layer = Layer(
                function=function,
                ingredients={a: renamed.get(a, a) for a in arguments},
                takes_standard="standard" in arguments,
                owner=self.name,
                complex_valued=declared_complex(function, name, origin),
            )
            self.layers[name] = (layer,)
            return function

        return declare

    def __add__(self, other: Hypothesis) -> Hypothesis:
        """Both at once; where both replace one quantity, the second must build on ``standard``."""
        if self is STANDARD or other is STANDARD:
            return other if self is STANDARD else self
        both = Hypothesis(
            f"{self.name}+{other.name}",
            title=f"{self.title}; {other.title}",
            source="; ".join(dict.fromkeys((self.source, other.source))),
        )
        for name in self.parameters.keys() & other.parameters.keys():
            if self.parameters[name] != other.parameters[name]:
                raise CatalogueError(f"{self.name!r} and {other.name!r} declare {name!r} differently")
        both.parameters = {**self.parameters, **other.parameters}
        both.layers = dict(self.layers)
        for name, layers in other.layers.items():
            if name in both.layers and not layers[0].takes_standard:
                raise CatalogueError(
                    f"{self.name!r} and {other.name!r} both replace {name!r}, and the second does not build on "
                    "'standard'; they cannot be combined"
                )
            both.layers[name] = (*both.layers.get(name, ()), *layers)
        return both


STANDARD = Hypothesis("standard", title="No new physics", source="")
