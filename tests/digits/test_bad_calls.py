"""Every public function says which argument is out of its range, and what the range is."""

from __future__ import annotations

import importlib
import inspect
import pkgutil
import re
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
import pytest

import service.digits
from service.digits import evidence, goodness, intervals, laws, measures, significand, tally, views
from service.digits.laws import leading_law

LAW = leading_law(1)
ONES = np.ones(9)
KAPPAS = (20.0, 200.0)

COUNTS = "counts must be whole numbers from 0 to 2**53"
SHARES = "p must be shares from 0 to 1 whose sum is 1"
TOTALS = "n must be whole numbers from 0 to 2**53"
AMOUNTS = "amounts must be whole numbers from {} to 10**15"

Call = tuple[Callable[..., Any], tuple[Any, ...], str]

_TALLIES = (
    goodness.chi_square,
    goodness.g,
    goodness.kuiper,
    goodness.largest_z,
    goodness.watson_u2,
    goodness.z_scores,
    measures.excess_mad,
    measures.mad,
    measures.misfit,
    measures.score,
    tally.checked,
)
_BOUNDS = (
    intervals.clopper_pearson,
    intervals.clopper_pearson_lower,
    intervals.clopper_pearson_upper,
)

CALLS: list[Call] = [
    *((f, (-ONES, LAW), COUNTS) for f in _TALLIES),
    *((f, (ONES + 0.5, LAW), COUNTS) for f in _TALLIES),
    *((f, (ONES * np.nan, LAW), COUNTS) for f in _TALLIES),
    *((f, (ONES * 2.0**54, LAW), COUNTS) for f in _TALLIES),
    *((f, (ONES, 2 * LAW), SHARES) for f in _TALLIES),
    *((f, (ONES, LAW * np.nan), SHARES) for f in _TALLIES),
    *((f, (ONES, leading_law(2)), "the same number of cells, got 9 and 90") for f in _TALLIES),
    *((f, (7, LAW), "counts must have at least 2 cells") for f in _TALLIES),
    *((f, (ONES, 1.0), "p must have at least 2 cells") for f in _TALLIES),
    *((f, (3, 2, 0.05), "counts must be whole numbers from 0 to n") for f in _BOUNDS),
    *((f, (1, 2.5, 0.05), TOTALS) for f in _BOUNDS),
    *((f, (1, 2, 0.0), "alpha must be above 0 and below 1") for f in _BOUNDS),
    *((f, (1, 2, np.nan), "alpha must be above 0 and below 1") for f in _BOUNDS),
    (intervals.always_valid, ([1, -1],), COUNTS),
    (intervals.always_valid, ([1, 1], 1.0), "level must be above 0 and below 1"),
    (intervals.always_valid, ([1, 1], np.nan), "level must be above 0 and below 1"),
    (evidence.log_evidence, (-ONES, LAW, KAPPAS), COUNTS),
    (evidence.log_evidence, (ONES, 2 * LAW, KAPPAS), SHARES),
    (evidence.log_evidence, (ONES, LAW, ()), "concentrations must be one or more finite values"),
    (evidence.log_evidence, (ONES, LAW, (0.0,)), "concentrations must be .* above 0"),
    (evidence.tolerant_log_evidence, (-ONES, LAW, LAW, KAPPAS), COUNTS),
    (evidence.tolerant_log_evidence, (ONES, LAW, 0.9 * LAW, KAPPAS), "bounds must .* at least its"),
    (evidence.tolerant_log_evidence, (ONES, LAW, LAW[:8], KAPPAS), "bounds must have a value for"),
    (evidence.tolerant_log_evidence, (ONES, LAW, LAW, (-1.0,)), "concentrations must be"),
    (evidence.e_value, (np.nan,), "log_e must be natural logarithms"),
    (evidence.p_value, ([0.0, np.nan],), "max_log_e must be natural logarithms"),
    (evidence.e_bh, ([0.0, np.nan], 0.05), "log_e must be natural logarithms"),
    (evidence.e_bh, ([[0.0]], 0.05), "log_e must have one axis"),
    (evidence.e_bh, (0.0, 0.05), "log_e must have one axis"),
    (evidence.e_bh, ([0.0], 0.0), "fdr must be above 0 and at most 1, got 0.0"),
    (evidence.e_bh, ([0.0], 1.5), "fdr must be above 0 and at most 1, got 1.5"),
    (evidence.e_bh, ([0.0], np.nan), "fdr must be above 0 and at most 1, got nan"),
    (goodness.holm, ([0.5, -0.1],), "p_values must be 0 to 1"),
    (goodness.holm, ([0.5, 1.1],), "p_values must be 0 to 1"),
    (goodness.rayleigh, (-1, 0.0, 0.0), TOTALS),
    (goodness.rayleigh, (1, 2.0, 0.0), "cosines and sines must be sums of n unit vectors"),
    (goodness.rayleigh, (1, np.nan, 0.0), "cosines and sines must be sums of n unit vectors"),
    (measures.band, ("tail_pair", np.ones(100), np.full(100, 0.01)), "view must be one of lead_di"),
    (measures.band, ("lead_digit", -ONES, LAW), COUNTS),
    (measures.mad_expected, (0.5, LAW), TOTALS),
    (measures.mad_expected, (5, 2 * LAW), SHARES),
    (measures.misfit_of, (measures.excess_mad(ONES, LAW), 1), "cells must be at least 2, got 1"),
    (measures.noise_constant, (2 * LAW,), SHARES),
    (measures.spread, (1.5, 1.0, 1.0), TOTALS),
    (measures.spread, (2, np.nan, 1.0), "total and squares must be finite sums"),
    (measures.spread, (2, 1.0, np.inf), "total and squares must be finite sums"),
    (laws.leading_law, (0,), "digits must be 1 to 6, got 0"),
    (laws.leading_law, (7,), "digits must be 1 to 6, got 7"),
    (laws.leading_law, (1.5,), "digits must be 1 to 6, got 1.5"),
    (laws.position_law, (0,), "position must be 1 to 6, got 0"),
    (laws.position_law, (2.5,), "position must be 1 to 6, got 2.5"),
    (significand.decade, ([5, -1],), AMOUNTS.format(0)),
    (significand.decade, ([12.5],), AMOUNTS.format(0)),
    (significand.leading, ([-5], 1), AMOUNTS.format(0)),
    (significand.leading, ([5], 0), "digits must be 1 to 15, got 0"),
    (significand.leading, ([5], 16), "digits must be 1 to 15, got 16"),
    (significand.trailing, ([-5], 1), AMOUNTS.format(0)),
    (significand.trailing, ([5], 0), "digits must be 1 to 15, got 0"),
    (significand.circle, ([0],), AMOUNTS.format(1)),
    (significand.circle, (["12"],), AMOUNTS.format(1)),
    (views.cells_hit, ([12, -1],), AMOUNTS.format(0)),
    (views.cells_hit, ([19.99],), AMOUNTS.format(0)),
    (views.cell_label, (-1,), "cell must be 0 to 198, got -1"),
    (views.cell_label, (199,), "cell must be 0 to 198, got 199"),
    (tally.checked_counts, ([1, -1],), COUNTS),
    (tally.checked_law, ([0.5, 0.6],), SHARES),
    (tally.checked_total, (-1,), TOTALS),
]

TAKE_ANYTHING = {"compiled", "law_cells", "score_of", "nan_if_empty", "excess_mad_of_rows"}
"""No argument, or one made by another public function."""


def _public() -> Iterator[Callable[..., Any]]:
    for module in pkgutil.iter_modules(service.digits.__path__, "service.digits."):
        here = importlib.import_module(module.name)
        for name, function in inspect.getmembers(here, inspect.isfunction):
            if function.__module__ == module.name and not name.startswith("_"):
                yield function


@pytest.mark.parametrize(("function", "arguments", "message"), CALLS)
def test_bad_arguments_are_named(
    function: Callable[..., Any], arguments: tuple[Any, ...], message: str
) -> None:
    with pytest.raises(ValueError, match=message.replace("**", r"\*\*")):
        function(*arguments)


def test_no_public_function_is_left_out() -> None:
    tried = {function.__name__ for function, _, _ in CALLS}
    assert {function.__name__ for function in _public()} == tried | TAKE_ANYTHING


# Function by function, who published the method; "as" leads to the function that says it.
PUBLISHED = {
    "always_valid": "Robbins 1970",
    "band": "Nigrini 2012",
    "chi_square": "Pearson (1900",
    "circle": "Newcomb 1881",
    "clopper_pearson": "Clopper & Pearson (1934",
    "clopper_pearson_lower": "Clopper & Pearson (1934",
    "clopper_pearson_upper": "Clopper & Pearson (1934",
    "e_bh": "Wang & Ramdas (2022",
    "excess_mad": "Barney & Schulzke (2016",
    "g": "Wilks (1938",
    "holm": "Holm (1979",
    "kuiper": "Kuiper 1960",
    "largest_z": "holm`` (1979",
    "leading_law": "Benford (1938",
    "log_evidence": "Lindon & Malek (2022",
    "mad": "Drake & Nigrini (2000",
    "mad_expected": "De Moivre",
    "noise_constant": "De Moivre",
    "p_value": "Ville's inequality, 1939",
    "position_law": "Newcomb 1881",
    "rayleigh": "Rayleigh 1880",
    "score": "Nigrini 2012",
    "tolerant_log_evidence": "Wasserman, Ramdas & Balakrishnan (2020",
    "watson_u2": "Choulakian,",
    "z_scores": "(1934",
}


def test_each_published_method_names_its_paper() -> None:
    said = {function.__name__: function.__doc__ or "" for function in _public()}
    assert PUBLISHED.keys() <= said.keys()
    for name, paper in PUBLISHED.items():
        assert paper in " ".join(said[name].split()), name
    cited = {name for name, text in said.items() if re.search(r"\b(1[89]|20)\d\d\b", text)}
    assert cited <= PUBLISHED.keys()
