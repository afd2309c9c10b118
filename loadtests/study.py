"""The product's claim, recomputed: rows between false alarms, and rows until a change is found.

Prints Markdown tables with standard errors, the first-order benchmark log(A) / KL (see
`service.simulation.information`) and the ratio of the mean delay to it. Everything is seeded: the
same seed and code give the same tables. Alarms are settled at once (see `service.simulation.run`).
"""

from __future__ import annotations

import argparse
import math
import sys
import time
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from tqdm import tqdm

from service.detection.policy import Limit, Policy
from service.simulation.fraud import FRAUD
from service.simulation.honest import HONEST
from service.simulation.information import Information, information
from service.simulation.naming import named
from service.simulation.outcome import Delay, RunLength, delay
from service.simulation.run import CURRENCY, GROUP, Flock, honest_rows, simulate

A = 1_000_000.0
SHARES = (0.05, 0.10, 0.20, 0.40)
DESIGNED = ("pair_49", "round_endings", "invented", "ones")
UNTUNED = ("cold_cell", "two_amounts", "under_limit", "human_digits", "uniform_20_80")


@dataclass(frozen=True)
class Delays:
    """One delay table."""

    title: str
    policy: Policy
    honest: str
    frauds: tuple[str, ...]
    shares: tuple[float, ...]
    changes: tuple[int, ...]


@dataclass(frozen=True)
class Runs:
    """One row of the run-length table, for every A."""

    honest: str
    policy: Policy
    condition: str
    """Whether the promise's condition holds; what can be computed is printed beside it."""


@dataclass(frozen=True)
class Size:
    """How much is simulated."""

    streams: int
    longest: int  # rows after a change
    thresholds: tuple[int, ...]
    rows: dict[int, int]  # per stream, after the baseline, by threshold


FULL = Size(
    200, 30_000, (1_000, 10_000, 100_000), {1_000: 20_000, 10_000: 50_000, 100_000: 150_000}
)
QUICK = Size(40, 3_000, (1_000,), {1_000: 5_000})

LAW = Policy(reference="law", transactions_per_false_alarm=A)
EXACT = replace(LAW, tolerance=0.0)
LIMITED = replace(LAW, limits=(Limit(CURRENCY, 100_000, 0.05),))
AUTO = Policy(transactions_per_false_alarm=A)


def delay_tables(quick: bool) -> list[Delays]:
    changes = (0, 2_000) if quick else (0, 2_000, 100_000)
    learned = (3_000,) if quick else (3_000, 100_000)
    shares = (0.10, 0.40) if quick else SHARES
    few = (0.20, 0.40)
    frauds = DESIGNED + UNTUNED
    tables = [
        Delays("Reference law, default tolerance", LAW, "law", frauds, shares, changes),
        Delays(
            "Reference law, tolerance 0 (the setting of the design's bounds)",
            EXACT,
            "law",
            frauds,
            shares,
            changes[:2],
        ),
        Delays(
            "Learned: reference auto, a merchant that follows the law",
            AUTO,
            "law",
            frauds,
            (0.10, *few),
            learned,
        ),
        Delays(
            "Learned: a price-point shop against its own baseline",
            AUTO,
            "price_points",
            ("one_amount", "round_endings", "invented", "human_digits", *UNTUNED[:3]),
            few,
            learned,
        ),
    ]
    for policy, how in ((LAW, "without"), (LIMITED, "with")):
        limited = ("under_limit:limit=100000",)
        title = f"Reference law, {how} a review limit at 1000.00"
        tables.append(Delays(title, policy, "law", limited, SHARES, learned[:1]))
    return [tables[0], tables[3]] if quick else tables


IID = "yes, if the bounds hold"


def run_tables(quick: bool) -> list[Runs]:
    law = [
        Runs("law", LAW, "yes"),
        Runs("lognormal:sigma=0.6", LAW, "yes"),
        Runs("lognormal:sigma=0.5", LAW, "yes"),
        Runs("lognormal:sigma=0.45", LAW, "yes"),
        Runs("lognormal:sigma=0.40", LAW, "yes, barely: up to 9 % off in density"),
        Runs("bimodal", LAW, "no: up to 45 % off in density"),
    ]
    months = replace(AUTO, baseline_days=62.0)
    auto = [
        *(replace(r, policy=AUTO, condition=IID) for r in law),
        Runs("near_nine", AUTO, IID),
        Runs("quarter_endings", AUTO, IID),
        Runs("near_limit", AUTO, IID),
        Runs("price_points", AUTO, "yes, at the baseline's confidence"),
        Runs("lunch_and_dinner:per_day=60", AUTO, "yes, if both menus stay within the bounds"),
        Runs("recurring", AUTO, "no: 14 days do not represent a month"),
        Runs("recurring", months, "no: on billing days rows depend on each other"),
        Runs("promotion", AUTO, "no: a real change after a baseline without it"),
        Runs("promotion", months, "nearly: the promotion's days are rarer in the baseline"),
    ]
    return [law[0], auto[0], auto[6], auto[9]] if quick else law + auto


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--quick", action="store_true", help="a small part of it, in 1-2 minutes")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--only", choices=("delays", "runs"))
    given = parser.parse_args()
    size = QUICK if given.quick else FULL
    print(
        f"`python -m loadtests.study{' --quick' if given.quick else ''}`, seed {given.seed}, ",
        end="",
    )
    print(f"{size.streams} streams a figure; ± is one standard error.")
    print(f"\n{speed(given.seed)}")
    if given.only != "runs":
        for table in delay_tables(given.quick):
            print_delays(table, size, given.seed)
    if given.only != "delays":
        print_runs(run_tables(given.quick), size, given.seed)


def speed(seed: int) -> str:
    started = time.process_time()
    rows, streams = 10_000, 5 * GROUP
    simulate(LAW, HONEST["law"](), streams=streams, rows=rows, seed=seed)
    spent = time.process_time() - started
    return f"Speed: {rows * streams / spent / 1e6:.2f} million transactions a second of CPU time."


def print_delays(table: Delays, size: Size, seed: int) -> None:
    honest = named(table.honest, HONEST)
    print(f"\n## Delay: {table.title}\n")
    print(f"A = {A:,.0f}; honest pattern `{table.honest}`; seed {seed}. Cells: mean rows from the")
    print("change to the alarm (≥: some were not found; then found share within the limit).")
    print(
        "log A / KL: first-order benchmark against the nearest member of the null, in one view.\n"
    )
    flocks: dict[int, list[Flock]] = {}
    heads = []
    total = size.streams * sum(table.changes)
    with bar(total, "honest rows") as progress:
        for change in table.changes:
            flocks[change] = [
                Flock(table.policy, honest, seed, range(s, min(s + GROUP, size.streams)))
                for s in range(0, size.streams, GROUP)
            ]
            seen = [f.honest(change, progress.update) for f in flocks[change]]
            summary = honest_rows(table.policy, honest, seen)
            early = summary.false_alarms.alarms
            learning = max(summary.references["learning"].values())
            heads.append(f"after {change:,}")
            print(
                f"- {change:,} honest rows first: {early} alarms before the change in "
                f"{summary.false_alarms.rows:,} rows"
                + (f"; {learning:.0%} still learning" if learning and change else "")
            )
    print(f"\n| fraud | share | {' | '.join(heads)} | log A / KL | ratio | view |")
    print(f"|---|---|{'---|' * len(heads)}---|---|---|")
    frauds = tqdm(
        [(f, e) for f in table.frauds for e in table.shares],
        desc=table.title,
        leave=False,
        disable=not sys.stderr.isatty(),
    )
    for name, share in frauds:
        fraud = named(name, FRAUD)
        told = information(table.policy, honest, fraud, share, seed=seed)
        found = [
            found_by(flocks[change], name, share, limit(told, size)) for change in table.changes
        ]
        bound = told.rows(A)
        ratios = " / ".join(ratio(d, bound) for d in found)
        cells = " | ".join(in_words(d) for d in found)
        print(
            f"| {name} | {share:.2f} | {cells} | {bound:,.0f} | {ratios} | {told.view} |",
            flush=True,
        )


def found_by(flocks: list[Flock], name: str, share: float, longest: int) -> Delay:
    fraud = named(name, FRAUD)
    rows = [flock.fork().changed(fraud, share, longest) for flock in flocks]
    return delay(np.concatenate(rows), longest)


def ratio(found: Delay, bound: float) -> str:
    return f"{found.mean / bound:.2f}" if found.found == 1 and math.isfinite(bound) else "–"


def limit(told: Information, size: Size) -> int:
    """Look 20 benchmarks far, but never farther than the size allows."""
    bound = told.rows(A)
    return size.longest if math.isinf(bound) else min(size.longest, max(500, round(20 * bound)))


def in_words(found: Delay) -> str:
    text = f"{found.mean:,.0f} ± {found.standard_error:,.0f}"
    if found.found == 1:
        return text
    if found.found == 0:
        return f"none in {found.limit:,}"
    return f"≥ {text} ({found.found:.0%} in {found.limit:,})"


def print_runs(runs: list[Runs], size: Size, seed: int) -> None:
    print("\n## Rows between false alarms\n")
    print(f"Seed {seed}. Rows of baselines being learned do not count. *Reaching A*: share of the")
    print("streams (for reference auto: of the baselines) with at most one alarm every A rows;")
    print("*surely below*: those whose alarms an exact one in A gives with less than 1 % chance.")
    print("*Bounds hold*: share of streams in which no cell's true probability exceeds its bound")
    print("(– where rows are not independent). *Guarantee*: what the service says of it.\n")
    print(
        "| honest | reference | A | rows | alarms | rows per alarm (95 %) | ÷ A | reaching A |"
        " surely below | bounds hold | guarantee holds | does the condition hold? |"
    )
    print("|---|---|---|---|---|---|---|---|---|---|---|---|")
    for run in runs:
        lengths = dict(measured(run, size, seed))
        if len(lengths) > 1:
            print(f"{first_columns(run, 10**6)} | – | – | {extrapolated(lengths)} | | | | | |")


def measured(run: Runs, size: Size, seed: int) -> Iterator[tuple[int, RunLength]]:
    honest = named(run.honest, HONEST)
    learned = run.policy.reference != "law"
    for threshold in size.thresholds:
        policy = replace(run.policy, transactions_per_false_alarm=float(threshold))
        rows = size.rows[threshold]
        if run.condition.startswith("no:"):  # alarms abound: a part tells enough, and takes less
            rows = max(rows // 10, threshold)
        if learned:
            rows += (
                max(policy.baseline_size, round(policy.baseline_days * honest.rows_a_day())) + 200
            )
        with bar(size.streams * rows, f"{run.honest} at {threshold:,}") as progress:
            seen = simulate(
                policy, honest, streams=size.streams, rows=rows, seed=seed, progress=progress.update
            ).honest
        length = seen.false_alarms
        holds = "–" if seen.bounds_hold is None else f"{seen.bounds_hold:.1%}"
        print(
            f"{first_columns(run, threshold)} | {length.rows:,} | {length.alarms:,} | "
            f"{length_in_words(length)} | {over(length, threshold)} | {percent(length.reaching)} | "
            f"{percent(length.refuted)} | {holds} | {seen.guarantee['holds']:.0%} | "
            f"{run.condition} |",
            flush=True,
        )
        yield threshold, length


def first_columns(run: Runs, threshold: int) -> str:
    days = run.policy.baseline_days
    reference = run.policy.reference
    if reference != "law" and days != Policy().baseline_days:
        reference += f", {days:g} days"
    return f"| {run.honest} | {reference} | {threshold:,}"


def length_in_words(length: RunLength) -> str:
    if length.mean is None or length.high is None:
        return f"≥ {length.low:,.0f} (no alarm)"
    return (
        f"{length.mean:,.0f} ± {length.standard_error:,.0f} ({length.low:,.0f}–{length.high:,.0f})"
    )


def over(length: RunLength, threshold: float) -> str:
    return (
        f"≥ {length.low / threshold:.2f}"
        if length.mean is None
        else f"{length.mean / threshold:.2f}"
    )


def percent(share: float | None) -> str:
    return "–" if share is None else f"{share:.1%}"


def extrapolated(lengths: dict[int, RunLength]) -> str:
    """Return the run length at 10^6 from a line through the logarithms, labelled as such."""
    usable = [(a, r) for a, r in lengths.items() if r.mean and r.standard_error and r.alarms >= 5]
    if len(usable) < 2:
        return "too few alarms to extrapolate | –"
    x = np.log([a for a, _ in usable])
    y = np.log([r.mean for _, r in usable])
    error = np.array([r.standard_error / r.mean for _, r in usable])
    basis = np.stack([np.ones_like(x), x], axis=1) / error[:, None]
    covariance = np.linalg.inv(basis.T @ basis)
    line = covariance @ basis.T @ (y / error)
    at = np.array([1.0, math.log(1e6)])
    value = float(np.exp(at @ line))
    spread = value * math.sqrt(float(at @ covariance @ at))
    return f"{value:,.0f} ± {spread:,.0f} (extrapolated) | {value / 1e6:.2f}"


def bar(total: int, name: str) -> tqdm:
    return tqdm(
        total=total,
        desc=name,
        unit="row",
        unit_scale=True,
        leave=False,
        disable=not sys.stderr.isatty(),
    )


if __name__ == "__main__":
    main()
