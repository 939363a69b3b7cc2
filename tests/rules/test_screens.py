"""Screens of a baseline: their levels on steady data, their power, and references."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from rules.baseline import screen
from rules.screens import anderson_darling, change_point, laplace

DRAWS = 400


@pytest.mark.parametrize("n", [12, 30, 60])
def test_each_gap_screen_rejects_steady_data_as_often_as_said(n):
    rng = np.random.default_rng(n)
    gaps = rng.exponential(30.0, (DRAWS, n))
    rejected = {
        "laplace": np.mean([laplace(np.cumsum(g)).p < 0.05 for g in gaps]),
        "change": np.mean([change_point(np.cumsum(g)).p < 0.05 for g in gaps]),
        "exponential": np.mean([anderson_darling(g).p < 0.05 for g in gaps]),
    }
    # 0.05 within three standard errors of 400 draws
    assert all(0.017 <= share <= 0.083 for share in rejected.values()), rejected


def test_all_warnings_together_are_rare_on_steady_data():
    rng = np.random.default_rng(8)
    gaps = [screen(rng.exponential(30.0, 40), np.ones(40, dtype=np.int64), located=True, counted=False, known=False) for _ in range(DRAWS)]  # fmt: skip
    counts = [screen(np.ones(40), rng.poisson(3.0, 40), located=False, counted=True, known=False) for _ in range(DRAWS)]  # fmt: skip
    assert np.mean([bool(w) for w in gaps]) <= 0.07
    assert np.mean([bool(w) for w in counts]) <= 0.07


def test_anderson_darling_agrees_with_the_reference_statistic_and_its_critical_values():
    """Reference: scipy.stats.anderson(dist="expon"); Stephens (1974): 1.321 at 5 %, 1.959 at 1 %, over 1 + 0.6/n."""
    rng = np.random.default_rng(3)
    for n in (10, 40):
        x = rng.weibull(1.5, n)
        reference = stats.anderson(x, "expon", method="interpolate")
        assert anderson_darling(x).statistic == pytest.approx(reference.statistic, rel=1e-9)
        five, one = 1.321 / (1 + 0.6 / n), 1.959 / (1 + 0.6 / n)
        null = np.array([anderson_darling(rng.exponential(1.0, n)).statistic for _ in range(2000)])
        assert np.mean(null > five) == pytest.approx(0.05, abs=0.017)
        assert np.mean(null > one) == pytest.approx(0.01, abs=0.009)


def test_a_change_inside_the_baseline_is_found_where_it_is():
    rng = np.random.default_rng(4)
    gaps = np.concatenate([rng.exponential(40.0, 30), rng.exponential(8.0, 20)])
    found = change_point(np.cumsum(gaps))
    assert found.p < 0.01
    assert abs(found.after - 30) <= 6
    assert found.rate_after > 2 * found.rate_before
    texts = {
        w.code: w.text
        for w in screen(gaps, np.ones(50, dtype=np.int64), located=True, counted=False, known=False)
    }
    assert {"trend", "shift"} <= set(texts)
    assert "each look like one level" in texts["shift"]


def test_scattered_counts_do_not_read_as_a_trend():
    rng = np.random.default_rng(7)
    told = [
        screen(
            np.ones(40),
            rng.negative_binomial(2.0, 0.25, 40),
            located=False,
            counted=True,
            known=False,
            scattered=True,
        )
        for _ in range(200)
    ]
    assert np.mean([any(w.code in {"trend", "shift"} for w in ws) for ws in told]) <= 0.08


def test_too_few_events_say_nothing_but_that():
    assert change_point(np.array([1.0, 2.0, 4.0])) is None
    assert anderson_darling(np.array([1.0, 2.0])).p == 1.0
    few = screen(
        np.array([3.0, 4.0, 9.0]), np.ones(3, dtype=np.int64), located=True, counted=False, known=False
    )
    assert [w.code for w in few] == ["too-few"]
