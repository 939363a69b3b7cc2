"""Before the first baseline is complete, and what a recognised scatter changes."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from rules.assess import assess
from rules.evidence import drifted
from rules.model import BaselinePlan, Plan
from tests.rules.test_assess import DAY, FIRST12, YEAR, make_steps


def test_gross_deterioration_is_told_while_the_baseline_is_still_being_learnt():
    result = assess(make_steps([40.0] * 6 + [0.4] * 5, 400.0), FIRST12, [], 10**18)
    assert result.standing == "worse"
    assert result.baseline.events <= 6
    assert [w.code for w in result.baseline.warnings][:1] == ["too-few"]


def test_an_ordinary_start_stays_learning_and_says_how_far_it_is():
    result = assess(make_steps([40.0, 70.0, 15.0, 33.0, 52.0, 8.0, 41.0], 400.0), FIRST12, [], 10**18)
    assert (result.standing, result.baseline, result.signals) == ("learning", None, ())
    assert [c.text for c in result.cautions] == ["7 of the 12 events that the baseline needs are in."]


def test_improvement_is_no_matter_of_the_guard():
    result = assess(make_steps([4.0] * 6 + [400.0] * 3, 400.0), FIRST12, [], 10**18)
    assert result.standing == "learning"


def test_a_stream_watched_for_better_only_has_no_guard():
    plan = replace(FIRST12, watch=("better",))
    assert assess(make_steps([40.0] * 6 + [0.4] * 5, 400.0), plan, [], 10**18).standing == "learning"


def test_what_the_guard_raised_is_settled_like_any_other_and_the_baseline_grows_on():
    gaps = [40.0] * 6 + [0.4] * 5 + [40.0] * 30
    plan = replace(FIRST12, settle_after_us=30 * DAY)
    result = assess(make_steps(gaps, 400.0), plan, [], 10**18)
    assert result.signals[0].direction == "worse"
    assert result.baseline.events > 20


def test_the_guard_never_touches_the_baseline_of_a_stream_that_was_quiet_while_learning():
    gaps = np.random.default_rng(3).exponential(40.0, 60)
    full = assess(make_steps(gaps, 400.0), FIRST12, [], 10**18)
    unguarded = assess(make_steps(gaps, 400.0), replace(FIRST12, watch=("better",)), [], 10**18)
    assert full.baselines[0].start_us == unguarded.baselines[0].start_us
    assert full.baseline.events == unguarded.baseline.events


def test_a_baseline_of_counts_waits_for_enough_records():
    counts = np.random.default_rng(1).poisson(28.0, 11)
    steps = make_steps(np.ones(11), 12.0, counts=counts)
    assert assess(steps, FIRST12, [], 10**18).standing == "learning"


@pytest.mark.parametrize("index", [3.0, 6.0])
def test_clustered_counts_are_said_to_be_and_stay_quiet(index):
    """Six years of monthly counts that vary several times as much as chance: plain limits would shout."""
    rng = np.random.default_rng(2)
    plan = Plan(BaselinePlan(first_events=12), 0.1, settle_after_us=30 * DAY)
    alerts, told = 0, 0
    for _ in range(40):
        counts = rng.negative_binomial(20.0 / (index - 1), 1 / index, 90)
        result = assess(make_steps(np.ones(90), 12.0, counts=counts), plan, [], 10**18)
        alerts += len(result.signals)
        told += any(c.code == "over-dispersed" for c in result.cautions)
    assert told >= 36
    assert alerts <= 40 * 7.5 * 0.1 * 1.6


def test_a_real_shift_of_a_clustered_stream_is_still_seen():
    rng = np.random.default_rng(5)
    mean = np.r_[np.full(60, 20.0), np.full(30, 60.0)]
    counts = rng.negative_binomial(mean / 3.0, 1 / 4.0)
    result = assess(
        make_steps(np.ones(90), 12.0, counts=counts), replace(FIRST12, false_alerts_per_year=0.1), [], 10**18
    )
    assert result.standing == "worse"
    assert result.signals[-1].began.earliest_us <= 60 / 12.0 * YEAR <= result.signals[-1].began.latest_us


def test_figures_of_a_scattered_baseline_are_wider():
    rng = np.random.default_rng(6)
    counts = rng.negative_binomial(20.0 / 3.0, 1 / 4.0, 60)
    result = assess(make_steps(np.ones(60), 12.0, counts=counts), FIRST12, [], 10**18)
    base = result.baseline
    assert base.index > 2
    plain = assess(make_steps(np.ones(60), 12.0, counts=np.full(60, 20)), FIRST12, [], 10**18).baseline
    assert (base.high - base.low) / base.rate > 1.3 * (plain.high - plain.low) / plain.rate * (
        plain.events / base.events
    ) ** 0.5


def test_a_stream_that_moved_away_from_its_first_events_is_said_to_have_drifted():
    """Reference: the conditional 99 % interval of 40 events in 1000 against 20 in 1000, by scipy's beta."""
    from scipy.stats import beta

    low = beta.ppf(0.005, 60, 21)
    note = drifted(20.0, 1000.0, 60.0, 1000.0, 1.0)
    assert note.code == "drift"
    assert f"{low / (1 - low):.2f} to" in note.text
    assert drifted(20.0, 1000.0, 25.0, 1000.0, 1.0) is None
    # the same figures of events that come in threes say nothing
    assert drifted(20.0, 1000.0, 60.0, 1000.0, 3.0) is None


def test_a_steady_stream_is_seldom_said_to_drift():
    rng = np.random.default_rng(2)
    told = []
    for _ in range(80):
        steps = make_steps(rng.exponential(40.0, 90), 400.0)
        told.append("drift" in [c.code for c in assess(steps, FIRST12, [], 10**18).cautions])
    assert np.mean(told) <= 0.05
