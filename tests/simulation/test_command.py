"""`tallyward simulate`: tables and JSON on stdout, complaints that help."""

from __future__ import annotations

import json

import numpy as np
import pytest
from click.testing import CliRunner

from service.cli import main

SMALL = ("--streams", "6", "--rows", "1200", "--change", "600", "--reference", "law")


def call(*arguments, status=0):
    result = CliRunner().invoke(main, ["simulate", *map(str, arguments)])
    assert result.exit_code == status, result.output
    return result


def test_the_table_says_what_came_out() -> None:
    result = call(*SMALL, "--fraud", "pair_49", "--share", "0.3")
    assert (
        "6 streams of 1,200 rows: law; pair_49 replaces 0.3 of the rows after 600" in result.stdout
    )
    assert "Rows from the change to the alarm" in result.stdout
    assert "mean delay / benchmark" in result.stdout
    assert result.stderr == ""  # no progress bar: this is no terminal


def test_json_is_the_same_for_the_same_seed_and_complete() -> None:
    arguments = (*SMALL, "--fraud", "under_limit:limit=50000,margin=0.02", "--json", "--seed", 4)
    first = call(*arguments).stdout
    assert call(*arguments).stdout == first
    report = json.loads(first)
    assert report["policy"]["reference"] == "law"
    assert report["fraud"] == "under_limit:limit=50000,margin=0.02"
    assert report["result"]["delay"]["streams"] == 6
    assert report["result"]["honest"]["bounds_hold"] == 1
    assert report["benchmark"]["view"] == "lead_pair"
    assert report["benchmark"]["rows"] > 10
    assert json.loads(call(*arguments[:-1], 5).stdout) != report


def test_without_fraud_only_false_alarms_are_told() -> None:
    report = json.loads(call(*SMALL, "--threshold", 1000, "--json").stdout)
    assert report["result"]["delay"] is report["benchmark"] is report["change"] is None
    assert report["result"]["honest"]["false_alarms"]["rows"] == 6 * 1200


def test_policies_may_name_review_limits() -> None:
    report = json.loads(call(*SMALL, "--limit", 100_000, "--limit", 5000, "--json").stdout)
    assert [limit["amount"] for limit in report["policy"]["limits"]] == [100_000, 5000]
    assert {limit["currency"] for limit in report["policy"]["limits"]} == {"EUR"}


def test_own_amounts_are_resampled(tmp_path) -> None:
    rng = np.random.default_rng(1)
    file = tmp_path / "till.csv"
    prices = rng.choice([4.99, 9.99, 24.50], 400)
    days = np.sort(rng.integers(1, 29, 400))
    file.write_text(
        "at,amount\n"
        + "".join(f"2026-02-{d:02d}T10:00:00Z,{p:.2f}\n" for d, p in zip(days, prices, strict=True))
        + "2026-02-28,0.00\n"
    )
    result = call("--csv", file, "--streams", 2, "--rows", 600, "--reference", "own", "--json")
    report = json.loads(result.stdout)
    assert report["honest"] == "resampled till.csv"
    notes = " ".join(report["notes"])
    assert "1 rows of the file have no amount above zero" in notes
    assert "28 days of the file are resampled" in notes
    assert "never completed a baseline" in notes


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (("--fraud", "pair49"), "--fraud: no pattern 'pair49'; did you mean pair_49?"),
        (("--honest", "zzz"), "--honest: no pattern 'zzz'; there are: law, lognormal,"),
        (("--honest", "lognormal:sigma=9"), "lognormal: sigma must be 0.05 to 2, got 9"),
        (("--honest", "lognormal:sgima=1"), "no parameter 'sgima'; did you mean sigma?"),
        (("--honest", "law:decades=2.5"), "decades must be a whole number, got '2.5'"),
        (("--honest", "law:decades"), "decades must be given once, as decades=4"),
        (("--fraud", "round_endings:x=1"), "no parameter 'x'; there are: none"),
        (("--reference", "category"), "--reference: The reference category is not there yet"),
        (("--tolerance", "1.5"), "--tolerance: Expected a number from 0 to 1."),
        (("--threshold", "5"), "--threshold: Expected a number from 100"),
        (("--baseline-size", "1"), "--baseline-size: Expected"),
        (("--limit", "-3"), "--limit: Expected"),
        (("--fraud", "ones", "--change", "9000"), "change must be 0 to 4999, got 9000"),
        (("--fraud", "ones", "--share", "2"), "share must be 1e-06 to 1, got 2"),
        (("--streams", "0"), "streams must be 1 to"),
        (("--csv", "no-such-file"), "does not exist"),
        (("--rows", "many"), "'many' is not a valid integer"),
    ],
)
def test_bad_options_are_explained(arguments, message) -> None:
    result = call(*arguments, status=2)
    assert message in result.stderr
    assert result.stdout == ""


def test_bad_files_are_explained(tmp_path) -> None:
    file = tmp_path / "till.csv"
    file.write_text("amount\n12\nEUR 5\n")
    assert "--csv: line 3: 'EUR 5' is not an amount" in call("--csv", file, status=2).stderr
    file.write_bytes(b"amount\n\xff\xfe\n")
    assert "--csv: the file is not UTF-8 text" in call("--csv", file, status=2).stderr
    file.write_text("12\n13\n")
    assert "two blocks of 50 rows" in call("--csv", file, status=2).stderr
    assert "exclude each other" in call("--csv", file, "--honest", "law", status=2).stderr


def test_patterns_are_listed_with_their_parameters() -> None:
    listed = call("--patterns").stdout
    assert "lognormal:per_day=100,sigma=0.5,median=12000\n    Log-normal amounts" in listed
    assert "under_limit:limit=10000,margin=0.05" in listed
