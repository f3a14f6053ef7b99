"""What a fit returns: frozen, never valid by default, JSON out and in."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from typing import Any

from observables.errors import StoreError

__all__ = ["Estimate", "FitResult", "MeasurementRow", "OtherMinimum"]

Interval = tuple[float, float]
FORMAT_VERSION = 1
#: Parameters that a fit shows when it is printed.
SHOWN = 4


@dataclass(frozen=True)
class Estimate:
    """A value with its intervals.

    Attributes
    ----------
    value : float
    error : float or None
        Half the width of the parabola at Delta chi2 = 1; None where it would mislead (near a bound, or
        an unconstrained direction).
    interval_68, interval_95 : (float, float) or None
        Delta chi2 = 1.000 (68.27 %) and 3.841 (95.0 %).
    method : str
        ``"profile"``: every other parameter refitted; ``"linear"``: propagated with the covariance matrix;
        ``"range"``: the bounds of a flat theory error, inside which no value is preferred.
    unit : str
    """

    value: float
    error: float | None = None
    interval_68: Interval | None = None
    interval_95: Interval | None = None
    method: str = "linear"
    unit: str = "1"

    @property
    def sides(self) -> tuple[float, float] | None:
        """Upward and downward 68.27 % errors, if both ends of the interval exist and hold the value."""
        if self.interval_68 is None or None in self.interval_68:
            return None
        low, high = (float(end) for end in self.interval_68)
        plus, minus = high - self.value, self.value - low
        return (plus, minus) if plus >= 0 and minus >= 0 and math.isfinite(plus + minus) else None

    def __str__(self) -> str:
        """Value with its 68.27 % errors and unit, such as ``65.8 +- 1.4 deg``."""
        from fitcore.rounding import interval, number, shared_power, with_error

        unit = "" if self.unit == "1" else f" {self.unit}"
        if self.method == "range" and self.interval_68 is not None:
            return f"range {interval(*self.interval_68)}{unit}"
        sides = self.sides or ((self.error, self.error) if self.error is not None else None)
        if sides is not None:
            smallest = min((side for side in sides if side > 0), default=None)
            return (
                with_error(self.value, *sides, power=shared_power(self.value, *sides, error=smallest)) + unit
            )
        bounded = any(end is not None and math.isfinite(end) for end in self.interval_68 or ())
        return f"{number(self.value)}{unit} ({'open on one side' if bounded else 'unconstrained'})"


@dataclass(frozen=True)
class MeasurementRow:
    """One entry, measured against fitted.

    Attributes
    ----------
    id, quantity, unit, kind : str
    measured, error_plus, error_minus : float
    fitted, fitted_error : float, float or None
    pull : float
        (measured - fitted) / error, the error of the side the fitted value lies on. Not of unit variance.
    share : float
        Contribution to chi-square (for correlated entries u (R^-1 u), which may be negative).
    groups : tuple of str
    source : str
        Where the value is from.
    """

    id: str
    quantity: str
    measured: float
    error_plus: float
    error_minus: float
    fitted: float
    pull: float
    unit: str
    kind: str
    groups: tuple[str, ...] = ()
    fitted_error: float | None = None
    share: float = math.nan
    source: str = ""


@dataclass(frozen=True)
class OtherMinimum:
    """Another minimum of chi-square.

    Attributes
    ----------
    parameters : dict
    chi2 : float
    """

    parameters: dict[str, float]
    chi2: float


@dataclass(frozen=True)
class FitResult:
    """Best fit and everything said about it.

    ``valid`` is False unless the fit proved itself; ``flags`` are single words for programs (``"unconstrained"``,
    ``"minimisers-disagree"``, ...), ``message`` is a sentence for people.
    """

    valid: bool = False
    flags: tuple[str, ...] = ()
    message: str = ""
    chi2: float = math.nan
    degrees_of_freedom: int = 0
    p_value: float | None = None
    hypothesis: str = "standard"
    theory_errors: str = "as-given"
    title: str = ""
    inputs_name: str = ""
    inputs_sha256: str = ""
    inputs_revision: int = 0
    parameters: dict[str, Estimate] = field(default_factory=dict)
    derived: dict[str, Estimate] = field(default_factory=dict)
    measurements: tuple[MeasurementRow, ...] = ()
    parameter_names: tuple[str, ...] = ()
    correlation_names: tuple[str, ...] = ()
    correlation_matrix: tuple[tuple[float, ...], ...] = ()
    covariance_matrix: tuple[tuple[float, ...], ...] = ()
    other_minima: tuple[OtherMinimum, ...] = ()
    notices: tuple[tuple[str, str, str], ...] = ()
    fixed: dict[str, float] = field(default_factory=dict)
    n_calls: dict[str, int] = field(default_factory=dict)
    provenance: dict[str, Any] = field(default_factory=dict)

    @property
    def values(self) -> dict[str, float]:
        """Best-fit values of the free parameters."""
        return {name: estimate.value for name, estimate in self.parameters.items()}

    def __str__(self) -> str:
        """Verdict and first four parameters, for a prompt; `weakmix fit` and `to_dict` say everything."""
        from fitcore.rounding import significant

        head = "converged" if self.valid else f"NOT CONVERGED: {self.message or 'no reason recorded'}"
        p = "no p-value" if self.p_value is None else f"p-value {significant(self.p_value)}"
        lines = [
            f"Fit of {self.inputs_name or 'inputs without a name'}, hypothesis {self.hypothesis}: {head}",
            f"  chi-square {self.chi2:.2f} for {self.degrees_of_freedom} degrees of freedom, {p}",
        ]
        if self.flags:
            lines.append(f"  flags: {', '.join(self.flags)}")
        shown = list(self.parameters)[:SHOWN]
        width = max(map(len, shown), default=0)
        lines += [f"  {name:<{width}}  {self.parameters[name]}" for name in shown]
        more = len(self.parameters) - len(shown)
        if more or self.derived:
            lines.append(
                f"  and {more} more parameters, {len(self.derived)} derived quantities, "
                f"{len(self.measurements)} measurements"
            )
        return "\n".join(lines)

    def to_dict(self) -> dict[str, Any]:
        """Plain data with the documented keys; numbers that do not exist are None."""
        data: dict[str, Any] = _plain(
            {
                "format_version": FORMAT_VERSION,
                "chi2": self.chi2,
                "degrees_of_freedom": self.degrees_of_freedom,
                "p_value": self.p_value,
                "converged": self.valid,
                "flags": self.flags,
                "message": self.message,
                "hypothesis": self.hypothesis,
                "theory_errors": self.theory_errors,
                "inputs": {
                    "name": self.inputs_name,
                    "title": self.title,
                    "sha256": self.inputs_sha256,
                    "revision": self.inputs_revision,
                },
                "parameters": {n: _estimate(e) for n, e in self.parameters.items()},
                "derived": {n: _estimate(e) for n, e in self.derived.items()},
                "measurements": [
                    {
                        "id": row.id,
                        "quantity": row.quantity,
                        "measured": row.measured,
                        "error": row.error_plus
                        if row.error_plus == row.error_minus
                        else [row.error_plus, row.error_minus],
                        "fitted": row.fitted,
                        "fitted_error": row.fitted_error,
                        "pull": row.pull,
                        "chi2_share": row.share,
                        "unit": row.unit,
                        "kind": row.kind,
                        "groups": row.groups,
                        "source": row.source,
                    }
                    for row in self.measurements
                ],
                "correlation": {"names": self.correlation_names, "matrix": self.correlation_matrix},
                "covariance": {"names": self.parameter_names, "matrix": self.covariance_matrix},
                "other_minima": [{"parameters": m.parameters, "chi2": m.chi2} for m in self.other_minima],
                "notices": [{"kind": k, "id": i, "text": t} for k, i, t in self.notices],
                "fixed": self.fixed,
                "n_calls": self.n_calls,
                "provenance": self.provenance,
            }
        )
        return data

    def to_json(self) -> str:
        """JSON text of `to_dict`; floats keep all their digits."""
        return json.dumps(self.to_dict(), indent=2, allow_nan=False) + "\n"

    @classmethod
    def from_dict(cls, data: Mapping[str, Any]) -> FitResult:
        """Rebuild a result from `to_dict`'s data.

        Raises
        ------
        StoreError
            The data is not a stored fit, or comes from a newer format.
        """
        try:
            if data["format_version"] > FORMAT_VERSION:
                raise StoreError(
                    f"the result has format {data['format_version']}, this weakmix reads up to {FORMAT_VERSION}; "
                    "install a newer weakmix"
                )
            return cls(
                valid=bool(data["converged"]),
                flags=tuple(data["flags"]),
                message=data["message"],
                chi2=_number(data["chi2"]),
                degrees_of_freedom=data["degrees_of_freedom"],
                p_value=data["p_value"],
                hypothesis=data["hypothesis"],
                theory_errors=data["theory_errors"],
                title=data["inputs"]["title"],
                inputs_name=data["inputs"]["name"],
                inputs_sha256=data["inputs"]["sha256"],
                inputs_revision=data["inputs"]["revision"],
                parameters={n: _read_estimate(e) for n, e in data["parameters"].items()},
                derived={n: _read_estimate(e) for n, e in data["derived"].items()},
                measurements=tuple(_read_row(row) for row in data["measurements"]),
                parameter_names=tuple(data["covariance"]["names"]),
                correlation_names=tuple(data["correlation"]["names"]),
                correlation_matrix=_matrix(data["correlation"]["matrix"]),
                covariance_matrix=_matrix(data["covariance"]["matrix"]),
                other_minima=tuple(
                    OtherMinimum(dict(m["parameters"]), m["chi2"]) for m in data["other_minima"]
                ),
                notices=tuple((n["kind"], n["id"], n["text"]) for n in data["notices"]),
                fixed=dict(data["fixed"]),
                n_calls=dict(data["n_calls"]),
                provenance=dict(data["provenance"]),
            )
        except (KeyError, TypeError, ValueError, AttributeError) as error:
            raise StoreError(f"this is not a stored weakmix fit: {error!r}") from error

    @classmethod
    def from_json(cls, text: str) -> FitResult:
        """Rebuild a result from `to_json`'s text; raises StoreError as `from_dict` does."""
        try:
            data = json.loads(text)
        except json.JSONDecodeError as error:
            raise StoreError(f"this is not JSON: {error}") from error
        if not isinstance(data, dict):
            raise StoreError("this is not a stored weakmix fit: a JSON object is expected")
        return cls.from_dict(data)


def _estimate(estimate: Estimate) -> dict[str, Any]:
    return {item.name: getattr(estimate, item.name) for item in fields(estimate)}


def _read_estimate(data: Mapping[str, Any]) -> Estimate:
    pairs = {
        key: (
            tuple(_open_number(x, s) for x, s in zip(data[key], (-1, 1), strict=True)) if data[key] else None
        )
        for key in ("interval_68", "interval_95")
    }
    return Estimate(
        value=_number(data["value"]),
        error=data["error"],
        method=data["method"],
        unit=data["unit"],
        **pairs,  # type: ignore[arg-type]
    )


def _read_row(data: Mapping[str, Any]) -> MeasurementRow:
    plus, minus = data["error"] if isinstance(data["error"], list) else (data["error"], data["error"])
    return MeasurementRow(
        id=data["id"],
        quantity=data["quantity"],
        measured=data["measured"],
        error_plus=plus,
        error_minus=minus,
        fitted=_number(data["fitted"]),
        fitted_error=data["fitted_error"],
        pull=_number(data["pull"]),
        share=_number(data["chi2_share"]),
        unit=data["unit"],
        kind=data["kind"],
        groups=tuple(data["groups"]),
        source=data.get("source", ""),
    )


def _matrix(rows: Any) -> tuple[tuple[float, ...], ...]:
    return tuple(tuple(_number(x) for x in row) for row in rows)


def _number(value: float | None) -> float:
    return math.nan if value is None else value


def _open_number(value: float | None, sign: int) -> float:
    return sign * math.inf if value is None else value


def _plain(value: Any) -> Any:
    """Only what JSON has; nan and infinity become None."""
    if isinstance(value, Mapping):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if hasattr(value, "item") and not isinstance(value, str):
        value = value.item()
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
