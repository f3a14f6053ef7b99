"""``[parameters.NAME]`` tables: start values, bounds, fixed parameters, priors."""

from __future__ import annotations

from likelihoods import units
from likelihoods.document import Reader
from likelihoods.entries import ParameterSetting, Prior
from likelihoods.fields import Fields, describe

_KEYS = ("start", "lower", "upper", "fixed", "prior", "unit")
_PRIORS: dict[str, tuple[str, ...]] = {
    "uniform": ("lower", "upper"),
    "normal": ("mean", "error"),
    "log-uniform": ("lower", "upper"),
    "isotropic-angle": (),
}


def read_parameters(reader: Reader, top: Fields) -> None:
    tables = top.table.get("parameters", {})
    if not isinstance(tables, dict):
        top.problem("parameters", "parameters must be tables; write [parameters.NAME]")
        return
    for name, table in tables.items():
        label = f"[parameters.{name}] "
        path = ("parameters", name)
        if not isinstance(table, dict):
            reader.report(path, label, f"must be a table, not {describe(table)}; write [parameters.{name}]")
            continue
        fields = Fields(table, path, label, _KEYS, reader.report)
        node = reader.node(fields, None, name)
        if node is not None and node.kind == "quantity":
            fields.problem(
                None, f'"{name}" is computed from others; only parameters and constants can be set'
            )
            node = None
        unit = fields.text("unit")
        factor = 1.0
        if node is not None and unit is not None:
            try:
                factor = units.factor(unit, node.unit)
            except units.UnitError as error:
                fields.problem("unit", f'{error}; {name} is in "{node.unit}"')
        start, lower, upper = (
            None if number is None else number * factor
            for number in (fields.number("start"), fields.number("lower"), fields.number("upper"))
        )
        fixed = fields.flag("fixed")
        if fixed and start is None and not fields.failed:
            fields.problem("fixed", "a fixed parameter needs its value; write start = NUMBER")
        if lower is not None and upper is not None and lower >= upper:
            fields.problem("upper", f"lower = {lower:g} must be below upper = {upper:g}")
        elif start is not None and (
            (lower is not None and start < lower) or (upper is not None and start > upper)
        ):
            fields.problem("start", f"start = {start:g} lies outside the bounds")
        prior = _prior(reader, fields, factor)
        if not fields.failed:
            reader.document.parameters[name] = ParameterSetting(start, lower, upper, fixed, prior)


def _prior(reader: Reader, parameter: Fields, factor: float) -> Prior | None:
    if "prior" not in parameter:
        return None
    table = parameter.table["prior"]
    if not isinstance(table, dict):
        parameter.problem(
            "prior", 'prior must be a table such as { kind = "normal", mean = 0.0, error = 0.1 }'
        )
        return None
    path = (*parameter.path, "prior")
    fields = Fields(table, path, parameter.label, ("kind", "lower", "upper", "mean", "error"), reader.report)
    kind = fields.choice("kind", tuple(_PRIORS))
    if kind is None:
        if "kind" not in fields:
            fields.problem(None, f"prior kind is missing; write one of {', '.join(_PRIORS)}")
        parameter.failed = True
        return None
    needed = _PRIORS[kind]
    numbers: dict[str, float] = {}
    for key in ("lower", "upper", "mean", "error"):
        if (key in fields) != (key in needed):
            wanted = " and ".join(needed) or "no numbers"
            fields.problem(key if key in fields else None, f"a {kind} prior takes {wanted}")
        elif key in fields:
            number = fields.number(key)
            if number is not None:
                numbers[key] = number * factor
    if not fields.failed:
        if "lower" in numbers and not numbers["lower"] < numbers["upper"]:
            fields.problem("upper", "lower must be below upper in a prior")
        elif kind == "log-uniform" and numbers["lower"] <= 0.0:
            fields.problem(
                "lower", f"lower of a log-uniform prior must be positive, not {numbers['lower']:g}"
            )
        elif numbers.get("error", 1.0) <= 0.0:
            fields.problem("error", f"error of a normal prior must be positive, not {numbers['error']:g}")
    parameter.failed |= fields.failed
    return None if fields.failed else Prior(kind, **numbers)
