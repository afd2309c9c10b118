"""Policies: ranges, defaults, and the words of refusals."""

from __future__ import annotations

import dataclasses
from typing import Any

import marshmallow as ma
import pytest

from schemas.policy import PolicySettings, defaults
from service.detection.policy import Policy


def test_defaults_are_those_of_the_detectors() -> None:
    detectors = dataclasses.asdict(Policy())
    ours = {k: tuple(v) if isinstance(v, list) else v for k, v in defaults().items()}
    assert ours == {k: detectors[k] for k in ours}
    assert set(detectors) - set(ours) == {"name", "version"}


@pytest.mark.parametrize(
    ("field", "good", "bad"),
    [
        ("tolerance", [None, 0, 0.1, 1], [-0.01, 1.01, "0.1", True, float("inf"), float("nan")]),
        ("transactions_per_false_alarm", [100, 1e9], [99.9, 1e9 + 1, None]),
        ("baseline_size", [200, 100_000], [199, 100_001, 200.0, "200", True]),
        ("baseline_days", [0, 0.5, 366], [-1, 367]),
        ("baseline_confidence", [0.9, 0.999999], [0.89, 1]),
        ("minimum_count", [1, 1_000_000], [0, 1_000_001, 1.5]),
        (
            "views",
            [["lead_digit"], ["tail_pair", "lead_pair"]],
            [[], ["circle"], ["lead_digit"] * 2, "lead_digit", None],
        ),
        ("flows", [None, [], ["sale", "till-7"]], [["Sale"], ["sale", "sale"], ["a" * 17], [1]]),
        ("reference", ["auto", "law", "own"], ["benford", None, 1]),
    ],
)
def test_settings_have_ranges(field: str, good: list[Any], bad: list[Any]) -> None:
    for value in good:
        assert PolicySettings().load({field: value})[field] == value
    for value in bad:
        with pytest.raises(ma.ValidationError) as refused:
            PolicySettings().load({field: value})
        assert list(refused.value.normalized_messages()) == [field]


def test_a_category_is_refused_in_words_until_there_are_categories() -> None:
    with pytest.raises(ma.ValidationError, match="category is not there yet"):
        PolicySettings().load({"reference": "category"})


def test_unknown_settings_are_refused() -> None:
    with pytest.raises(ma.ValidationError, match="Unknown field"):
        PolicySettings().load({"tolerence": 0.1})
