"""The calibration table: sound, used on the safe side, and its promise kept in a fresh simulation."""

from __future__ import annotations

import itertools
import math
from pathlib import Path

import numpy as np
import pytest

from rules import calibration, protocol, simulate
from rules.calibration import Calibration


def test_the_table_was_made_by_a_script_that_is_still_here_and_was_not_altered():
    calibration.load_table.cache_clear()
    calibration.load_table()
    assert (Path(__file__).parents[2] / "deploy" / "make_calibration_table.py").exists()


def test_an_altered_table_is_refused(monkeypatch):
    calibration.load_table.cache_clear()
    good = calibration.json.loads
    monkeypatch.setattr(calibration.json, "loads", lambda text: good(text) | {"paths": 1})
    with pytest.raises(calibration.CalibrationError, match="was altered after it was made"):
        calibration.load_table()
    monkeypatch.undo()
    calibration.load_table.cache_clear()


@pytest.mark.parametrize(
    ("base", "yearly", "budget"), [(12, 10.0, 0.1), (5, 20.0, 0.1), (30, 6.0, 0.05), (math.inf, 10.0, 0.1)]
)
def test_the_promise_holds_in_a_fresh_simulation(base, yearly, budget):
    """Independent: other seed, other cell; 4,000 streams, six years, restarts (methods.md section 5)."""
    paths, horizon = 4000, protocol.YEARS * yearly
    streams = simulate.draw_streams(
        np.random.default_rng(77), paths, base_events=base, horizon=horizon, step=0.0
    )
    rule = Calibration(base, 60.0, 0.0, budget)
    # nu is estimated from the same events, as in use: the limit is kappa(nu_hat), not kappa(nu)
    levels = simulate.log_level_functions()
    maxima, _ = simulate.walk(streams, levels, horizon=horizon)
    alerts = simulate.false_alerts(
        streams, levels, maxima, log_allowed=rule.log_kappa(yearly) + math.log(yearly / budget),
        horizon=horizon, mute=protocol.SETTLE_YEARS * yearly, grow_to=60.0,
    )  # fmt: skip
    ratio = len(alerts) / paths / (protocol.YEARS * budget)
    assert 0.75 <= ratio <= 1.10 + 0.06  # 0.06: two standard errors of the simulation


def test_a_recurrence_interval_at_the_limit_is_the_promise():
    """Law: evidence just at the limit recurs once in 1/budget years."""
    for budget in (0.3, 0.05, 0.004):
        rule = Calibration(12, 60.0, 0.0, budget)
        level = rule.log_limit(0.1, 100.0)
        assert rule.recurrence_years(level, 0.1, 100.0) == pytest.approx(1 / budget, rel=0.02)


def test_stronger_evidence_recurs_less_often_up_to_the_cap():
    rule = Calibration(12, 60.0, 0.0, 0.05)
    years = [rule.recurrence_years(level, 0.1, 100.0) for level in np.linspace(3, 20, 30)]
    assert all(a <= b for a, b in itertools.pairwise(years))
    assert years[-1] == calibration.RECURRENCE_CAP_YEARS


def test_a_smaller_budget_never_lowers_the_limit():
    limits = [Calibration(12, 60.0, 0.0, b).log_limit(0.1, 100.0) for b in (0.5, 0.2, 0.1, 0.03, 0.01, 0.002)]
    assert limits == sorted(limits)
