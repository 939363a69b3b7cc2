"""Intervals: they invert the tests they belong to, and obey the laws of scale and order."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from rules.intervals import (
    compare_rates,
    mean_gap_interval,
    mean_interval,
    rate_interval,
    share_interval,
)

EVENTS = st.integers(0, 400)
CONFIDENCE = st.floats(0.5, 0.999)


@given(events=EVENTS, confidence=CONFIDENCE)
def test_mean_limits_invert_the_poisson_tails(events: int, confidence: float) -> None:
    # independent: scipy.stats.poisson
    limits = mean_interval(events, confidence=confidence)
    tail = (1 - confidence) / 2
    assert stats.poisson.cdf(events, limits.high) == pytest.approx(tail, rel=1e-8)
    if events:
        assert stats.poisson.sf(events - 1, limits.low) == pytest.approx(tail, rel=1e-8)


@given(events=st.integers(1, 400), confidence=CONFIDENCE, exposure=st.floats(1e-3, 1e6))
def test_limits_follow_the_unit_of_exposure_and_the_order_of_counts(
    events: int, confidence: float, exposure: float
) -> None:
    rate = rate_interval(events, exposure, confidence=confidence)
    gap = mean_gap_interval(events, exposure, confidence=confidence)
    assert rate.low < events / exposure < rate.high
    assert (gap.low, gap.high) == pytest.approx((1 / rate.high, 1 / rate.low), rel=1e-12)
    more = rate_interval(events + 1, exposure, confidence=confidence)
    assert more.low > rate.low
    assert more.high > rate.high
    wider = rate_interval(events, exposure, confidence=(1 + confidence) / 2)
    assert wider.low < rate.low
    assert wider.high > rate.high


@given(events=st.integers(1, 400))
def test_a_stretch_ended_by_its_last_event_has_the_same_lower_and_a_smaller_upper_limit(events: int) -> None:
    time, event = mean_interval(events), mean_interval(events, ended_by="event")
    assert event.low == time.low
    assert event.high < time.high
    # law: 2 λ T is chi-square with 2n degrees of freedom
    assert event.high == pytest.approx(stats.chi2.ppf(0.975, 2 * events) / 2, rel=1e-9)


@given(hits=st.integers(0, 60), misses=st.integers(0, 60), confidence=CONFIDENCE)
def test_share_limits_mirror(hits: int, misses: int, confidence: float) -> None:
    if hits + misses:
        share = share_interval(hits, hits + misses, confidence=confidence)
        other = share_interval(misses, hits + misses, confidence=confidence)
        assert share.low == pytest.approx(1 - other.high, abs=1e-12)
        assert share.low <= hits / (hits + misses) <= share.high


@given(
    events=st.integers(0, 80),
    other=st.integers(0, 80),
    exposure=st.floats(0.01, 1e4),
    ratio=st.floats(0.2, 5.0),
)
def test_changing_sides_turns_the_comparison_round(
    events: int, other: int, exposure: float, ratio: float
) -> None:
    one = compare_rates(events, exposure, other, 10.0, ratio=ratio)
    two = compare_rates(other, 10.0, events, exposure, ratio=1 / ratio)
    if events + other == 0:
        assert math.isnan(one.ratio)
        return
    assert one.p_greater == pytest.approx(two.p_less, rel=1e-7)
    assert one.p_less == pytest.approx(two.p_greater, rel=1e-7)
    assert one.p_central == pytest.approx(two.p_central, rel=1e-7)
    assert one.low == pytest.approx(1 / two.high if two.high else math.inf, rel=1e-9)
    assert one.high == pytest.approx(1 / two.low if two.low else math.inf, rel=1e-9)


@given(events=st.integers(1, 80), other=st.integers(1, 80), exposure=st.floats(0.01, 1e4))
def test_each_limit_of_the_ratio_has_its_tail_probability(events: int, other: int, exposure: float) -> None:
    found = compare_rates(events, exposure, other, 10.0, confidence=0.9)
    at_low = compare_rates(events, exposure, other, 10.0, ratio=found.low)
    at_high = compare_rates(events, exposure, other, 10.0, ratio=found.high)
    assert at_low.p_greater == pytest.approx(0.05, rel=1e-8)
    assert at_high.p_less == pytest.approx(0.05, rel=1e-8)


@pytest.mark.parametrize(
    ("events", "other", "share"), [(7, 3, 0.4), (0, 6, 0.3), (5, 5, 0.5), (40, 61, 0.35)]
)
def test_minimum_likelihood_p_is_the_binomial_test(events: int, other: int, share: float) -> None:
    # independent: scipy.stats.binomtest
    found = compare_rates(events, share, other, 1 - share)
    wanted = stats.binomtest(events, events + other, share)
    assert found.p_minimum_likelihood == pytest.approx(wanted.pvalue, rel=1e-9)
    assert found.p_greater == pytest.approx(
        stats.binomtest(events, events + other, share, "greater").pvalue, rel=1e-9
    )


def test_no_events_say_nothing_and_one_side_without_says_one_limit() -> None:
    nothing = compare_rates(0, 5.0, 0, 5.0)
    assert (nothing.low, nothing.high, nothing.p_central) == (0.0, math.inf, 1.0)
    only = compare_rates(4, 5.0, 0, 5.0)
    assert only.ratio == math.inf
    assert only.high == math.inf
    assert only.low > 0.5
    assert mean_gap_interval(0, 10.0).high == math.inf


def test_impossible_arguments_are_named() -> None:
    with pytest.raises(ValueError, match="events must be 1 or more, not 0"):
        mean_interval(0, ended_by="event")
    with pytest.raises(ValueError, match=r"confidence must lie between 0 and 1, not 1\.5"):
        mean_interval(3, confidence=1.5)
    with pytest.raises(ValueError, match="exposure must be above 0"):
        rate_interval(3, -1.0)
    with pytest.raises(ValueError, match="trials must be 5 or more"):
        share_interval(5, 4)
