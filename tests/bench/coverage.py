"""How often start and ratio hold the truth at the moment of an alert: `python tests/bench/coverage.py`.

Located events, 20 a year, budget 0.05 a year, a change 20 events after the baseline; 200 streams a cell. The
evidence is what the engine reports at the alert itself: nothing after it is known.
"""

from __future__ import annotations

import math
from concurrent.futures import ProcessPoolExecutor

import numpy as np

from rules import simulate
from rules.assess import assess
from rules.model import BaselinePlan, Plan, Signal, Steps, Timeline

YEAR_US = 365.25 * 86400e6
YEARLY, BUDGET, CHANGE, STREAMS = 20.0, 0.05, 20.0, 200
RATIOS = (1.5, 2.0, 3.0, 5.0, 1 / 1.5, 0.5, 1 / 3, 0.2)


def _steps(gaps: np.ndarray, upto: int, open_gap: float) -> Steps:
    ends = np.cumsum(gaps)
    times = (ends / YEARLY * YEAR_US).astype(np.int64)
    alive = (float(ends[upto - 1]) if upto else 0.0) + open_gap
    alive_us = int(alive / YEARLY * YEAR_US)
    line = Timeline(np.array([0.0, alive]), np.array([0, alive_us]), stepped=False)
    return Steps(
        gaps[:upto], np.ones(upto, dtype=np.int64), times[:upto], np.arange(upto), open_gap, alive_us, 0, line
    )


def _at_the_alert(gaps: np.ndarray, plan: BaselinePlan, want: str, change: float) -> Signal | None:
    """The first signal, as it stood when it was raised; None if it came before the change or the other way."""
    signals = assess(_steps(gaps, gaps.size, 0.0), Plan(plan, BUDGET), [], 10**18).signals
    if not signals or signals[0].direction != want:
        return None
    raised = signals[0].raised_us / YEAR_US * YEARLY
    if raised <= change:
        return None
    ends = np.cumsum(gaps)
    upto = int(np.searchsorted(ends, raised * (1 + 1e-9), side="right"))
    left = 0.0 if want == "worse" else max(0.0, raised - (ends[upto - 1] if upto else 0.0)) + 1e-6
    first = assess(_steps(gaps, upto, left), Plan(plan, BUDGET), [], 10**18).signals
    return first[0] if first else None


def measure(cell: tuple[float, float]) -> str:
    """One line of the table."""
    base, ratio = cell
    horizon = CHANGE + (120 if ratio > 0.4 else 60)
    rng = np.random.default_rng([7, int(min(base, 999)), int(ratio * 100)])
    streams = simulate.draw_streams(
        rng, STREAMS, base_events=base, horizon=horizon, step=0.0, change_at=CHANGE, ratio=ratio
    )
    held = []
    for i in range(STREAMS):
        gaps, before, plan = streams.exposure[i], 0.0, BaselinePlan(rate=1.0)
        if not streams.known:
            m, before = int(base), float(streams.base_exposure[i])
            first = rng.exponential(1.0, m)
            gaps = np.concatenate([first * (before / first.sum()), gaps])
            plan = BaselinePlan(first_events=m)
        s = _at_the_alert(gaps, plan, "worse" if ratio > 1 else "better", before + CHANGE)
        if s is not None:
            held.append(
                (
                    s.began.exposure_earliest <= before + CHANGE <= s.began.exposure_latest,
                    s.ratio.low <= ratio <= s.ratio.high,
                    s.uncorrected.low <= ratio <= s.uncorrected.high,
                    s.ratio.estimate / ratio,
                )
            )
    table = np.array(held, dtype=float)
    start, corrected, plain = table[:, :3].mean(axis=0)
    return (
        f"first events {base:>4g}  ratio {ratio:.2f}: start {start:.3f}  ratio {corrected:.3f}"
        f"  (uncorrected {plain:.3f})  median estimate / truth {np.median(table[:, 3]):.2f}  n = {len(held)}"
    )


if __name__ == "__main__":
    with ProcessPoolExecutor(2) as pool:
        for line in pool.map(measure, [(b, r) for b in (12.0, 30.0, math.inf) for r in RATIOS]):
            print(line, flush=True)
