"""Checks: every measure of a handful of amounts; nothing is stored."""

from __future__ import annotations

from typing import Any

import numpy as np
from flask import Response

from schemas.check import Check, CheckRequest
from schemas.measures import ONE_LOOK
from service.batches.currencies import exponent, minor_units, minor_units_column
from service.digits.significand import MAX_AMOUNT, IntArray
from service.streams.check import check
from service.web.access import requires
from service.web.parts import parts
from service.web.problems import Problem, invalid
from service.web.resource import Resource, reply

checks = Resource("checks", __name__, description="Measures of amounts that are not kept.")


@checks.path("/v1/checks", "POST")
@requires("read")
@checks.takes(CheckRequest)
@checks.answers(Check, "Every measure of every view.")
@checks.fails(400, 408, 413, 415, 422)
def check_amounts(request: dict[str, Any]) -> Response:
    """Measure amounts against the laws of digits; nothing is stored.

    One look, without the memory of a stream: how far the digits are from the laws, with intervals
    and the classical tests. Many honest businesses do not follow the laws: a misfit is a reason to
    look, never proof of fraud.
    """
    currency = request.get("currency") or parts().settings.currency
    try:
        decimals = exponent(currency)
    except ValueError as error:
        raise invalid([{"pointer": "/currency", "detail": str(error)}]) from error
    amounts = _minor_units(request["amounts"], decimals)
    return reply({"currency": currency, **check(amounts), "warning": ONE_LOOK})


def _minor_units(given: list[int | str], decimals: int) -> IntArray:
    """Return amounts in minor units, or say which are none."""
    amounts = np.zeros(len(given), dtype=np.int64)
    errors: dict[int, str] = {}
    texts = [(i, one) for i, one in enumerate(given) if isinstance(one, str)]
    whole = [(i, one) for i, one in enumerate(given) if isinstance(one, int)]
    for i, number in whole:
        if 0 <= number <= MAX_AMOUNT:
            amounts[i] = number
        else:
            errors[i] = "Expected 0 to 10^15 minor units."
    values, ok = minor_units_column([text for _, text in texts], decimals)
    for (i, text), value, fine in zip(texts, values.tolist(), ok.tolist(), strict=True):
        if fine and value >= 0:
            amounts[i] = value
        else:
            errors[i] = _why(text, decimals)
    if errors:
        raise _refused(errors)
    return amounts


def _why(text: str, decimals: int) -> str:
    try:
        minor_units(text, decimals)
    except ValueError as error:
        return str(error)
    return "Expected 0 to 10^15 minor units."


def _refused(errors: dict[int, str]) -> Problem:
    return invalid([{"pointer": f"/amounts/{i}", "detail": errors[i]} for i in sorted(errors)])
