"""The outcome of a simulation in words and as JSON."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

from service.detection.policy import Policy
from service.digits.views import WATCHED_VIEWS
from service.simulation.information import Information
from service.simulation.outcome import Delay, HonestRows, Result, RunLength, finite

BENCHMARK = "first-order benchmark log(A) / KL"


@dataclass(frozen=True)
class Report:
    """What was asked and what came out.

    Attributes
    ----------
    policy : Policy
    honest, fraud : str
        As the command took them; fraud empty for none.
    share : float
    change, streams, rows, seed : int
    result : Result
    information : Information or None
        Of a changed row.
    notes : tuple of str
        What the reader should know of this very simulation.
    """

    policy: Policy
    honest: str
    fraud: str
    share: float
    change: int
    streams: int
    rows: int
    seed: int
    result: Result
    information: Information | None
    notes: tuple[str, ...] = ()

    @property
    def threshold(self) -> float:
        """Transactions per false alarm, A."""
        return self.policy.transactions_per_false_alarm

    def document(self) -> dict[str, Any]:
        """Return the report as a JSON-ready mapping; the same seed gives the same one."""
        document: dict[str, Any] = {
            "honest": self.honest,
            "fraud": self.fraud or None,
            "share": self.share if self.fraud else None,
            "change": self.change if self.fraud else None,
            "streams": self.streams,
            "rows": self.rows,
            "seed": self.seed,
            "policy": self.policy.document(),
            "result": self.result.document(),
            "benchmark": None,
            "notes": list(self.notes),
        }
        if self.information is not None:
            bound = self.information.rows(self.threshold)
            document["benchmark"] = {
                "view": self.information.view,
                "nats_per_row": self.information.per_row,
                "rows": finite(bound),
            }
        return document

    def json(self) -> str:
        """Return the document as JSON text."""
        return json.dumps(self.document(), indent=2, allow_nan=False)

    def text(self) -> str:
        """Return the report as lines of text."""
        policy = self.policy
        lead, _, tail = policy.tolerances()
        change = "no fraud"
        if self.fraud:
            change = f"{self.fraud} replaces {self.share:.3g} of the rows after {self.change:,}"
        lines = [
            f"{self.streams:,} streams of {self.rows:,} rows: {self.honest}; {change}; "
            f"seed {self.seed}",
            f"policy: reference {policy.reference}, tolerance {lead:.3g} (tail pair {tail:.3g}), "
            f"{self.threshold:,.0f} transactions per false alarm, "
            f"baseline {policy.baseline_size:,} rows and {policy.baseline_days:g} days "
            f"at {policy.baseline_confidence:g}",
            "",
            *_honest(self.result.honest, self.threshold, before=bool(self.fraud)),
        ]
        if self.result.delay is not None:
            lines += ["", *_delay(self.result.delay)]
        if self.information is not None and self.result.delay is not None:
            lines += _benchmark(self.information, self.threshold, self.result.delay)
        if self.notes:
            lines += ["", *(f"note: {note}" for note in self.notes)]
        return "\n".join(lines)


def _honest(seen: HonestRows, threshold: float, *, before: bool) -> list[str]:
    title = "False alarms before the change" if before else "False alarms"
    lines = [title, *_run_length(seen.false_alarms, threshold)]
    if seen.bounds_hold is not None:
        lines.append(_row("streams whose bounds hold", f"{seen.bounds_hold:.1%}"))
        only = seen.false_alarms_where_bounds_hold
        if only is not None and only.alarms and seen.bounds_hold < 1:
            lines.append(_row("  rows per alarm of those", _mean(only)))
    said = [f"{status} {share:.0%}" for status, share in seen.guarantee.items()]
    lines.append(_row("the service's guarantee", ", ".join(said)))
    for view in WATCHED_VIEWS:
        kinds = [f"{kind} {shares[view]:.0%}" for kind, shares in seen.references.items()]
        lines.append(_row(f"{view} compared with", ", ".join(kinds)))
    return lines


def _run_length(run: RunLength, threshold: float) -> list[str]:
    lines = [
        _row("rows, baselines left out", f"{run.rows:,}"),
        _row("alarms", f"{run.alarms:,}"),
        _row("rows per alarm", _mean(run)),
    ]
    if run.reaching is not None and run.refuted is not None:
        lines += [
            _row(
                f"streams reaching {threshold:,.0f}",
                f"{run.reaching:.1%} of the {run.streams} with as many rows",
            ),
            _row("  surely below it", f"{run.refuted:.1%}"),
        ]
    return lines


def _mean(run: RunLength) -> str:
    if run.mean is None or run.high is None:
        return f"no alarm; at least {run.low:,.0f} (95 %)"
    return f"{run.mean:,.0f} ± {run.standard_error:,.0f} (95 %: {run.low:,.0f} to {run.high:,.0f})"


def _delay(delay: Delay) -> list[str]:
    def rows(value: int | None) -> str:
        return f"more than {delay.limit:,}" if value is None else f"{value:,}"

    at_least = "" if delay.found == 1 else "at least "
    needed = sum(share < 1 for _, share, _ in delay.found_within) + 1
    return [
        "Rows from the change to the alarm",
        _row("mean", f"{at_least}{delay.mean:,.1f} ± {delay.standard_error:,.1f}"),
        _row("median", rows(delay.median)),
        _row("90 % found within", rows(delay.ninety)),
        *(
            _row(f"found within {n:,}", f"{share:.1%} ± {error:.1%}")
            for n, share, error in delay.found_within[:needed]
        ),
    ]


def _benchmark(information: Information, threshold: float, delay: Delay) -> list[str]:
    bound = information.rows(threshold)
    value = f"{bound:,.1f} rows (in {information.view}, {information.per_row:.3g} nats a row)"
    lines = [_row(BENCHMARK, value)]
    if delay.found == 1:
        lines.append(_row("mean delay / benchmark", f"{delay.mean / bound:.2f}"))
    return lines


def _row(name: str, value: str) -> str:
    return f"  {name:<36}{value}"
