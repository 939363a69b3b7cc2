"""Exact boundary crossing against printed figures, and against the run lengths of CUSUMs by another route."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rules.crossing import (
    crossing_probability,
    maximised_boundaries,
    sequential_plan,
    time_to_signal,
)
from rules.run_length import gap_cusum_run_length

# Kulldorff, Davis, Kolczak, Lewis, Lieu & Platt 2011, table 1: horizon, critical value at .05 and at .01
CRITICAL = [
    (1, 2.853937, 4.670428),
    (5, 3.297183, 5.091907),
    (10, 3.467952, 5.260513),
    (20, 3.628123, 5.414770),
    (50, 3.819903, 5.605972),
    (100, 3.952321, 5.738974),
    (200, 4.074828, 5.862113),
]


@pytest.mark.parametrize(("horizon", "five", "one"), CRITICAL)
def test_critical_values_of_the_maximised_test(horizon: float, five: float, one: float) -> None:
    for limit, alpha in ((five, 0.05), (one, 0.01)):
        crossed = crossing_probability(maximised_boundaries(limit, horizon), horizon)
        # half a unit of the last printed digit moves the chance by less than a millionth of itself
        assert crossed == pytest.approx(alpha, rel=1e-6)


def test_boundaries_are_where_the_likelihood_ratio_reaches_the_limit() -> None:
    times = maximised_boundaries(3.467952, 10.0)
    k = np.arange(1, times.size + 1)
    # definition in the same paper
    assert times - k + k * np.log(k / times) == pytest.approx(3.467952, abs=1e-9)
    assert (times < k).all()
    assert times[-2] < 10.0 <= times[-1]


# the same paper, table 2: rate ratio, power at horizon 10 and alpha .05
@pytest.mark.parametrize(("ratio", "power"), [(1.2, 0.107), (1.5, 0.280), (2.0, 0.685), (3.0, 0.989)])
def test_power_of_the_maximised_test(ratio: float, power: float) -> None:
    found = crossing_probability(maximised_boundaries(3.467952, 10.0), 10.0, ratio)
    assert found == pytest.approx(power, abs=5.1e-4)


def test_time_to_signal_of_the_maximised_test() -> None:
    found = time_to_signal(maximised_boundaries(3.467952, 10.0), 10.0, rate=2.0)
    # documented example of the same authors: power, mean time given a signal, mean time watched
    assert found.probability == pytest.approx(0.6850634, abs=1e-6)
    assert found.time_if_signal == pytest.approx(4.130985, abs=2e-6)
    assert found.watched == pytest.approx(5.979353, abs=2e-6)


# MIL-HDBK-781, truncated plan III (discrimination ratio 2), times in units of the lower test mean
PLAN_REJECT = [
    0,
    0,
    0.70,
    2.08,
    3.48,
    4.86,
    6.24,
    7.63,
    9.02,
    10.40,
    11.79,
    13.18,
    14.56,
    15.94,
    17.34,
    20.60,
]
PLAN_ACCEPT = [4.40, 5.79, 7.18, 8.56, 9.94, 11.34, 12.72, 14.10, 15.49, 16.88, 18.26, 19.65] + [20.60] * 4


def test_true_risks_of_a_truncated_sequential_plan() -> None:
    good = sequential_plan(PLAN_REJECT, PLAN_ACCEPT, rate=0.5)
    bad = sequential_plan(PLAN_REJECT, PLAN_ACCEPT, rate=1.0)
    # MIL-HDBK-781, from memory: 12.8 % and 12.8 %, expected time 10.2 at the upper test mean
    assert round(100 * good.reject, 1) == 12.8
    assert round(100 * bad.accept, 1) == 12.8
    assert round(good.mean_time, 1) == 10.2
    # computed: exact crossing elsewhere
    assert 100 * good.reject == pytest.approx(12.83, abs=0.0051)
    assert 100 * bad.accept == pytest.approx(12.82, abs=0.0051)
    for found in (good, bad):
        assert found.reject + found.accept == pytest.approx(1.0, abs=1e-12)


# MIL-HDBK-781, fixed-length plans, from memory: length in units of the lower test mean, accepted number,
# discrimination ratio, producer's and consumer's risk in %
FIXED = [
    (45.0, 36, 1.5, 12.0, 9.9),
    (29.9, 25, 1.5, 10.9, 21.4),
    (18.8, 13, 2.0, 9.6, 10.6),
    (12.4, 9, 2.0, 9.8, 20.9),
    (9.3, 5, 3.0, 9.4, 9.9),
    (4.3, 2, 3.0, 17.5, 19.7),
    (1.1, 0, 3.0, 30.7, 33.3),
]


@pytest.mark.parametrize(("length", "accepted", "ratio", "producer", "consumer"), FIXED)
def test_a_fixed_plan_is_the_simplest_boundary(
    length: float, accepted: int, ratio: float, producer: float, consumer: float
) -> None:
    boundaries = [0.0] * accepted + [length]
    assert 100 * crossing_probability(boundaries, length, 1 / ratio) == pytest.approx(producer, abs=0.051)
    assert 100 * (1 - crossing_probability(boundaries, length)) == pytest.approx(consumer, abs=0.051)


def cusum_by_cycles(reference: float, limit: float, mean: float) -> float:
    """Mean number of events to a signal of ``S ← max(0, S + k − X)``, from its cycles.

    From zero to zero or to the limit the path is a sequential plan: event n signals at ``t <= n k − h``, and
    once ``n k`` has passed with fewer than n events, the next event is sure to bring zero. Run length =
    events of a cycle / chance that it signals (Page 1954).
    """
    n = np.arange(1, 250)
    lower, upper = n * reference - limit, n * reference
    lower[-1] = upper[-1]
    cycle = sequential_plan(lower, upper, 1 / mean)
    return (cycle.mean_time / mean + cycle.accept) / cycle.reject


# the last two have limits that are whole multiples of the reference value
@pytest.mark.parametrize(
    ("k", "h", "mean"),
    [
        (0.5, 0.5, 1.0),
        (1.0, 0.8, 1.0),
        (0.7, 4.0, 1.0),
        (0.7, 4.0, 0.5),
        (math.log(2), 4.150505618, 1.0),
        (0.5, 3.0, 1.0),
        (0.5, 3.0, 0.5),
    ],
)
def test_cusum_run_lengths_from_their_cycles(k: float, h: float, mean: float) -> None:
    assert cusum_by_cycles(k, h, mean) == pytest.approx(
        gap_cusum_run_length(k, h, "worse", mean_gap=mean), rel=1e-8
    )


def test_times_scale_with_the_rate() -> None:
    slow = time_to_signal(np.array([0.0, 1.0, 4.0, 9.0]) * 10, 90.0, rate=0.1)
    fast = time_to_signal([0.0, 1.0, 4.0, 9.0], 9.0)
    assert slow.probability == pytest.approx(fast.probability, rel=1e-12)
    assert slow.time_if_signal == pytest.approx(10 * fast.time_if_signal, rel=1e-12)


@pytest.mark.parametrize("bad", [[], [2.0, 1.0], [math.nan], [[1.0]]])
def test_what_is_no_boundary_is_refused(bad: list[float]) -> None:
    with pytest.raises(ValueError, match="boundaries must be"):
        crossing_probability(bad, 1.0)


@pytest.mark.parametrize(
    ("reject", "accept"), [([1.0, 2.0], [1.0]), ([0.0, 1.0], [1.0, 2.0]), ([0.0, 1.0], [0.0, 1.0])]
)
def test_an_open_plan_is_refused(reject: list[float], accept: list[float]) -> None:
    with pytest.raises(ValueError, match="meet at a finite time"):
        sequential_plan(reject, accept)
