"""Exact tails against extended precision, scipy's distributions and the published special cases."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from rules.tails import exposure_beyond, exposure_within, log_beyond, log_within

mpmath.mp.dps = 40
KNOWN = (math.inf, 1.0)
RS = [1.0, 2.0, 3.0, 7.0]


@pytest.mark.parametrize("index", [1.0, 2.0, 3.7])
@pytest.mark.parametrize("r", RS)
@pytest.mark.parametrize("x", [0.003, 0.2, 1.0, 4.0, 30.0])
def test_known_rate_against_extended_precision(r, x, index):
    """Reference: mpmath's regularised incomplete gamma function, 40 digits."""
    within = mpmath.gammainc(r / index, 0, x / index, regularized=True)
    beyond = mpmath.gammainc(r / index, x / index, mpmath.inf, regularized=True)
    assert log_within(r, x, *KNOWN, index) == pytest.approx(float(mpmath.log(within)), rel=1e-12, abs=1e-12)
    assert log_beyond(r, x, *KNOWN, index) == pytest.approx(float(mpmath.log(beyond)), rel=1e-12, abs=1e-12)


@pytest.mark.parametrize("index", [1.0, 2.0, 3.7])
@pytest.mark.parametrize("r", RS)
@pytest.mark.parametrize(("m", "t"), [(5, 5.0), (12, 700.0), (30, 4.0)])
@pytest.mark.parametrize("share", [0.01, 0.5, 0.9])
def test_estimated_rate_against_extended_precision(r, m, t, share, index):
    """Reference: mpmath's regularised incomplete beta function, 40 digits."""
    x = t * share / (1.0 - share)
    z = mpmath.mpf(x) / (mpmath.mpf(x) + mpmath.mpf(t))
    within = mpmath.betainc(r / index, m / index, 0, z, regularized=True)
    beyond = mpmath.betainc(r / index, m / index, z, 1, regularized=True)
    assert log_within(r, x, m, t, index) == pytest.approx(float(mpmath.log(within)), rel=1e-11, abs=1e-11)
    assert log_beyond(r, x, m, t, index) == pytest.approx(float(mpmath.log(beyond)), rel=1e-11, abs=1e-11)


@pytest.mark.parametrize("m", [5, 20, 100])
def test_the_next_gap_and_sums_follow_the_f_law(m):
    """gap / mean ~ F(2, 2m); sums of r gaps r F(2r, 2m). Reference: scipy.stats.f."""
    for r in RS:
        for q in (0.1, 1.0, 3.0):
            want = float(stats.f.sf(q / r, 2 * r, 2 * m))
            assert math.exp(log_beyond(r, q * 50.0, m, m * 50.0)) == pytest.approx(want, rel=1e-10)


@pytest.mark.parametrize("m", [4, 15])
def test_counts_follow_the_predictive_negative_binomial(m):
    """P(N >= c) = P(c-th event within E). Reference: scipy.stats.nbinom(m, T / (T + E))."""
    t, e = 90.0, 40.0
    for c in range(1, 12):
        want = float(stats.nbinom.sf(c - 1, m, t / (t + e)))
        assert math.exp(log_within(c, e, m, t)) == pytest.approx(want, rel=1e-10)


@pytest.mark.parametrize(
    ("r", "low", "middle", "high"),
    [(1, 0.00135091, 0.69314718, 6.60765069), (2, 0.05288356, 1.67834699, 8.90020628),
     (3, 0.21168428, 2.67406031, 10.86952473), (4, 0.46529621, 3.67206075, 12.68046987)],
)  # fmt: skip
def test_limits_for_sums_of_gaps(r, low, middle, high):
    """Time-between-events chart for r events, alpha 0.0027 (Xie, Goh & Ranjan 2002; computed, checks.md 4)."""
    assert exposure_within(r, math.log(0.00135), *KNOWN) == pytest.approx(low, abs=5e-9)
    assert exposure_within(r, math.log(0.5), *KNOWN) == pytest.approx(middle, abs=5e-9)
    assert exposure_beyond(r, math.log(0.00135), *KNOWN) == pytest.approx(high, abs=5e-9)


@pytest.mark.parametrize(("m", "upper"), [(10, 9.362731), (20, 7.830006), (30, 7.391836), (100, 6.830845)])
def test_predictive_upper_limit_of_a_gap(m, upper):
    """m ((a/2)^(-1/m) - 1), alpha 0.0027 (computed, checks.md 4)."""
    assert exposure_beyond(1, math.log(0.00135), m, float(m)) == pytest.approx(upper, abs=5e-7)


@pytest.mark.parametrize(("r", "m", "low", "high"), [(2, 20, 0.05167598, 10.88902696), (3, 30, 0.20563216, 12.61813406)])  # fmt: skip
def test_predictive_limits_of_a_sum(r, m, low, high):
    """r F(2r, 2m), alpha 0.0027 (computed, checks.md 4)."""
    assert exposure_within(r, math.log(0.00135), m, float(m)) == pytest.approx(low, abs=5e-9)
    assert exposure_beyond(r, math.log(0.00135), m, float(m)) == pytest.approx(high, abs=5e-8)


@given(
    st.sampled_from([1.0, 3.0]), st.floats(0.001, 0.999), st.sampled_from([math.inf, 4.0, 30.0]),
    st.floats(0.01, 1000.0), st.floats(1.0, 6.0),
)  # fmt: skip
def test_limits_are_inverses_and_scale_with_exposure(r, tail, m, scale, index):
    t = scale if math.isinf(m) else m * scale
    unit = 1.0 if math.isinf(m) else m
    log_tail = math.log(tail)
    for inverse, law in ((exposure_beyond, log_beyond), (exposure_within, log_within)):
        x = inverse(r, log_tail, m, t, index)
        assert law(r, x, m, t, index) == pytest.approx(log_tail, rel=1e-6, abs=1e-9)
        assert x == pytest.approx(scale * inverse(r, log_tail, m, unit, index), rel=1e-9)


def test_both_tails_are_the_whole():
    x = np.linspace(0.1, 9, 20)
    for m, t in (KNOWN, (8, 8.0)):
        both = [math.exp(log_within(2, v, m, t, 1.5)) + math.exp(log_beyond(2, v, m, t, 1.5)) for v in x]
        assert both == pytest.approx([1.0] * 20, abs=1e-12)


def test_nothing_comes_within_nothing():
    assert log_within(1, 0.0, 5, 5.0) < -700
    assert log_beyond(1, 0.0, 5, 5.0) == 0.0
