"""The shift's start and size against plain numerical integration, and in simple cases."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rules.changepoint import locate_shift
from rules.model import Timeline


def plain_posterior(events, *, now, m, t, pooled):
    """Independent: brute-force integration over a fine grid of starts and ratios."""
    starts = np.linspace(0.0, now, 4001)[:-1] + now / 8000
    ratios = np.exp(np.linspace(math.log(0.85), math.log(30.0), 400))
    out = np.zeros((starts.size, ratios.size))
    for i, s in enumerate(starts):
        n = float(np.sum(np.asarray(events) >= s))
        mm = m + (len(events) - n if pooled else 0.0)
        tt = t + (s if pooled else 0.0)
        out[i] = n * np.log(ratios) - (n + mm) * np.log((tt + ratios * (now - s)) / (tt + now - s))
    out -= 0.7 * np.log(ratios)  # small changes are taken as the likelier ones
    weight = np.exp(out - out.max())
    by_start = np.cumsum(weight.sum(axis=1)) / weight.sum()
    by_ratio = np.cumsum(weight.sum(axis=0)) / weight.sum()
    return np.interp([0.0125, 0.5, 0.9875], by_start, starts), np.interp(
        [0.025, 0.5, 0.975], by_ratio, ratios
    )


@pytest.mark.parametrize("pooled", [False, True])
def test_start_and_ratio_agree_with_brute_force(pooled):
    events = [30.0, 75.0, 118.0, 150.0, 158.0, 166.0, 171.0, 183.0, 190.0]
    found = locate_shift(
        np.array(events),
        begin=0.0,
        now=190.0,
        base_events=12,
        base_exposure=480.0,
        direction="worse",
        pooled=pooled,
    )
    start, ratio = plain_posterior(events, now=190.0, m=12, t=480.0, pooled=pooled)
    np.testing.assert_allclose([found.start_low, found.start, found.start_high], start, atol=2.5)
    np.testing.assert_allclose([found.ratio_low, found.ratio, found.ratio_high], ratio, rtol=0.03)


def test_an_improvement_is_placed_where_the_events_stop():
    events = np.arange(40.0, 801.0, 40.0)
    found = locate_shift(
        events, begin=0.0, now=1400.0, base_events=12, base_exposure=480.0, direction="better", pooled=True
    )
    assert 700 <= found.start <= 900
    assert found.ratio_high < 1.0


def test_a_timeline_goes_there_and_back():
    """Law: position -> time -> position, in both kinds of arrival."""
    even = Timeline(
        np.array([0.0, 10.0, 10.0, 30.0]), np.array([0, 100, 200, 400], dtype=np.int64), stepped=False
    )
    for position in (0.0, 5.0, 10.0, 17.0, 30.0):
        assert even.position_at(even.time_at(position)) == pytest.approx(position, abs=0.1)
    stepped = Timeline(np.array([1.0, 2.0, 3.0]), np.array([5, 8, 9], dtype=np.int64), stepped=True)
    assert [stepped.time_at(p) for p in (0.5, 1.0, 1.5, 3.0, 9.0)] == [5, 5, 8, 9, 9]
    assert [stepped.position_at(t) for t in (4, 5, 7, 8, 100)] == [0.0, 1.0, 1.0, 2.0, 3.0]
