"""The command ``tallyward simulate``."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import click
import marshmallow
from tqdm import tqdm

from schemas.policy import PolicySettings
from service.detection.policy import Policy
from service.simulation.fraud import FRAUD, Fraud
from service.simulation.honest import HONEST
from service.simulation.information import information
from service.simulation.naming import described, named
from service.simulation.outcome import Result
from service.simulation.report import Report
from service.simulation.resample import Resampled, read_amounts
from service.simulation.run import CURRENCY, Progress
from service.simulation.run import simulate as run
from service.simulation.source import Honest

_OPTIONS = {
    "reference": "--reference",
    "tolerance": "--tolerance",
    "transactions_per_false_alarm": "--threshold",
    "baseline_size": "--baseline-size",
    "baseline_days": "--baseline-days",
    "baseline_confidence": "--baseline-confidence",
    "limits": "--limit",
}
_DEFAULT = Policy()


@click.command(short_help="Tell what a policy would do on invented streams.")
@click.option("--honest", help="Pattern of honest rows, with parameters; default: law.")
@click.option(
    "--csv",
    "file",
    type=click.Path(exists=True, dir_okay=False, path_type=Path),
    help="Resample days, or blocks of rows, of this file's amounts instead of a pattern.",
)
@click.option("--decimals", default=2, show_default=True, help="Decimals of the file's currency.")
@click.option("--fraud", help="Pattern of made-up rows, with parameters; default: none.")
@click.option("--share", default=0.1, show_default=True, help="Share of rows made up.")
@click.option("--change", default=2000, show_default=True, help="Honest rows before the fraud.")
@click.option("--streams", default=200, show_default=True, help="Independent streams.")
@click.option("--rows", default=5000, show_default=True, help="Rows of each stream, in all.")
@click.option("--reference", default=_DEFAULT.reference, show_default=True, help="auto, law, own.")
@click.option(
    "--tolerance", type=float, help="Default: 0.10 for leading views, 0.05 for the tail pair."
)
@click.option(
    "--threshold",
    default=_DEFAULT.transactions_per_false_alarm,
    show_default=True,
    help="Transactions per false alarm.",
)
@click.option("--baseline-size", default=_DEFAULT.baseline_size, show_default=True)
@click.option("--baseline-days", default=_DEFAULT.baseline_days, show_default=True)
@click.option("--baseline-confidence", default=_DEFAULT.baseline_confidence, show_default=True)
@click.option(
    "--limit",
    "limits",
    type=int,
    multiple=True,
    help="A review limit in minor units; amounts up to 10 % below it are watched. Repeatable.",
)
@click.option("--seed", default=1, show_default=True, help="The same seed gives the same answer.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of a table.")
@click.option("--patterns", is_flag=True, help="List the patterns and their parameters.")
def simulate(
    *,
    honest: str | None,
    file: Path | None,
    decimals: int,
    fraud: str | None,
    share: float,
    change: int,
    streams: int,
    rows: int,
    reference: str,
    tolerance: float | None,
    threshold: float,
    baseline_size: int,
    baseline_days: float,
    baseline_confidence: float,
    limits: tuple[int, ...],
    seed: int,
    as_json: bool,
    patterns: bool,
) -> None:
    """Tell what a policy would do: rows between false alarms, and rows until a fraud is found.

    Many independent streams run through the very code of the service. A pattern is a name,
    perhaps with parameters: `lognormal:sigma=0.45,per_day=50`; see --patterns.
    """
    if patterns:
        click.echo(f"Honest\n\n{described(HONEST)}\n\nFraud\n\n{described(FRAUD)}")
        return
    notes: list[str] = []
    policy = _policy(
        reference=reference,
        tolerance=tolerance,
        transactions_per_false_alarm=threshold,
        baseline_size=baseline_size,
        baseline_days=baseline_days,
        baseline_confidence=baseline_confidence,
        limits=[{"currency": CURRENCY, "amount": amount} for amount in limits],
    )
    business, called = _honest(honest, file, decimals, notes)
    cheat = None
    if fraud is not None and fraud != "none":
        with _refused("--fraud"):
            cheat = named(fraud, FRAUD)
    with _refused(None), _progress(streams * rows) as progress:
        result = run(
            policy,
            business,
            cheat,
            share=share,
            change=change,
            streams=streams,
            rows=rows,
            seed=seed,
            progress=progress,
        )
    report = Report(
        policy=policy,
        honest=called,
        fraud=fraud or "" if cheat is not None else "",
        share=share,
        change=change,
        streams=streams,
        rows=rows,
        seed=seed,
        result=result,
        information=(
            None if cheat is None else information(policy, business, cheat, share, seed=seed)
        ),
        notes=(*notes, *_notes(policy, business, cheat, result)),
    )
    click.echo(report.json() if as_json else report.text())


def _policy(**settings: object) -> Policy:
    try:
        return Policy.from_document(PolicySettings().load(settings))
    except marshmallow.ValidationError as error:
        faults = error.messages_dict
        raise click.UsageError(
            "\n".join(
                f"{_OPTIONS[name]}: {' '.join(_words(said))}" for name, said in faults.items()
            )
        ) from error


def _words(faults: object) -> Iterator[str]:
    """Take the sentences out of nested messages."""
    if isinstance(faults, str):
        yield faults
    elif isinstance(faults, dict | list):
        for fault in faults.values() if isinstance(faults, dict) else faults:
            yield from _words(fault)


def _honest(
    name: str | None, file: Path | None, decimals: int, notes: list[str]
) -> tuple[Honest, str]:
    if file is None:
        with _refused("--honest"):
            return named(name or "law", HONEST), name or "law"
    if name is not None:
        raise click.UsageError("--honest and --csv exclude each other")
    with _refused("--csv"):
        try:
            with file.open(encoding="utf-8", newline="") as lines:
                amounts = read_amounts(lines, decimals)
        except UnicodeDecodeError as error:
            raise ValueError("the file is not UTF-8 text") from error
        own = Resampled(amounts=amounts)
    if amounts.skipped:
        notes.append(f"{amounts.skipped} rows of the file have no amount above zero: left out")
    unit = "runs of 50 rows" if amounts.at is None else "days"
    notes.append(
        f"{len(own.blocks())} {unit} of the file are resampled: what holds over longer than one "
        "is not in the simulation"
    )
    return own, f"resampled {file.name}"


def _notes(policy: Policy, honest: Honest, fraud: Fraud | None, result: Result) -> Iterator[str]:
    seen = result.honest
    learning = max(seen.references["learning"].values())
    if learning and fraud is not None:
        yield (
            f"{learning:.0%} of the streams were still learning at the change: a baseline learned "
            "from a stream that already cheats hides the cheating"
        )
    elif learning:
        yield f"{learning:.0%} of the streams never completed a baseline and could raise no alarm"
    if seen.bounds_hold is None:
        yield (
            "rows of this pattern differ in time or between merchants: whether the condition of "
            "the promise holds for them was not checked"
        )
    elif seen.bounds_hold < 1 and not learning:
        yield (
            f"in {1 - seen.bounds_hold:.1%} of the streams a cell's true probability exceeds its "
            "bound: there nothing is promised"
        )
    if fraud is not None and policy.reference != "law":
        yield (
            "the benchmark takes an own baseline to have seen each cell as often as expected; "
            "real ones differ"
        )
    if fraud is not None and policy.limits:
        yield "the benchmark leaves review limits out"


@contextmanager
def _refused(option: str | None) -> Iterator[None]:
    """Turn a ValueError into a complaint about an option."""
    try:
        yield
    except ValueError as error:
        raise click.UsageError(f"{option}: {error}" if option else str(error)) from error


@contextmanager
def _progress(total: int) -> Iterator[Progress]:
    with tqdm(
        total=total, unit="row", unit_scale=True, leave=False, disable=not sys.stderr.isatty()
    ) as bar:

        def done(rows: int) -> None:
            bar.update(rows)

        yield done
