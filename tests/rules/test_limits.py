"""Gap and count limits: round trips, neighbours, and the split that treats both directions alike."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from rules.discrete_limits import (
    RandomisedLimits,
    count_limits_randomised,
    unit_gap_limits,
    unit_gap_limits_randomised,
)
from rules.limits import count_limits, count_tails, gap_limits, gap_limits_unbiased, gap_tails

TAIL = st.floats(1e-9, 0.4)
BASE = st.one_of(st.just(math.inf), st.floats(2.0, 500.0))


@given(low=TAIL, high=TAIL, base=BASE, gaps=st.integers(1, 6))
def test_a_gap_at_its_limit_has_the_limits_probability(
    low: float, high: float, base: float, gaps: int
) -> None:
    limits = gap_limits(low, high, base, gaps=gaps)
    assert gap_tails(limits.low, base, gaps=gaps).at_most == pytest.approx(low, rel=1e-9)
    assert gap_tails(limits.high, base, gaps=gaps).at_least == pytest.approx(high, rel=1e-9)


@given(gap=st.floats(0.0, 60.0), base=BASE, gaps=st.integers(1, 6))
def test_the_two_tails_of_a_gap_add_to_one(gap: float, base: float, gaps: int) -> None:
    tails = gap_tails(gap, base, gaps=gaps)
    assert tails.at_most + tails.at_least == pytest.approx(1.0, abs=1e-12)


def test_predictive_limits_narrow_to_those_of_a_known_mean() -> None:
    highs = [gap_limits(0.001, 0.001, base).high for base in (4, 8, 16, 64, 1_000, 1e7, math.inf)]
    assert all(b < a for a, b in pairwise(highs))
    assert highs[-2] == pytest.approx(highs[-1], rel=1e-5)


def test_one_gap_and_several_are_one_formula() -> None:
    # law: the closed form for one gap is the F point that serves for several
    for tail in (1e-6, 0.00135, 0.2):
        closed = gap_limits(tail, tail, 12)
        assert closed.high == pytest.approx(stats.f.isf(tail, 2, 24), rel=1e-9)
        assert closed.low == pytest.approx(stats.f.ppf(tail, 2, 24), rel=1e-9)


def test_next_gap_passes_its_predictive_limits_as_often_as_said() -> None:
    # independent: seeded simulation of baseline and next gap, within four standard errors
    rng = np.random.default_rng(20261202)
    n = 200_000
    ratio = rng.exponential(size=n) / (rng.gamma(7, size=n) / 7)
    limits = gap_limits(0.02, 0.05, 7)
    for seen, wanted in ((np.mean(ratio < limits.low), 0.02), (np.mean(ratio > limits.high), 0.05)):
        assert abs(seen - wanted) < 4 * math.sqrt(wanted * (1 - wanted) / n)


@given(alpha=st.floats(1e-5, 0.3), gaps=st.integers(1, 8))
def test_unbiased_split_makes_the_derivative_of_the_signal_probability_zero(alpha: float, gaps: int) -> None:
    limits = gap_limits_unbiased(alpha, gaps=gaps)
    assert limits.tail_low + limits.tail_high == pytest.approx(alpha, rel=1e-12)

    def density(x: float) -> float:
        return math.exp(gaps * math.log(x) - x)

    assert density(limits.low) == pytest.approx(density(limits.high), rel=1e-7)
    # and so any other rate signals sooner

    def share(rate: float) -> float:
        return (
            gap_tails(limits.low * rate, gaps=gaps).at_most
            + gap_tails(limits.high * rate, gaps=gaps).at_least
        )

    assert share(1.0) < min(share(0.97), share(1.03))


@given(
    exposure=st.floats(0.05, 60.0),
    base=st.one_of(st.just(math.inf), st.integers(3, 200).map(float)),
    low=st.floats(1e-6, 0.2),
    high=st.floats(1e-6, 0.2),
    ended_by=st.sampled_from(["time", "event"]),
)
def test_count_limits_are_the_first_counts_so_improbable(
    exposure: float, base: float, low: float, high: float, ended_by: str
) -> None:
    base_exposure = 1.0 if math.isinf(base) else base
    limits = count_limits(low, high, exposure, base, base_exposure, ended_by=ended_by)

    def tails(count: int) -> tuple[float, float]:
        found = count_tails(count, exposure, base, base_exposure, ended_by=ended_by)
        return found.at_most, found.at_least

    assert limits.tail_high == tails(limits.high)[1] <= high < tails(limits.high - 1)[1]
    assert tails(limits.low + 1)[0] > low
    if limits.low >= 0:
        assert limits.tail_low == tails(limits.low)[0] <= low
    else:
        assert limits.tail_low == 0.0


@pytest.mark.parametrize(
    ("count", "exposure", "m", "t"), [(0, 2.0, 5, 4.0), (3, 2.0, 5, 4.0), (9, 1.5, 12, 10.0)]
)
def test_predicted_counts_are_negative_binomial(count: int, exposure: float, m: int, t: float) -> None:
    # independent: scipy.stats.nbinom
    law = stats.nbinom(m, t / (t + exposure))
    tails = count_tails(count, exposure, m, t)
    assert tails.at_most == pytest.approx(law.cdf(count), rel=1e-10)
    assert tails.at_least == pytest.approx(law.sf(count - 1), rel=1e-10)


def test_predicted_counts_turn_poisson_as_the_baseline_grows() -> None:
    for count in (0, 3, 11):
        known, estimated = count_tails(count, 4.0), count_tails(count, 4.0, 1e9, 1e9)
        assert estimated.at_most == pytest.approx(known.at_most, rel=1e-6)
        assert estimated.at_least == pytest.approx(known.at_least, rel=1e-6)


def check_both_equations(limits: RandomisedLimits, pmf: np.ndarray, alpha: float) -> None:
    counts = np.arange(pmf.size)
    signal = ((counts < limits.low) | (counts > limits.high)).astype(float)
    signal[limits.low] += limits.chance_low
    signal[limits.high] += limits.chance_high
    assert 0 <= limits.chance_low <= 1
    assert 0 <= limits.chance_high <= 1
    assert float((signal * pmf).sum()) == pytest.approx(alpha, rel=1e-8)
    assert float((signal * counts * pmf).sum()) == pytest.approx(
        alpha * float((counts * pmf).sum()), rel=1e-7
    )


@pytest.mark.parametrize("mean", [0.3, 2.0, 8.0, 19.5, 150.0])
@pytest.mark.parametrize("alpha", [0.0005, 0.0027, 0.05])
def test_randomised_count_limits_meet_both_equations(mean: float, alpha: float) -> None:
    # independent: plain sums over scipy.stats.poisson
    pmf = stats.poisson.pmf(np.arange(int(mean + 40 * math.sqrt(mean) + 60)), mean)
    check_both_equations(count_limits_randomised(mean, alpha), pmf, alpha)


@pytest.mark.parametrize("fraction", [0.0007, 0.01, 0.2, 0.6])
@pytest.mark.parametrize("alpha", [0.0005, 0.0027, 0.05])
def test_randomised_unit_gap_limits_meet_both_equations(fraction: float, alpha: float) -> None:
    # independent: plain sums over scipy.stats.geom, which counts from 1
    pmf = stats.geom.pmf(np.arange(int(60 / fraction) + 60) + 1, fraction)
    check_both_equations(unit_gap_limits_randomised(fraction, alpha), pmf, alpha)


def test_unit_gap_limits_for_use_count_the_failing_unit_and_draw_no_lots() -> None:
    drawn, plain = unit_gap_limits_randomised(0.001, 0.0027), unit_gap_limits(0.001, 0.0027)
    assert (plain.low, plain.high) == (drawn.low + 1, drawn.high + 1)
    assert (plain.chance_low, plain.chance_high) == (0.0, 0.0)
    law = stats.geom(0.001)
    assert plain.tail_low == pytest.approx(law.cdf(plain.low - 1), rel=1e-10)
    assert plain.tail_high == pytest.approx(law.sf(plain.high), rel=1e-10)
    assert plain.tail_low + plain.tail_high <= 0.0027


def test_rare_unit_gaps_have_the_limits_of_exponential_ones() -> None:
    # law: p · geometric tends to exponential
    limits, gap = unit_gap_limits(1e-6, 0.0027), gap_limits_unbiased(0.0027)
    assert limits.low * 1e-6 == pytest.approx(gap.low, rel=2e-3)
    assert limits.high * 1e-6 == pytest.approx(gap.high, rel=1e-5)


def test_impossible_arguments_are_named() -> None:
    with pytest.raises(ValueError, match=r"tail_low must lie between 0 and 1, not 0\.0"):
        gap_limits(0.0, 0.1)
    with pytest.raises(ValueError, match="gaps must be 1 or more"):
        gap_limits(0.1, 0.1, gaps=0)
    with pytest.raises(ValueError, match="exposure must be above 0"):
        count_tails(1, 0.0)
    with pytest.raises(ValueError, match="too few events"):
        count_limits(0.1, 1e-12, 1.0, 1, 1e-15)
