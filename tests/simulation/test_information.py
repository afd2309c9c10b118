"""The benchmark, against SciPy's entropy and a general optimiser."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import optimize, stats

from service.detection.bank import LAW
from service.detection.policy import Policy
from service.digits.laws import leading_law
from service.digits.views import LEAD_PAIR
from service.simulation.fraud import Digits, OneAmount, Ones, Pair49, RoundEndings, Uniform
from service.simulation.honest import Law, PricePoints
from service.simulation.information import divergence, information, nearest

EXACT = Policy(reference="law", tolerance=0.0)
TOLERANT = Policy(reference="law")


def least(q, constraints_u, together=None, joint=1.0):
    """Minimise KL(q, p) over the null with scipy.optimize, SLSQP, q above 0."""
    conditions = [{"type": "eq", "fun": lambda p: p.sum() - 1, "jac": np.ones_like}]
    if together is not None:
        conditions.append(
            {
                "type": "ineq",
                "fun": lambda p: joint - p[together].sum(),
                "jac": lambda p: -together.astype(float),
            }
        )
    start = constraints_u / constraints_u.sum()
    found = optimize.minimize(
        lambda p: float((q * np.log(q / p)).sum()),
        start,
        jac=lambda p: -q / p,
        bounds=[(1e-9, u) for u in constraints_u],
        constraints=conditions,
        method="SLSQP",
        options={"maxiter": 500, "ftol": 1e-14},
    )
    assert found.success, found.message
    return found.fun


def test_divergence_is_the_relative_entropy_of_scipy() -> None:
    rng = np.random.default_rng(1)
    q, p = rng.dirichlet(np.ones(90)), rng.dirichlet(np.ones(90))
    q[:5] = 0
    q /= q.sum()
    assert divergence(q, p) == pytest.approx(stats.entropy(q, p), rel=1e-12)


@pytest.mark.parametrize("tolerance", [0.0, 0.1, 0.5])
@pytest.mark.parametrize("seed", range(3))
def test_the_nearest_member_of_the_null_is_the_optimisers(seed, tolerance) -> None:
    rng = np.random.default_rng(seed)
    law = leading_law(1)
    q = 0.7 * law + 0.3 * rng.dirichlet(np.ones(9))
    u = law * (1 + tolerance)
    p = nearest(q, u)
    assert p.sum() == pytest.approx(1)
    assert np.all(p <= u + 1e-12)
    assert divergence(q, p) == pytest.approx(least(q, u), abs=1e-7)


@pytest.mark.parametrize("joint", [0.05, 0.12, 0.2])
def test_a_joint_bound_is_kept_in_the_nearest_way(joint) -> None:
    rng = np.random.default_rng(4)
    together = np.array([True] * 5 + [False] * 4)
    q = np.concatenate([np.full(5, 0.07), rng.dirichlet(np.ones(4)) * 0.65])
    u = np.minimum(np.concatenate([np.full(5, 0.06), q[5:] * 1.9]), 1)
    p = nearest(q, u, together, joint)
    assert p.sum() == pytest.approx(1)
    assert p[together].sum() <= joint + 1e-12
    assert np.all(p <= u + 1e-12)
    assert divergence(q, p) == pytest.approx(least(q, u, together, joint), abs=1e-7)


def test_mass_beyond_the_bounds_of_used_cells_lies_elsewhere() -> None:
    p = nearest(np.array([0.6, 0.4, 0.0]), np.array([0.2, 0.2, 0.9]))
    assert p.tolist() == [0.2, 0.2, 0.0]


def test_without_tolerance_it_is_the_plain_divergence_from_the_law() -> None:
    told = information(EXACT, Law(), Pair49(), 0.1)
    q = 0.9 * LAW[LEAD_PAIR]
    q[39] += 0.1
    assert told.view == "lead_pair"
    assert told.per_row == pytest.approx(stats.entropy(q, LAW[LEAD_PAIR]), rel=1e-9)


@pytest.mark.parametrize(
    ("fraud", "share", "rows"),
    [
        (Pair49(), 0.10, 78),
        (Pair49(), 0.40, 11),
        (RoundEndings(), 0.10, 83),
        (Digits(), 0.20, 1744),
        (Digits(), 0.40, 444),
        (Ones(), 0.20, 306),
    ],
)
def test_bounds_of_the_design_come_out(fraud, share, rows) -> None:
    # design.md section 3, in brackets: log A / KL at A = 10^6, against the law without tolerance
    assert information(EXACT, Law(), fraud, share).rows(1e6) == pytest.approx(rows, rel=0.02, abs=1)


def test_tolerance_hides_what_is_diffuse() -> None:
    plain = information(EXACT, Law(), Uniform(), 0.1).per_row
    tolerant = information(TOLERANT, Law(), Uniform(), 0.1).per_row
    assert tolerant < 0.1 * plain
    assert information(TOLERANT, Law(), Digits(), 0.02).rows(1e6) == math.inf


def test_a_view_that_the_policy_does_not_watch_tells_nothing() -> None:
    only_lead = Policy(reference="law", views=("lead_digit",))
    assert information(only_lead, Law(), RoundEndings(), 0.4).rows(1e6) == math.inf


def test_against_an_own_baseline_rare_cells_tell_together() -> None:
    shop = PricePoints(prices=5)
    own = Policy(reference="own")
    by_cells = information(Policy(reference="own", views=("lead_digit",)), shop, Digits(), 0.2)
    assert information(own, shop, Digits(), 0.2).per_row > 5 * by_cells.per_row
    larger = Policy(reference="own", baseline_size=20_000)
    amount = OneAmount(amount=7373)
    assert (
        information(larger, shop, amount, 0.1).per_row > information(own, shop, amount, 0.1).per_row
    )


def test_a_share_out_of_range_is_refused() -> None:
    with pytest.raises(ValueError, match=r"^share must be 0 to 1, got 1.5"):
        information(EXACT, Law(), Pair49(), 1.5)
