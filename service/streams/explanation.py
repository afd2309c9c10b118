"""An alarm in words that an analyst can paste into a case file."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from typing import Any

import numpy as np

from service.detection.bank import REACH
from service.streams.record import Stream

_MONTHS = (
    *("January", "February", "March", "April", "May", "June"),
    *("July", "August", "September", "October", "November", "December"),
)
_VERB = {"lead_digit": "begin with", "lead_pair": "begin with", "tail_pair": "end in"}
_REFERENCE = {
    "law": "under the logarithmic law",
    "own": "in this merchant's own baseline",
    "category": "in this merchant's category",
}
_NAMED_CELLS = 5


def explanation(
    finding: Mapping[str, Any],
    stream: Stream,
    *,
    excess: float | None,
    excess_amount: float | None,
    exponent: int | None = None,
) -> str:
    """Return what a finding says, and what it does not, in two sentences.

    Parameters
    ----------
    finding : mapping
        One of ``findings`` of a crossing's document.
    stream : Stream
    excess, excess_amount : float or None
        Rows, and minor units, beyond what is expected in its cells so far.
    exponent : int or None
        Decimal places of the stream's currency; None leaves money in minor units.
    """
    since = f"Since {_time(finding['onset_at'])}, " if finding["onset_at"] else "Lately, "
    if finding["pattern"] == "shape":
        return (
            f"{since}{_shape(finding)}. The alarm itself chose that time and that shape: it is a "
            "reason to look, not proof of fraud."
        )
    where = (
        "if endings are spread evenly"
        if finding["view"] == "tail_pair" and finding["reference"] == "law"
        else _REFERENCE[finding["reference"]]
    )
    match finding["view"]:
        case "limit":
            cells = _below(finding, stream.currency, exponent)
        case "repeat":
            cells = _again(finding, stream.currency, exponent)
        case _:
            cells = _cells(finding)
    return (
        f"{since}{percent(finding['observed'])} of the amounts {cells}, where at most "
        f"{percent(finding['bound'])} is expected {where}"
        f"{_excess(excess or 0, excess_amount or 0, stream.currency, exponent)}. "
        "The alarm itself chose the time from which this share is counted, so the share is biased "
        "upwards: it is a reason to look, not proof of fraud."
    )


def percent(share: float) -> str:
    """Return a share with two significant digits: ``31 %``, ``0.97 %``, ``more than 99 %``."""
    if 0.99 < share < 1:
        return "more than 99 %"
    text = np.format_float_positional(100 * share, precision=2, fractional=False, trim="-")
    return f"{text} %"


def _time(ms: int) -> str:
    then = datetime.fromtimestamp(ms / 1000, tz=UTC)
    return f"{then:%H:%M} UTC on {then.day} {_MONTHS[then.month - 1]} {then.year}"


def _listed(cells: Sequence[str], word: str) -> str:
    return cells[0] if len(cells) == 1 else f"{', '.join(cells[:-1])} {word} {cells[-1]}"


def _below(finding: Mapping[str, Any], currency: str, exponent: int | None) -> str:
    limit = _money(finding["high"], currency, exponent)
    return f"lie just below the review limit of {limit}"


def _again(finding: Mapping[str, Any], currency: str, exponent: int | None) -> str:
    amounts = [_money(float(a), currency, exponent) for a in finding["cells"]]
    such = f", such as {_listed(amounts, 'and')}" if amounts else ""
    return f"repeat one of the {REACH} before them exactly{such}"


def _cells(finding: Mapping[str, Any]) -> str:
    verb, cells = _VERB[finding["view"]], list(finding["cells"])
    more = len(cells) - _NAMED_CELLS
    if finding["pattern"] == "rare_cells":
        known = f"digits that were hardly used before, such as {_listed(cells[:3], 'and')}"
        return f"{verb} {known}"
    if more > 1:
        return f"{verb} {', '.join(cells[:_NAMED_CELLS])} or one of {more} others"
    return f"{verb} {_listed(cells, 'or')}"


def _shape(finding: Mapping[str, Any]) -> str:
    by_law = finding["reference"] == "law"
    usual = _REFERENCE[finding["reference"]]
    if finding["shape"] == "invented":
        before = "than the logarithmic law has them" if by_law else f"than {usual}"
        return (
            f"the first two digits of the amounts are spread more evenly {before}, "
            "as invented numbers often are"
        )
    before = "the logarithmic law" if by_law else f"what is usual {usual}"
    return (
        f"the first two digits of the amounts have moved as a whole away from {before}, towards "
        f"amounts that begin with {_listed(list(finding['cells'][:3]), 'or')}"
    )


def _excess(rows: float, amount: float, currency: str, exponent: int | None) -> str:
    if round(rows) < 1:
        return ""
    money = _money(amount, currency, exponent)
    amounts = "amount" if round(rows) == 1 else "amounts"
    return f"; that is about {rows:,.0f} {amounts} more than expected so far, worth about {money}"


def _money(amount: float, currency: str, exponent: int | None) -> str:
    if exponent is None:
        return f"{amount:,.0f} minor units of {currency}"
    return f"{amount / 10**exponent:,.{exponent}f} {currency}"
