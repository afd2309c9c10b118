"""Once ready, nothing is left to be compiled."""

from __future__ import annotations

import numpy as np

from service import ready
from service.batches import identity, instants
from service.detection.policy import Policy
from service.digits import measures
from service.store import layout
from service.streams import fit, snapshots, walk
from service.streams.detail import detail
from service.streams.record import Stream
from service.streams.state import BY_OWN
from tests.streams.listed import listed
from tests.streams.test_fold import START, law_amounts, records, run

ENTRANCES = (
    walk.walk,
    walk.evidence_of,
    snapshots._tidy,
    snapshots._pack_stream,
    snapshots._unpack_streams,
    fit._sum,
    identity._row_idents,
    identity._mix_all,
    identity._finish,
    instants._read,
    layout._lay_out,
    layout.unfolded,
    fit._excess_of_learned,
    measures._excess_mad,
)


def compiled() -> list[int]:
    """Return for how many types of arguments each function is compiled."""
    return [len(function.signatures) for function in ENTRANCES]


def test_rows_of_any_kind_need_no_further_code() -> None:
    ready.get_ready()
    assert min(compiled()) > 0
    before = compiled()
    shop = np.random.default_rng(1).choice([199, 299, 499, 999], 900)
    logs = [records(law_amounts(np.random.default_rng(2), 900)), records(shop), records([0, 5])]
    policies = {1: Policy(baseline_size=300, baseline_days=0)}
    folded, _ = run(logs, policies, cuts=[[5, 100]] * 3, snapshots=True)
    streams = [Stream(f"m{i}", "sale", "EUR") for i in range(3)]
    assert len(listed(folded, streams, policies, START)) == 3
    assert folded.state["reference"].max() == BY_OWN
    document = detail(
        folded.only([1]), streams[1], policies, START, category=None, all_measures=True
    )
    assert document["views"]["lead_digit"]["reference"] == "own"
    assert compiled() == before
