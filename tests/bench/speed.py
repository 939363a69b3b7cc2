"""How long one assessment takes: `python tests/bench/speed.py`. Beside it a bare walk over the same gaps.

Absolute times mean little on a shared machine; the ratio to the bare walk (five CUSUMs a side in plain Python,
no limits, no evidence) says what the engine adds.
"""

from __future__ import annotations

import math
import time

import numpy as np

from rules.assess import assess
from rules.model import BaselinePlan, Plan, Steps, Timeline

YEAR_US = 365.25 * 86400e6


def _stream(rng: np.random.Generator, n: int) -> Steps:
    gaps = rng.exponential(1.0, n)
    ends = np.cumsum(gaps)
    times = (ends / 20.0 * YEAR_US).astype(np.int64)
    line = Timeline(np.array([0.0, float(ends[-1])]), np.array([0, int(times[-1])]), stepped=False)
    return Steps(gaps, np.ones(n, dtype=np.int64), times, np.arange(n), 0.0, int(times[-1]), 0, line)


def _bare(gaps: np.ndarray) -> float:
    ratios = [1.25, 1.65, 2.5, 4.5, 10.0, 0.8, 1 / 1.65, 0.4, 1 / 4.5, 0.1]
    logs = [math.log(r) for r in ratios]
    w = [0.0] * 10
    for gap in gaps.tolist():
        for j in range(10):
            w[j] = max(0.0, w[j] - (ratios[j] - 1.0) * gap) + logs[j]
    return max(w)


if __name__ == "__main__":
    rng = np.random.default_rng(1)
    for n in (50, 200, 2000):
        streams = [_stream(rng, n) for _ in range(max(4, 8000 // n))]
        for plan in (BaselinePlan(first_events=12), BaselinePlan(rate=1.0)):
            judged = Plan(plan, 0.02)
            assess(streams[0], judged, [], 10**18)
            began = time.perf_counter()
            for s in streams:
                assess(s, judged, [], 10**18)
            whole = (time.perf_counter() - began) / len(streams)
            began = time.perf_counter()
            for s in streams:
                _bare(s.exposure)
            bare = (time.perf_counter() - began) / len(streams)
            kind = "known rate" if plan.rate else "12 first events"
            print(
                f"{n:>5} events, {kind:<15}: {1e3 * whole:6.2f} ms a stream, {whole / bare:4.1f} x a bare walk",
                flush=True,
            )
