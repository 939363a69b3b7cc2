"""The rules on single points: their levels against simulation, their limits, what restarts do."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rules import protocol as p
from rules.bank import Base
from rules.points import Points

KNOWN = Base(math.inf, 1.0, 0)
WEIGHT = {
    "gap-limit": p.GAP_WEIGHT, "open-gap": p.GAP_WEIGHT, "gap-sum": p.SUM_WEIGHT, "median-run": p.RUN_WEIGHT,
    "near-limit-pair": p.PAIR_WEIGHT, "count-limit": p.COUNT_WEIGHT,
}  # fmt: skip


def first_signals(rule, direction, level, gaps):
    """Mean events until a rule's level first passes, by walking the gaps plainly."""
    waits, begin = [], 0
    points, end = Points(direction, 0.0), 0.0
    for i, gap in enumerate(gaps):
        end += gap
        found = points.gap_levels(KNOWN, end, 0.0).get(rule, -math.inf)
        points.take_gap(KNOWN, end, 0.0)
        if found - math.log(WEIGHT[rule]) >= math.log(level):
            waits.append(i + 1 - begin)
            begin = i + 1
            points = Points(direction, end)
    return float(np.mean(waits)), float(np.std(waits) / math.sqrt(len(waits)))


@pytest.mark.parametrize("direction", ["worse", "better"])
@pytest.mark.parametrize(
    ("rule", "level", "low", "high"),
    [("gap", 40.0, 0.9, 1.1), ("median-run", 61.9, 0.9, 1.1), ("near-limit-pair", 60.0, 0.9, 1.35), ("gap-sum", 40.0, 0.9, 2.2)],
)  # fmt: skip
def test_a_level_is_the_mean_number_of_gaps_between_false_signals(rule, direction, level, low, high):
    """Sums overlap and pairs need two points, so that theirs come a little later than 1 / probability says."""
    name = {"gap": "gap-limit" if direction == "worse" else "open-gap"}.get(rule, rule)
    gaps = np.random.default_rng(5).exponential(1.0, 30_000)
    mean, error = first_signals(name, direction, level, gaps)
    assert low * level - 3 * error <= mean <= high * level + 3 * error


def test_a_run_of_seven_below_the_median_has_the_level_of_seven_heads():
    """2^(k+1) - 2 tosses until k heads in a row (Feller 1968, XIII.7): 254 for seven."""
    points, end = Points("worse", 0.0), 0.0
    for _ in range(6):
        end += 0.5
        points.take_gap(KNOWN, end, 0.0)
    assert math.exp(points.gap_levels(KNOWN, end + 0.5, 0.0)["median-run"]) == pytest.approx(0.03 * 254)


def test_a_gap_on_the_other_side_of_the_median_breaks_a_run():
    points = Points("worse", 0.0)
    for end in (0.5, 1.0, 3.0):
        points.take_gap(KNOWN, end, 0.0)
    assert math.exp(points.gap_levels(KNOWN, 3.5, 0.0)["median-run"]) == pytest.approx(0.03 * 2)


def test_hits_state_what_was_seen_and_the_limit_that_it_passed():
    base = Base(30.0, 1200.0, 0)
    points = Points("worse", 0.0)
    for end in (1.0, 2.0):
        points.take_gap(base, end, 0.5)
    hits = {h.rule: h for h in points.gap_hits(base, 2.6, 0.5, math.log(5.0))}
    assert set(hits) == {"gap-limit", "gap-sum", "near-limit-pair"}
    for hit in hits.values():
        assert hit.statistic <= hit.limit
        assert hit.log_level >= math.log(5.0)
    assert hits["gap-sum"].statistic == pytest.approx(2.6)
    assert math.exp(base.log_within(1.0, hits["gap-limit"].limit)) == pytest.approx(
        p.GAP_WEIGHT / 5.0, rel=1e-9
    )


@pytest.mark.parametrize("rule", ["open-gap", "gap-sum", "near-limit-pair", "median-run"])
def test_better_reaches_its_limit_in_the_open_gap_where_it_says(rule):
    base, log_limit = Base(20.0, 20.0, 0), math.log(3.0)
    points = Points("better", 0.0)
    for end in (3.0, 6.5, 9.0, 12.0, 15.5, 18.0):
        points.take_gap(base, end, 0.0)
    at = points.crossing(base, rule, log_limit)
    before, after = (points.gap_levels(base, at * f, 0.0).get(rule, -math.inf) for f in (1 - 1e-6, 1 + 1e-6))
    assert before < log_limit or rule == "median-run"
    assert after >= log_limit
    assert at > 18.0


def test_too_even_gaps_make_no_runs():
    points = Points("better", 0.0)
    points.runs = False
    for end in range(1, 30):
        points.take_gap(KNOWN, float(end), 0.0)
    assert "median-run" not in points.gap_levels(KNOWN, 30.0, 0.0)


@pytest.mark.parametrize(("direction", "count"), [("worse", 14), ("better", 0)])
def test_count_limit_is_the_count_that_passes_and_its_neighbour_does_not(direction, count):
    base, exposure, log_limit = Base(40.0, 10.0, 0), 1.5, math.log(30.0)
    points = Points(direction, 0.0)
    hits = {h.rule: h for h in points.count_hits(base, count, exposure, log_limit, alone=True)}
    limit = int(hits["count-limit"].limit)
    step = -1 if direction == "worse" else 1
    assert points.count_levels(base, limit, exposure, alone=True)["count-limit"] >= log_limit
    assert points.count_levels(base, limit + step, exposure, alone=True).get("count-limit", -9.0) < log_limit


def test_a_restart_forgets_every_point():
    points = Points("worse", 0.0)
    for end in (0.1, 0.2, 0.3):
        points.take_gap(KNOWN, end, 0.0)
    points.restart(5.0)
    levels = points.gap_levels(KNOWN, 5.1, 0.0)
    assert "gap-sum" not in levels
    assert math.exp(levels["median-run"]) == pytest.approx(0.03 * 2)
