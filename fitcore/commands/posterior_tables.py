"""Tables of posteriors, built from results; nothing here computes."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from rich.text import Text

from fitcore.commands.tables import shown_unit, table
from fitcore.rounding import interval, number, with_error

if TYPE_CHECKING:
    from rich.table import Table

    from fitcore.sampling.diagnostics import Diagnostics
    from fitcore.sampling.evidence import Evidence
    from fitcore.sampling.sample_result import SampleResult
    from fitcore.sampling.summary import PosteriorRow, PosteriorSummary

PRIORS = (
    "A posterior depends on its prior: flat in the parameters inside their bounds, unless the inputs give a "
    "parameter its own. Credible intervals hold a share of the posterior; they are not confidence intervals."
)


def verdict(result: SampleResult) -> list[Text]:
    """Say in a line or two whether the chain can be used, and what to do."""
    style = "bold green" if result.valid else "bold red"
    lines = [Text(result.message, style=style)]
    lines += [Text(f"  - {line}") for line in result.diagnostics.advice]
    lines.append(
        Text(
            f"{result.steps} steps, {result.ensembles} ensembles of {result.walkers // result.ensembles} walkers; "
            f"{result.stopped_because}"
        )
    )
    lines += [Text(f"note: {line}") for line in result.notices]
    return lines


def summary(made: PosteriorSummary, fit: Mapping[str, Any] | None = None) -> Table:
    """Tabulate a posterior, beside the intervals of a fit, each with its method, where there are any."""
    fit = fit or {}
    levels = list(made.rows[0].intervals) if made.rows else []
    columns: list[tuple[str, str]] = [("name", "name"), ("mean and width", "whole")]
    columns += [(f"{100 * level:.4g} % credible", "whole") for level in levels]
    if fit:
        columns.append(("fit 68.27 %", "whole"))
    columns += [("unit", "whole"), ("effective", "spare")]
    result = table(f"Posterior ({made.kind} intervals)", *columns, caption=exceptions(made))
    for row in made.rows:
        cells = [row.name, with_error(row.mean, row.error)]
        cells += [_regions(row, level) for level in levels]
        if fit:
            one = fit.get(row.name)
            ends = None if one is None else one.interval_68
            cells.append("-" if one is None or ends is None else f"{interval(ends[0], ends[1])} {one.method}")
        cells += [shown_unit(row.unit), f"{row.effective:.0f}"]
        result.add_row(*cells)
    return result


REASONS = {
    "flat": "the density is too flat for these samples to tell where it is highest",
    "not nested": "the highest-density regions of these samples do not lie inside each other",
}


def exceptions(made: PosteriorSummary) -> str:
    """Say which rows have equal-tailed intervals although highest density was asked for, and why."""
    said = []
    for reason, words in REASONS.items():
        names = [row.name for row in made.rows if row.reason == reason]
        if names:
            said.append(f"equal-tailed intervals for {', '.join(names)}: {words}")
    return "; ".join(said)


def _regions(row: PosteriorRow, level: float) -> str:
    return " or ".join(interval(low, high, row.error) for low, high in row.intervals[level])


STATUS = {
    "reliable": "the chain is long enough to trust the autocorrelation times",
    "tentative": "the chain is too short to trust the autocorrelation times: at least 40 of the longest are needed",
    "unusable": "the chain is too short for any autocorrelation time: not even 10 of the longest",
}


def diagnostics(made: Diagnostics, *, most: int = 8) -> Table:
    """Tabulate the parameters that mix worst."""
    check = made.width_check
    columns: list[tuple[str, str]] = [
        ("name", "name"),
        ("autocorrelation time", "whole"),
        ("effective", "whole"),
        ("R-hat", "whole"),
    ]
    if check is not None:
        columns.append(("width check", "spare"))
    modes = ", ".join(f"{share:.0%}" for share in made.walkers_per_mode)
    caption = (
        f"acceptance {made.acceptance:.2f}, longest stay {made.longest_stay} steps, samples per mode {modes}; "
        f"{STATUS[made.status]}"
    )
    if check is not None:
        caption += "; width check: width over that of a short control run in small steps only, 1 is expected"
    result = table("Slowest parameters", *columns, caption=caption)
    order = sorted(range(len(made.parameter_names)), key=lambda i: -made.autocorrelation_time[i])
    for i in order[:most]:
        cells = [
            made.parameter_names[i],
            number(made.autocorrelation_time[i], 3),
            f"{made.effective_sample_size[i]:.0f}",
            f"{made.rhat[i]:.4f}",
        ]
        if check is not None:
            cells.append(f"{check.ratio[i]:.3f}")
        result.add_row(*cells)
    return result


def evidence(made: Evidence) -> list[Text]:
    """State an evidence, or why there is none."""
    if not made.valid or made.log_evidence is None:
        return [Text(f"Evidence: {made.message}", style="bold red")]
    return [
        Text(f"Evidence: ln Z = {with_error(made.log_evidence, made.error)} ({made.message})", style="bold"),
        Text(
            "Likelihood exp(-chi-square/2) times the normalised priors: compare it only between hypotheses for the "
            "same entries, and with the priors named."
        ),
    ]
