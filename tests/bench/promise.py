"""How many false alerts steady streams really raise, against the promise: `python tests/bench/promise.py [WORD]`.

The engine itself judges fresh streams over six years from the end of the first baseline; every alert is settled
as no-cause 30 days later. One line a cell: measured / promised with its standard error, then year by year, then
what the guard of the learning stage raised before (a year of learning, as a share of the yearly promise).
"""

from __future__ import annotations

import math
import sys
import time
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass

import numpy as np

from rules.assess import assess
from rules.model import BaselinePlan, Plan, Steps, Timeline
from rules.series import count_series, unit_gaps
from rules.start import FIRST_RECORDS

STREAMS = 2000
YEARS = 6.0
YEAR_US = 365.25 * 86400e6
SETTLE_US = round(30 * 86400e6)


@dataclass(frozen=True)
class Cell:
    """One kind of stream; ``mean`` is the expected defects of a record or lot where there is one."""

    form: str
    first: float
    yearly: float
    budget: float = 0.1
    mean: float = 0.0
    index: float = 1.0
    fraction: float = 0.0


CELLS = [
    *(Cell("days", m, 15) for m in (5, 8, 12, 30, math.inf)),
    *(Cell("days", 12, y, b) for y, b in ((1, 0.05), (4, 0.1), (100, 0.1))),
    Cell("days", 12, 15, 0.02),
    Cell("days", 5, 4), Cell("days", 5, 100), Cell("days", math.inf, 100),
    Cell("units", 12, 15, fraction=0.002), Cell("units", 12, 15, fraction=0.05), Cell("units", 8, 100, fraction=0.05),
    *(Cell("lots", 12, y, mean=m) for m, y in ((0.3, 15), (3.0, 100), (10.0, 100))),
    *(Cell("per-unit", m, y, mean=mu) for mu, m, y in ((0.3, 12, 15), (0.3, 30, 100), (4.0, 12, 100), (4.0, 30, 100), (4.0, math.inf, 100))),
    *(Cell("days", m, y, index=i) for i in (2.0, 4.0) for m, y in ((12, 15), (30, 100))),
    *(Cell("per-unit", 30, 100, mean=mu, index=i) for i in (2.0, 4.0) for mu in (0.3, 4.0)),
]  # fmt: skip


def _timeline(alive: float, yearly: float) -> Timeline:
    ends = np.array([0.0, alive])
    return Timeline(ends, (ends / yearly * YEAR_US).astype(np.int64), stepped=False)


def _times(ends: np.ndarray, yearly: float) -> np.ndarray:
    return (ends / yearly * YEAR_US).astype(np.int64)


def draw(cell: Cell, rng: np.random.Generator) -> Steps:
    """One steady stream, six years beyond its likely baseline and a margin."""
    known = math.isinf(cell.first)
    need = (0.0 if known else cell.first + 4 * math.sqrt(cell.first * cell.index)) + 12 * cell.mean
    horizon = YEARS * cell.yearly + need + 8 * math.sqrt(need * cell.index) + 2
    if cell.form == "days":
        n = int(horizon + 8 * math.sqrt(horizon * cell.index) + 20)
        gaps = rng.gamma(1 / cell.index, cell.index, n)
        gaps = gaps[np.cumsum(gaps) <= horizon]
        end = float(gaps.sum())
        line = _timeline(horizon, cell.yearly)
        ends = np.cumsum(gaps)
        return Steps(
            gaps, np.ones(gaps.size, dtype=np.int64), _times(ends, cell.yearly), np.arange(gaps.size),
            horizon - end, int(line.time_us[-1]), 0, line,
        )  # fmt: skip
    if cell.form == "units":
        n = int(horizon / cell.fraction)
        failures = (rng.random(n) < cell.fraction).astype(np.int64)
        times = _times(np.arange(1, n + 1) * cell.fraction, cell.yearly)
        return unit_gaps(np.ones(n), failures, times, lot=np.zeros(n, dtype=bool))
    n = max(1, int(horizon / cell.mean))
    size = rng.uniform(0.3, 1.7, n) if cell.form == "per-unit" else np.ones(n)
    mean = size * cell.mean
    if cell.index > 1:
        counts = rng.negative_binomial(mean / (cell.index - 1), 1 / cell.index)
    else:
        counts = rng.poisson(mean)
    times = _times(np.cumsum(mean), cell.yearly)
    if cell.form == "per-unit":
        return count_series(size, counts.astype(np.int64), times)
    units = np.full(n, 500.0)
    return unit_gaps(units, np.minimum(counts, 500).astype(np.int64), times, lot=np.ones(n, dtype=bool))


def _rate(cell: Cell) -> float:
    """Events per exposure."""
    return {"days": 1.0, "units": cell.fraction, "lots": cell.mean / 500.0, "per-unit": cell.mean}[cell.form]


def _count(job: tuple[Cell, int]) -> tuple[np.ndarray, int, float, int, int]:
    cell, part = job
    rng = np.random.default_rng([4711, part, int(min(cell.first, 999)), int(cell.yearly), int(cell.mean * 10), int(cell.index * 10), int(cell.fraction * 1000)])  # fmt: skip
    years = np.zeros(int(YEARS), dtype=int)
    unseen = 0
    learning, learnt_years, scattered = 0, 0.0, 0
    known = math.isinf(cell.first)
    plan = BaselinePlan(rate=_rate(cell)) if known else BaselinePlan(first_events=int(cell.first))
    for _ in range(STREAMS // 20):
        steps = draw(cell, rng)
        found = assess(steps, Plan(plan, cell.budget, settle_after_us=SETTLE_US), [], 10**18)
        scattered += any(c.code == "over-dispersed" for c in found.cautions)
        begin = 0.0
        if not known:
            ends = np.cumsum(steps.events)
            i = int(np.searchsorted(ends, cell.first))
            if steps.per_record:
                i = max(i, FIRST_RECORDS - 1)
            begin = float(steps.time_us[min(i, ends.size - 1)]) / YEAR_US
        learnt_years += begin
        for signal in found.signals:
            at = signal.raised_us / YEAR_US - begin
            if at <= 0:
                learning += 1
            elif at < YEARS:
                years[int(at)] += 1
                unseen += signal.baseline.index == 1.0
    return years, learning, learnt_years, scattered, unseen


def measure(cell: Cell, pool: ProcessPoolExecutor) -> None:
    """Print one cell."""
    began = time.time()
    parts = list(pool.map(_count, [(cell, part) for part in range(20)]))
    years = np.sum([p[0] for p in parts], axis=0)
    learning, learnt, scattered, unseen = (sum(p[k] for p in parts) for k in (1, 2, 3, 4))
    promised = YEARS * cell.budget * STREAMS
    total = int(years.sum())
    by_year = (years / (cell.budget * STREAMS)).round(2).tolist()
    guard = f"  learning {learning / (learnt * cell.budget):.2f}" if learnt else ""
    kind = f"{cell.form}" + (f" p={cell.fraction:g}" if cell.fraction else "") + (f" mean {cell.mean:g}" if cell.mean else "")  # fmt: skip
    print(
        f"{kind:<18} index {cell.index:g}  first {cell.first:>3g}  {cell.yearly:>3g} a year  budget {cell.budget:<4g}:"
        f" {total / promised:.2f} ± {math.sqrt(max(total, 1)) / promised:.2f}  by year {by_year}{guard}"
        f"  over-dispersed {scattered / STREAMS:.0%}"
        + (f" (alerts before it was recognised {unseen / promised:.2f})" if cell.index > 1 else "")
        + f"  ({time.time() - began:.0f} s)",
        flush=True,
    )


if __name__ == "__main__":
    word = sys.argv[1] if len(sys.argv) > 1 else ""
    with ProcessPoolExecutor(2) as pool:
        for cell in CELLS:
            if word in repr(cell):
                measure(cell, pool)
