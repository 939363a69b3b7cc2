"""The engine against its vectorised twin, a plain re-statement of its words, and laws."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from rules import keeping, protocol, simulate
from rules.assess import assess
from rules.calibration import Calibration
from rules.dispersion import Dispersion
from rules.model import BaselinePlan, Plan, Settled, Steps, Timeline

DAY = 86_400_000_000
YEAR = 365.25 * DAY


def make_steps(gaps, per_year, *, counts=None, open_gap=0.0):
    """Steps of a stream that produces evenly; ``counts`` None means one event at the end of each."""
    gaps = np.asarray(gaps, dtype=float)
    located = counts is None
    counts = np.ones(gaps.size, dtype=np.int64) if located else np.asarray(counts, dtype=np.int64)
    ends = np.cumsum(gaps)
    times = (ends / per_year * YEAR).astype(np.int64)
    alive = float(ends[-1] if ends.size else 0.0) + open_gap
    alive_us = int(alive / per_year * YEAR)
    knots = Timeline(np.array([0.0, alive]), np.array([0, alive_us], dtype=np.int64), stepped=False)
    return Steps(
        gaps,
        counts,
        times,
        np.arange(gaps.size),
        open_gap,
        alive_us,
        0,
        knots,
        located=located,
        per_record=not located,
    )


FIRST12 = Plan(BaselinePlan(first_events=12), false_alerts_per_year=0.05)


@pytest.mark.parametrize(
    ("base", "step", "yearly", "grow", "index"),
    [(math.inf, 0.0, 10.0, 60.0, 1.0), (12, 0.0, 10.0, 60.0, 1.0), (12, 0.0, 10.0, 0.0, 1.0), (5, 0.0, 30.0, 60.0, 1.0),
     (12, 2.0, 30.0, 60.0, 1.0), (math.inf, 0.5, 10.0, 60.0, 1.0), (12, 8.0, 100.0, 60.0, 1.0), (12, 0.0, 20.0, 60.0, 3.0),
     (12, 4.0, 60.0, 60.0, 2.0), (math.inf, 1.0, 30.0, 60.0, 4.0)],
)  # fmt: skip
def test_engine_and_simulation_raise_the_same_first_alert(monkeypatch, base, step, yearly, grow, index):
    """Independent: the protocol is written twice, plain and vectorised."""
    monkeypatch.setattr(Calibration, "log_kappa", lambda *_a, **_k: 0.0)
    for name in ("gap_dispersion", "count_dispersion"):
        monkeypatch.setattr(keeping, name, lambda *_a: Dispersion(index, 9.0))
    budget, paths, horizon = 0.2, 120, 6 * yearly
    streams = simulate.draw_streams(
        np.random.default_rng(11), paths, base_events=base, horizon=horizon, step=step, index=index
    )
    levels = simulate.log_level_functions()
    mute = yearly * protocol.SETTLE_YEARS
    _, alerts = simulate.walk(
        streams, levels, horizon=horizon, grow_to=grow, log_allowed=math.log(yearly / budget), mute=mute
    )
    assert len(alerts) > 20
    for i in range(paths):
        gaps, counts = streams.exposure[i], streams.counts[i]
        keep = int(np.searchsorted(np.cumsum(gaps), horizon, side="right"))
        gaps, counts = gaps[:keep], counts[:keep]
        plan = BaselinePlan(rate=1.0)
        if not streams.known:
            m, t = int(streams.base_events[i]), streams.base_exposure[i]
            plan = BaselinePlan(first_events=m, grow_to=int(grow))
            before = (
                (np.full(m, t / m), np.ones(m))
                if step == 0
                else (np.full(12, t / 12), np.r_[np.zeros(11), m])
            )
            gaps, counts = np.concatenate([before[0], gaps]), np.concatenate([before[1], counts])
        left = horizon - float(np.sum(streams.exposure[i][:keep])) if step == 0 else 0.0
        steps = make_steps(gaps, yearly, counts=None if step == 0 else counts, open_gap=left)
        found = assess(steps, Plan(plan, budget), [], steps.open_time_us + 1).signals
        mine = alerts[alerts[:, 0] == i]
        mine = mine[np.argsort(mine[:, 1], kind="stable")]
        want = [("worse" if mine[0, 2] > 0 else "better")] if len(mine) else []
        assert [s.direction for s in found[:1]] == want


def test_a_mean_gap_falling_to_a_third_is_worse_within_a_few_events():
    gaps = [40.0] * 30 + [13.0] * 20
    result = assess(make_steps(gaps, 400.0), replace(FIRST12, false_alerts_per_year=0.5), [], 10**18)
    assert result.standing == "worse"
    signal = result.signals[0]
    change_us = 30 * 40.0 / 400.0 * YEAR
    assert signal.began.earliest_us <= change_us <= signal.began.latest_us
    after = sum(1 for s in make_steps(gaps, 400.0).time_us if change_us < s <= signal.raised_us)
    assert after <= 8


def test_a_threefold_improvement_is_better_in_the_middle_of_its_open_gap():
    steps = make_steps([40.0] * 30, 400.0, open_gap=600.0)
    result = assess(steps, FIRST12, [], 10**18)
    assert result.standing == "better"
    assert steps.time_us[-1] < result.signals[0].raised_us < steps.open_time_us


def test_without_proof_of_life_a_quiet_stream_stays_steady():
    assert assess(make_steps([40.0] * 30, 400.0, open_gap=0.0), FIRST12, [], 10**18).standing == "steady"


def test_none_in_one_year_and_two_in_the_next_is_no_evidence():
    """Common practice: one event a year on average shows such pairs of years all the time (37 % and 26 %)."""
    ends = np.array([0.6, 1.7, 2.9, 3.5, 4.4, 5.8, 6.2, 7.6, 8.3, 9.7, 10.4, 11.5, 13.3, 13.8])
    steps = make_steps(np.diff(ends, prepend=0.0) * 250, 250.0, open_gap=50.0)
    assert (
        assess(steps, replace(FIRST12, baseline=BaselinePlan(rate=1 / 250.0)), [], 10**18).standing
        == "steady"
    )


def test_settled_as_no_cause_the_rules_start_again_and_the_baseline_takes_the_stretch_in():
    gaps = [40.0] * 20 + [10.0] * 12 + [40.0] * 20
    steps = make_steps(gaps, 400.0)
    first = assess(steps, FIRST12, [], 10**18).signals[0]
    settled = Settled("worse", first.raised_us, first.raised_us + 40 * DAY)
    result = assess(steps, FIRST12, [settled], 10**18)
    assert result.signals[0].settled_us == settled.settled_us
    assert result.standing == "steady"
    kept = assess(steps, FIRST12, [replace(settled, absorb=False)], 10**18)
    assert result.baseline.rate > kept.baseline.rate


def test_an_intended_change_starts_a_new_baseline_at_the_shift():
    gaps = [40.0] * 20 + [10.0] * 60
    steps = make_steps(gaps, 400.0)
    first = assess(steps, FIRST12, [], 10**18).signals[0]
    settled = Settled("worse", first.raised_us, first.raised_us + 5 * DAY, new_baseline=True)
    result = assess(steps, FIRST12, [settled], 10**18)
    assert result.standing == "steady"
    assert result.baseline.source == "after-change"
    assert result.baseline.rate == pytest.approx(0.1, rel=0.15)
    assert len(result.baselines) == 2


def test_events_needed_for_the_first_baseline_are_said_to_be_missing():
    result = assess(make_steps([40.0] * 5, 400.0), FIRST12, [], 10**18)
    assert result.standing == "learning"
    assert result.cautions[0].text == "5 of the 12 events that the baseline needs are in."


def test_an_empty_stream_is_learning():
    assert assess(make_steps([], 1.0), FIRST12, [], 0).standing == "learning"


def test_only_the_watched_direction_alerts():
    steps = make_steps([40.0] * 30 + [10.0] * 20, 400.0)
    assert not assess(steps, replace(FIRST12, watch=("better",)), [], 10**18).signals


def test_rehearsal_settles_each_alert_and_goes_on():
    gaps = [40.0] * 20 + [8.0] * 15 + [40.0] * 20 + [8.0] * 15
    plan = replace(FIRST12, settle_after_us=30 * DAY)
    result = assess(make_steps(gaps, 400.0), plan, [], 10**18)
    assert sum(s.direction == "worse" for s in result.signals) >= 2


@settings(max_examples=40, deadline=None)
@given(
    st.lists(st.floats(0.5, 200.0), min_size=3, max_size=60), st.floats(0.01, 100.0), st.floats(0.0, 500.0)
)
def test_the_unit_of_exposure_changes_nothing(gaps, scale, open_gap):
    """Law: minutes, hours or units in thousands lead to the same signals."""
    plan = Plan(BaselinePlan(first_events=6), 0.1)
    one = assess(make_steps(gaps, 300.0, open_gap=open_gap), plan, [], 10**18)
    other = assess(
        make_steps(np.array(gaps) * scale, 300.0 * scale, open_gap=open_gap * scale), plan, [], 10**18
    )
    assert [s.direction for s in one.signals] == [s.direction for s in other.signals]
    assert one.standing == other.standing
    for a, b in zip(one.signals, other.signals, strict=True):
        assert a.raised_us == pytest.approx(b.raised_us, abs=DAY)
        assert a.recurrence_years == pytest.approx(b.recurrence_years, rel=1e-3)


@settings(max_examples=40, deadline=None)
@given(st.lists(st.floats(0.5, 200.0), min_size=8, max_size=60), st.integers(1, 59))
def test_what_was_found_by_a_moment_does_not_change_with_what_comes_later(gaps, cut):
    """Law: a prefix of the history gives the same raised alerts that the whole history gives for it."""
    plan = Plan(BaselinePlan(first_events=6), 0.1)
    cut = min(cut, len(gaps))
    whole = assess(make_steps(gaps, 300.0), plan, [], 10**18)
    part = assess(make_steps(gaps[:cut], 300.0), plan, [], 10**18)
    end = int(np.sum(gaps[:cut]) / 300.0 * YEAR)
    assert [(s.direction, s.raised_us) for s in part.signals] == [
        (s.direction, s.raised_us) for s in whole.signals if s.raised_us <= end
    ]


def test_a_high_count_on_one_unit_is_found_per_unit():
    counts = [0, 1, 0, 2, 0, 1, 1, 0, 0, 1, 2, 0, 1, 0, 1, 1, 0, 1, 0, 2] * 3 + [9]
    steps = make_steps([1.0] * len(counts), 100.0, counts=counts)
    result = assess(steps, FIRST12, [], 10**18)
    assert result.standing == "worse"
