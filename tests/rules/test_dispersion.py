"""Over-dispersion: found where it is, seldom where it is not, and never mistaken for a shift."""

from __future__ import annotations

import numpy as np
import pytest

from rules.dispersion import count_dispersion, gap_dispersion, lot_dispersion

STREAMS = 300


def counts_of(rng, mean, index, size):
    return (
        rng.poisson(mean, size) if index == 1 else rng.negative_binomial(mean / (index - 1), 1 / index, size)
    )


@pytest.mark.parametrize("events", [13, 40, 150])
def test_exponential_gaps_are_seldom_called_clustered(events):
    rng = np.random.default_rng(1)
    found = [gap_dispersion(np.cumsum(rng.exponential(30.0, events)), 0.0).index > 1 for _ in range(STREAMS)]
    # 2 standard deviations of a skew score, three spans looked at, less asked for from few events
    assert np.mean(found) <= (0.20 if events < 100 else 0.11)


@pytest.mark.parametrize(("mean", "records"), [(0.3, 100), (4.0, 12), (4.0, 60), (20.0, 30)])
def test_poisson_counts_are_seldom_called_clustered(mean, records):
    rng = np.random.default_rng(2)
    size = rng.uniform(0.3, 1.7, records)
    found = [count_dispersion(rng.poisson(mean * size), size).index > 1 for _ in range(STREAMS)]
    assert np.mean(found) <= 0.24


@pytest.mark.parametrize("index", [2.0, 4.0])
def test_clustered_gaps_are_found_and_measured(index):
    rng = np.random.default_rng(3)
    found = np.array(
        [gap_dispersion(np.cumsum(rng.gamma(1 / index, index, 100)), 0.0).index for _ in range(200)]
    )
    assert (found > 1).mean() >= 0.95
    assert index * 0.85 <= np.median(found) <= index * 1.35


@pytest.mark.parametrize(("index", "mean"), [(2.0, 4.0), (4.0, 4.0), (4.0, 0.5)])
def test_clustered_counts_are_found_and_measured(index, mean):
    rng = np.random.default_rng(4)
    found = np.array(
        [count_dispersion(counts_of(rng, mean, index, 150), np.ones(150)).index for _ in range(200)]
    )
    assert (found > 1).mean() >= 0.9
    assert index * 0.8 <= np.median(found[found > 1]) <= index * 1.35


def test_a_lasting_change_of_the_rate_is_not_taken_for_clusters():
    rng = np.random.default_rng(5)
    found = [
        gap_dispersion(np.cumsum(np.concatenate([rng.exponential(40, 60), rng.exponential(10, 60)])), 0.0).index > 1
        for _ in range(STREAMS)
    ]  # fmt: skip
    assert np.mean(found) <= 0.30


def test_a_known_change_is_left_out_altogether():
    rng = np.random.default_rng(5)
    found, plain = 0, 0
    for _ in range(STREAMS):
        x = np.cumsum(np.concatenate([rng.exponential(40, 30), rng.exponential(4, 30)]))
        found += gap_dispersion(x, 0.0, (float(x[29]),)).index > 1
        plain += gap_dispersion(x, 0.0).index > 1
    assert found / STREAMS <= 0.17
    assert plain > 1.5 * found


def test_days_rounded_down_are_not_clusters():
    rng = np.random.default_rng(6)
    found = [
        gap_dispersion(np.floor(np.cumsum(rng.exponential(2.0, 200))), 1.0).index > 1 for _ in range(STREAMS)
    ]
    assert np.mean(found) <= 0.15


def test_events_that_come_in_threes_are_clusters():
    rng = np.random.default_rng(7)
    starts = np.cumsum(rng.exponential(90.0, 30))
    events = np.sort(np.repeat(starts, 3) + rng.exponential(0.5, 90))
    assert gap_dispersion(events, 0.0).index > 2.5


def test_regular_events_are_called_regular_and_nothing_else():
    even = gap_dispersion(np.arange(1, 30) * 40.0, 0.0)
    assert (even.index, even.regular) == (1.0, True)
    assert not gap_dispersion(np.cumsum(np.random.default_rng(8).exponential(1.0, 40)), 0.0).regular


def test_lots_do_not_look_clustered_by_their_making():
    rng = np.random.default_rng(9)
    shown = 0
    for _ in range(100):
        failing = rng.binomial(200, 0.005, 150)
        at = np.repeat(np.arange(150) * 200.0, failing) + 200.0 * np.concatenate(
            [(np.arange(k) + 1) / k for k in failing if k]
        )
        shown += lot_dispersion(at, 150 * 200.0, 200.0).index > 1
    assert shown <= 20


def test_too_little_says_nothing():
    assert gap_dispersion(np.array([0.0, 1.0, 2.0]), 0.0).index == 1.0
    assert count_dispersion(np.array([9, 0, 9]), np.ones(3)).index == 1.0
    assert lot_dispersion(np.array([1.0]), 5.0, 1.0).index == 1.0
