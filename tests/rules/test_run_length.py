"""Run lengths against plain simulation, an independent chain and laws."""

from __future__ import annotations

import math
from itertools import pairwise
from random import Random

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from rules.cusum import BANK
from rules.run_length import count_cusum_run_length, cusum_level, cusum_limit, gap_cusum_run_length

RATIOS = [1.001, 1.05, 1.3, 1.5, 1.7, 2.5, 4.5, 6.0, 10.0, 60.0, 100.0]
RATIOS += [1.0 / r for r in RATIOS]


def walked_exposure(ratio: float, limit: float, random: Random) -> float:
    """One steady stream watched by one CUSUM, told as plainly as it can be."""
    evidence = exposure = 0.0
    while True:
        gap = random.expovariate(1.0)
        if ratio < 1.0:
            needed = (limit - evidence) / (1.0 - ratio)
            if gap >= needed:
                return exposure + needed
        exposure += gap
        evidence = max(0.0, evidence - (ratio - 1.0) * gap)
        evidence += math.log(ratio)
        if evidence >= limit:
            return exposure
        evidence = max(0.0, evidence)


@pytest.mark.parametrize("ratio", [1.3, 2.5, 10.0, 1 / 1.3, 1 / 2.5, 0.1])
@pytest.mark.parametrize("limit", [0.6, 1.7, 3.1])
def test_level_is_what_a_plain_walk_takes(ratio: float, limit: float) -> None:
    # independent: seeded simulation, within four standard errors
    random = Random(f"{ratio:.4f}/{limit}")
    walks = [walked_exposure(ratio, limit, random) for _ in range(1_500)]
    error = float(np.std(walks)) / math.sqrt(len(walks))
    assert abs(float(np.mean(walks)) - cusum_level(ratio, limit)) < 4.0 * error


@pytest.mark.parametrize("ratio", RATIOS)
def test_interpolated_level_is_right_to_a_thousandth(ratio: float) -> None:
    # independent: the gap CUSUM's exact sum, into which drift |δ − 1| and jump |ln δ| turn by scaling; for
    # δ < 1 the exposure to a mid-gap signal is the events of a CUSUM looked at only at events, less one
    drift, jump = abs(ratio - 1.0), abs(math.log(ratio))
    for limit in np.linspace(jump * 1.003, min(25.0, 50.0 * jump), 61):
        k, h = jump / drift, (float(limit) - jump) / drift
        exact = gap_cusum_run_length(k, h, "worse" if ratio > 1.0 else "better")
        exact += 1.0 if ratio > 1.0 else -1.0
        assert cusum_level(ratio, float(limit)) == pytest.approx(exact, rel=1e-3)


@pytest.mark.parametrize("ratio", RATIOS)
def test_level_rises_with_the_limit_without_a_break(ratio: float) -> None:
    grid = np.linspace(abs(math.log(ratio)) * 1.0001, 26.0, 4_000)
    levels = [cusum_level(ratio, float(h)) for h in grid]
    assert all(b > a for a, b in pairwise(levels))
    step = float(grid[1] - grid[0])
    if step < 0.2 * abs(math.log(ratio)):
        assert max(math.log(b / a) for a, b in pairwise(levels[40:])) < 12.0 * step


def test_level_of_a_worse_cusum_is_one_event_up_to_one_events_evidence() -> None:
    assert cusum_level(2.5, math.log(2.5)) == 1.0
    assert cusum_level(2.5, 0.1) == 1.0
    assert cusum_level(2.5, math.log(2.5) * 1.001) > 1.5


def test_level_of_a_better_cusum_before_one_drop_is_the_wait_for_a_free_stretch() -> None:
    # law: the mean wait for a stretch of length x without an event of a unit Poisson process is e^x − 1
    assert cusum_level(0.4, 0.5) == pytest.approx(math.expm1(0.5 / 0.6), rel=1e-12)


def test_level_grows_by_e_per_unit_far_out() -> None:
    # law: Cramér-Lundberg; the likelihood ratio's exponent is 1
    for ratio in BANK:
        for r in (ratio, 1.0 / ratio):
            assert cusum_level(r, 41.0) / cusum_level(r, 40.0) == pytest.approx(math.e, rel=1e-9)
            assert cusum_level(r, 650.0) / cusum_level(r, 649.0) == pytest.approx(math.e, rel=1e-9)
    assert cusum_level(2.0, 1e4) == math.inf


@given(
    log_ratio=st.floats(0.02, math.log(100.0)),
    worse=st.booleans(),
    limit=st.floats(0.05, 60.0),
)
def test_limit_is_the_inverse_of_level(log_ratio: float, worse: bool, limit: float) -> None:
    ratio = round(math.exp(log_ratio if worse else -log_ratio), 2)
    ratio = 1.5 if ratio in {0.0, 1.0} else ratio
    level = cusum_level(ratio, limit)
    back = cusum_limit(ratio, level)
    if ratio > 1.0 and limit <= math.log(ratio) * (1 + 1e-8):
        assert back <= limit
    else:
        assert back == pytest.approx(limit, rel=1e-6)
    assert cusum_level(ratio, back) == pytest.approx(level, rel=1e-9)


def test_limit_for_a_level_that_no_limit_has_is_the_next_higher() -> None:
    # two events at once are needed just above one event's evidence: its level jumps there from 1
    low = cusum_limit(10.0, 1.05)
    assert low == pytest.approx(math.log(10.0), rel=1e-8)
    assert cusum_level(10.0, low) > 1.05
    assert cusum_limit(10.0, 0.0) == 0.0
    assert cusum_limit(10.0, math.inf) == math.inf


@pytest.mark.parametrize("ratio", [1.0, 1.0005, 0.0, -2.0, 1e-4, 1e4, math.nan])
def test_an_impossible_design_ratio_is_named(ratio: float) -> None:
    with pytest.raises(ValueError, match="design ratio"):
        cusum_level(ratio, 3.0)


def midpoint_chain(k: float, h: float, mean: float, cells: int) -> float:
    """Run length of S ← max(0, S + k − X) by a chain on cells of equal width (Brook & Evans 1972)."""
    width = h / cells
    middles = np.concatenate([[0.0], (np.arange(cells) + 0.5) * width])
    edges = np.arange(cells + 1) * width
    # P(new S <= edge) = P(X >= S + k − edge)
    below = np.exp(-np.maximum(middles[:, None] + k - edges[None, :], 0.0) / mean)
    chain = np.concatenate([below[:, :1], np.diff(below, axis=1)], axis=1)
    return float(np.linalg.solve(np.eye(cells + 1) - chain, np.ones(cells + 1))[0])


@pytest.mark.parametrize(("k", "h", "mean"), [(0.7, 4.0, 1.0), (0.5, 3.0, 0.5), (1.3, 5.0, 1.0)])
def test_gap_cusum_agrees_with_a_markov_chain(k: float, h: float, mean: float) -> None:
    # independent; trap 8: midpoint cells are right to about 1e-4 at 1,000 cells
    exact = gap_cusum_run_length(k, h, "worse", mean_gap=mean)
    assert midpoint_chain(k, h, mean, 1_000) == pytest.approx(exact, rel=5e-4)


@given(k=st.floats(0.2, 3.0), share=st.floats(0.02, 0.999), start=st.floats(0.0, 0.99))
def test_gap_cusum_meets_the_closed_forms_of_short_limits(k: float, share: float, start: float) -> None:
    # Vardeman & Ray 1985; Mititelu et al. 2010 (h <= k)
    h = share * k
    s = start * h
    better = math.exp(h) * (1.0 + math.exp(k) - h) - math.exp(s)
    assert gap_cusum_run_length(k, h, "better", start=s) == pytest.approx(better, rel=1e-10)
    worse = 1.0 + math.exp(h - k) / (1.0 - (1.0 + h) * math.exp(-k))
    assert gap_cusum_run_length(k, h, "worse") == pytest.approx(worse, rel=1e-10)


def test_gap_cusum_keeps_its_digits_where_doubles_lose_them() -> None:
    # law: far out the run length grows by e^θ per unit of h, θ > 0 with θ = e^(θ k) − 1; k = .3, h about 40
    rate = 8.0
    for _ in range(60):
        rate = math.log1p(rate) / 0.3
    runs = [gap_cusum_run_length(0.3, h, "worse") for h in (40.0, 40.5)]
    assert math.log(runs[1] / runs[0]) / 0.5 == pytest.approx(rate, rel=1e-12)
    assert gap_cusum_run_length(0.02, 10.0, "worse") == math.inf


def test_gap_cusum_refuses_what_it_cannot_do() -> None:
    with pytest.raises(ValueError, match="more than 600 times"):
        gap_cusum_run_length(0.01, 10.0, "worse")
    with pytest.raises(ValueError, match="below the limit"):
        gap_cusum_run_length(1.0, 2.0, "worse", start=2.0)


def walked_counts(k: float, h: float, mean: float, direction: str, rng: np.random.Generator) -> int:
    """One CUSUM of counts until it reaches h."""
    total, seen = 0.0, 0
    while True:
        seen += 1
        move = float(rng.poisson(mean)) - k
        total = max(0.0, total + (move if direction == "worse" else -move))
        if total >= h - 1e-9:
            return seen


@pytest.mark.parametrize(
    ("k", "h", "mean", "direction"),
    [
        (1.5, 4.0, 1.0, "worse"),
        (0.75, 2.5, 0.5, "worse"),
        (1.5, 3.0, 2.0, "better"),
        (2.25, 4.0, 3.0, "better"),
    ],
)
def test_count_cusum_is_what_a_plain_walk_takes(k: float, h: float, mean: float, direction: str) -> None:
    # independent: seeded simulation, within four standard errors
    rng = np.random.default_rng(20261201)
    walks = [walked_counts(k, h, mean, direction, rng) for _ in range(1_500)]
    error = float(np.std(walks)) / math.sqrt(len(walks))
    exact = count_cusum_run_length(k, h, mean, direction=direction)
    assert abs(float(np.mean(walks)) - exact) < 4.0 * error


def test_count_cusum_refuses_values_without_a_common_fraction() -> None:
    with pytest.raises(ValueError, match="simple fraction"):
        count_cusum_run_length(math.sqrt(2.0), 4.0, 1.0)
    with pytest.raises(ValueError, match="states"):
        count_cusum_run_length(0.001, 50.0, 1.0)
