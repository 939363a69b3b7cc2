"""Steady streams under the whole alerting protocol, many at once: the calibration's measuring instrument.

The step rules here and in :mod:`rules.assess` are one protocol written twice, vectorised and plain; a test
walks both over the same series and demands the same alerts.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import betainc, betaincc, gammainc, gammaincc

from rules import protocol as p
from rules.cusum import BANK, bank_weights, evidence_array
from rules.model import FloatArray, IntArray
from rules.run_length import cusum_level
from rules.start import FIRST_RECORDS

__all__ = ["Walk", "draw_streams", "false_alerts", "log_level_functions", "path_maxima", "walk"]

_RATIOS = np.array([*BANK, *(1.0 / r for r in BANK)])
_UP = _RATIOS > 1.0
_N_UP = int(_UP.sum())
_LN2, _LOG_FLOOR = math.log(2.0), math.log(p.FLOOR_PROBABILITY)
_LOG_GAP, _LOG_SUM = math.log(p.GAP_WEIGHT), math.log(p.SUM_WEIGHT)
_LOG_RUN, _LOG_PAIR, _LOG_COUNT = math.log(p.RUN_WEIGHT), math.log(p.PAIR_WEIGHT), math.log(p.COUNT_WEIGHT)
_GRID = np.concatenate([np.linspace(0.02, 16.0, 400), [40.0]])
"""Limits at which levels are tabulated; around ln δ, where a level jumps, two more points are put in."""


def log_level_functions() -> list[Callable[[FloatArray], FloatArray]]:
    """Return, per member of the bank, ln of its weighted level at some evidence, vectorised."""
    out: list[Callable[[FloatArray], FloatArray]] = []
    for ratio, weight in zip(_RATIOS, (*bank_weights("worse"), *bank_weights("better")), strict=True):
        jump = abs(math.log(ratio))
        grid = np.unique(np.concatenate([_GRID, [jump, jump * (1 + 1e-6)]]))
        table = np.maximum.accumulate([math.log(weight * cusum_level(float(ratio), g)) for g in grid])
        out.append(_interpolator(grid, table))
    return out


def _interpolator(grid: FloatArray, table: FloatArray) -> Callable[[FloatArray], FloatArray]:
    return lambda w: np.interp(w, grid, table)


@dataclass(frozen=True, slots=True)
class Walk:
    """Streams to be walked: arrays of shape (paths, steps), baselines of shape (paths,)."""

    exposure: FloatArray
    counts: IntArray
    located: bool
    base_events: FloatArray
    base_exposure: FloatArray
    known: bool
    index: float = 1.0
    """Index of dispersion of the events, taken as recognised."""


def draw_streams(
    rng: np.random.Generator,
    paths: int,
    *,
    base_events: float,
    horizon: float,
    step: float,
    change_at: float = math.inf,
    ratio: float = 1.0,
    index: float = 1.0,
) -> Walk:
    """Draw streams of rate 1 with their baselines; ``step`` 0 means located events, else Poisson counts.

    ``base_events`` may be ``inf`` (rate known). A change multiplies the rate by ``ratio`` from exposure
    ``change_at`` on. ``horizon`` is in expected events of the steady stream. With ``index`` φ above 1 gaps are
    gamma distributed with shape 1/φ, and counts negative binomial with variance φ times their mean.
    """
    known = math.isinf(base_events)
    if step <= 0:
        n_steps = int(horizon * max(1.0, min(ratio, 3.0)) + 6 * math.sqrt(horizon) + 20)
        n_steps = int(n_steps * (1.0 + 0.2 * (index - 1.0)))
        e = rng.gamma(1.0 / index, index, (paths, n_steps)) if index > 1 else rng.exponential(1.0, (paths, n_steps))  # fmt: skip
        if math.isfinite(change_at):
            ends = np.cumsum(e, axis=1)
            starts = ends - e
            # time-change of a unit Poisson process: past the change the operational clock runs `ratio` faster
            warp = np.where(ends <= change_at, ends, change_at + (ends - change_at) / ratio)
            warp0 = np.where(starts <= change_at, starts, change_at + (starts - change_at) / ratio)
            e = warp - warp0
        counts = np.ones(e.shape, dtype=np.int64)
        base_n = np.full(paths, 1.0 if known else base_events)
        base_t = np.ones(paths) if known else rng.gamma(base_events / index, index, paths)
        return Walk(e, counts, located=True, base_events=base_n, base_exposure=base_t, known=known, index=index)  # fmt: skip
    n_steps = max(1, math.ceil(horizon / step))
    e = np.full((paths, n_steps), step)
    position = np.arange(n_steps) * step
    rate = np.where(position >= change_at, ratio, 1.0)
    counts = _draw_counts(rng, e * rate, index)
    if known:
        ones = np.ones(paths)
        return Walk(e, counts, located=False, base_events=ones, base_exposure=ones, known=True, index=index)  # fmt: skip
    # so many records at least (a few, of more events, for the smallest bases), then up to the event that fills it
    records = min(FIRST_RECORDS, max(1, round(base_events / step)))
    base_t = np.full(paths, float(records * step))
    base_n = _draw_counts(rng, base_t, index).astype(float)
    enough = base_events if base_events / step >= FIRST_RECORDS else 1.0
    short = base_n < enough
    while short.any():
        base_n[short] += _draw_counts(rng, np.full(int(short.sum()), step), index)
        base_t[short] += step
        short = base_n < enough
    return Walk(e, counts, located=False, base_events=base_n, base_exposure=base_t, known=False, index=index)  # fmt: skip


def _draw_counts(rng: np.random.Generator, mean: FloatArray, index: float) -> IntArray:
    if index <= 1.0:
        return np.asarray(rng.poisson(mean))
    return np.asarray(rng.negative_binomial(mean / (index - 1.0), 1.0 / index))


@dataclass(slots=True)
class _Tails:
    """Ln tails of the waiting time to the r-th event, one baseline for each path; as :mod:`rules.tails`."""

    m: FloatArray
    t: FloatArray
    known: bool
    index: float

    def within(self, r: FloatArray | float, exposure: FloatArray) -> FloatArray:
        """Ln P(the r-th event comes within ``exposure``)."""
        if self.index == 1.0 and isinstance(r, float) and r == 1.0:
            tail: Any = -np.expm1(self.beyond(1.0, exposure))
        elif self.known:
            tail = gammainc(np.asarray(r) / self.index, exposure / (self.t * self.index))
        else:
            tail = betainc(np.asarray(r) / self.index, self.m / self.index, exposure / (exposure + self.t))
        return np.asarray(np.log(np.maximum(tail, 1e-300)))

    def beyond(self, r: FloatArray | float, exposure: FloatArray) -> FloatArray:
        """Ln P(the r-th event comes later than ``exposure``)."""
        if self.index == 1.0 and isinstance(r, float) and r == 1.0:
            return np.asarray(-exposure / self.t if self.known else -self.m * np.log1p(exposure / self.t))
        tail: Any
        if self.known:
            tail = gammaincc(np.asarray(r) / self.index, exposure / (self.t * self.index))
        else:
            tail = betaincc(np.asarray(r) / self.index, self.m / self.index, exposure / (exposure + self.t))
        return np.asarray(np.log(np.maximum(tail, 1e-300)))

    def of(self, q: IntArray) -> _Tails:
        """Return those of some paths."""
        return _Tails(self.m[q], self.t[q], self.known, self.index)


class _Points:
    """The point rules of :class:`rules.points.Points`, for one direction of many paths."""

    def __init__(self, paths: int, *, worse: bool) -> None:
        self.worse = worse
        self.recent = np.full((paths, p.SUM_EVENTS), np.nan)
        self.recent[:, 0] = 0.0
        self.run = np.zeros(paths)
        self.tails = np.zeros((paths, 2))

    def restart(self, q: IntArray, at: FloatArray) -> None:
        self.recent[q] = np.nan
        self.recent[q, 0] = at
        self.run[q] = 0.0
        self.tails[q] = 0.0

    def _over_points(self, law: _Tails, tail: FloatArray) -> FloatArray:
        """Level of runs and pairs, given the newest point's ln tail."""
        length = self.run + 1.0
        level = _LOG_RUN + (length + 1.0) * _LN2 + np.log1p(-(2.0**-length))
        out = np.where((tail < -_LN2) & (law.index == 1.0), level, -np.inf)
        pair = _LOG_PAIR - _LN2 - 2.0 * np.maximum(tail, self.tails.min(axis=1))
        return np.asarray(np.maximum(out, pair))

    def gap(self, law: _Tails, end: FloatArray, *, single: bool = False) -> FloatArray:
        """Strongest level of a gap that ends, or is still open, at ``end``; ``single`` leaves out the others."""
        gap = end - self.recent[:, 0]
        tail = (law.within if self.worse else law.beyond)(1.0, gap)
        out = _LOG_GAP - tail
        if not self.worse:
            out = np.where(tail <= _LOG_FLOOR, out, -np.inf)
        if single:
            return out
        out = np.maximum(out, self._over_points(law, tail))
        means = (end - self.recent[:, -1]) / (law.t if law.known else law.t / law.m)
        # elsewhere the sum is far from any limit (nan where there are too few gaps)
        full = np.nonzero(means < 1.0 if self.worse else means > 5.0)[0]
        if full.size:
            total = end[full] - self.recent[full, -1]
            part = law.of(full)
            tail3 = (part.within if self.worse else part.beyond)(float(p.SUM_EVENTS), total)
            good = tail3 <= (np.inf if self.worse else _LOG_FLOOR)
            out[full] = np.maximum(out[full], np.where(good, _LOG_SUM - tail3, -np.inf))
        return np.asarray(out)

    def take_gap(self, law: _Tails, end: FloatArray) -> None:
        self._take((law.within if self.worse else law.beyond)(1.0, end - self.recent[:, 0]))
        self.recent[:, 1:] = self.recent[:, :-1].copy()
        self.recent[:, 0] = end

    def _take(self, tail: FloatArray) -> None:
        self.run = np.where(tail < -_LN2, self.run + 1.0, 0.0)
        self.tails = np.column_stack([tail, self.tails[:, 0]])

    def count(self, law: _Tails, count: FloatArray, exposure: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Strongest level of a step, and the step's ln tail."""
        if self.worse:
            tail = np.where(count > 0, law.within(np.maximum(count, 1.0), exposure), 0.0)
            alone = np.where(count >= p.MIN_EVENTS_WORSE, _LOG_COUNT - tail, -np.inf)
        else:
            tail = law.beyond(count + 1.0, exposure)
            alone = np.where(tail <= _LOG_FLOOR, _LOG_COUNT - tail, -np.inf)
        rate = 0.0 if law.known else np.log(law.m / law.t)
        return np.asarray(np.maximum(alone, self._over_points(law, tail)) + np.log(exposure) + rate), tail

    def take_count(self, tail: FloatArray, count: FloatArray, end: FloatArray) -> None:
        self._take(tail)
        self.recent[:, 0] = np.where(count > 0, end, self.recent[:, 0])


def walk(
    streams: Walk,
    levels: list[Callable[[FloatArray], FloatArray]],
    *,
    horizon: float,
    grow_to: float = 60.0,
    log_allowed: float | None = None,
    mute: float = 0.0,
    first_only: bool = False,
) -> tuple[FloatArray, FloatArray]:
    """Walk the protocol over ``streams``.

    Parameters
    ----------
    log_allowed : float or None
        None: nothing alerts; the strongest evidence of each path is noted. Else ln of the expected exposure
        that each rule may take between false signals when the estimated rate is 1; alerts are noted.
    mute : float
        Exposure from an alert to its settling; its direction is not judged in between and then restarts.

    Returns
    -------
    maxima : float array, shape (paths,)
        max over time of ln level − ln(estimated rate); ``-inf`` where no floor was passed.
    alerts : float array, shape (k, 3)
        Path, position, +1 worse or −1 better.
    """
    x, c, known, index = streams.exposure, streams.counts, streams.known, streams.index
    log_index = math.log(index)
    paths, n_steps = x.shape
    m, t = streams.base_events.astype(float), streams.base_exposure.copy()
    m0 = m.copy()
    grows = not known and grow_to > 0
    pos = np.zeros(paths)
    position = np.zeros((paths, n_steps + 1))
    total = np.zeros((paths, n_steps + 1))
    base_i = np.zeros(paths, dtype=np.int64)
    start = np.zeros((paths, _RATIOS.size))
    start_i = np.zeros((paths, _RATIOS.size), dtype=np.int64)
    n = np.zeros((paths, _RATIOS.size))
    muted_until = np.full((paths, 2), -1.0)
    points = (_Points(paths, worse=True), _Points(paths, worse=False))
    maxima = np.full(paths, -np.inf)
    alerts: list[FloatArray] = []
    live = np.ones(paths, dtype=bool)
    rows = np.arange(paths)
    log_min = math.log(p.MIN_LEVEL)

    def strength(part: slice, n_now: FloatArray, end: FloatArray) -> tuple[FloatArray, FloatArray]:
        span = np.maximum(end[:, None] - start[:, part], 0.0)
        w = evidence_array(_RATIOS[part], n_now, span, m[:, None], t[:, None], known=known)
        return w / index, span

    up, down = slice(0, _N_UP), slice(_N_UP, None)
    for k in range(1, n_steps + 1):
        end = pos + x[:, k - 1]
        count = c[:, k - 1].astype(float)
        for side, part in ((0, up), (1, down)):
            # a group's events have no place in it, so that judging starts anew with a whole step
            moment = end if streams.located else pos
            again = (muted_until[:, side] >= 0) & (muted_until[:, side] <= moment)
            if again.any():
                q = np.nonzero(again)[0]
                start[q, part] = (muted_until[q, side] if streams.located else pos[q])[:, None]
                start_i[q, part] = k - 1
                n[q, part] = 0
                points[side].restart(q, muted_until[q, side] if streams.located else pos[q])
                muted_until[q, side] = -1.0
        on = muted_until < 0
        log_rate = np.zeros(paths) if known else np.log(m / t)
        inside = live & (end <= horizon)
        # `better` may rise in the gap in whose middle the horizon lies
        seen = np.where((pos < horizon) & streams.located, np.minimum(end, horizon), end)
        begun = live & (pos < horizon) if streams.located else inside

        law = _Tails(m, t, known, index)
        down_n = n[:, down] if streams.located else n[:, down] + count[:, None]
        # better: in the event-free part where events are located, else at the end of the step
        w, span = strength(down, down_n, seen)
        best = np.full(paths, -np.inf)
        for j in range(w.shape[1]):
            level = levels[_N_UP + j](w[:, j]) + log_index
            # the floor costs most: it is asked only where it could matter
            q = np.nonzero((level >= log_min) & (level > best) & on[:, 1])[0]
            if q.size:
                passed = law.of(q).beyond(down_n[q, j] + 1.0, span[q, j]) <= _LOG_FLOOR
                best[q[passed]] = level[q[passed]]
        if streams.located:
            rule = points[1].gap(law, seen)
        else:
            free = points[1].gap(law, end, single=True)
            rule, tail_down = points[1].count(law, count, x[:, k - 1])
            rule = np.where(count > 0, rule, np.maximum(rule, free))
        best = np.where(on[:, 1], np.maximum(best, rule), best)

        # then the events
        if streams.located:
            w, _ = strength(up, n[:, up], end)
            fresh = w <= 0
            start[:, up] = np.where(fresh, end[:, None], start[:, up])
            start_i[:, up] = np.where(fresh, k - 1, start_i[:, up])
            n[:, up] = np.where(fresh, 0.0, n[:, up])
        n += count[:, None]
        w, _ = strength(up, n[:, up], end)
        worst = np.full(paths, -np.inf)
        for j in range(w.shape[1]):
            good = (w[:, j] > 0.0) & (n[:, j] >= p.MIN_EVENTS_WORSE) & (count > 0) & on[:, 0]
            worst = np.where(good, np.maximum(worst, levels[j](w[:, j]) + log_index), worst)
        if streams.located:
            rule = points[0].gap(law, end)
            for each in points:
                each.take_gap(law, end)
        else:
            rule, tail_up = points[0].count(law, count, x[:, k - 1])
            rule = np.where(count > 0, rule, -np.inf)
            points[0].take_count(tail_up, count, end)
            points[1].take_count(tail_down, count, end)
        worst = np.where(on[:, 0], np.maximum(worst, rule), worst)

        w_up = w
        if not streams.located:
            fresh = w_up <= 0
            start[:, up] = np.where(fresh, end[:, None], start[:, up])
            start_i[:, up] = np.where(fresh, k, start_i[:, up])
            n[:, up] = np.where(fresh, 0.0, n[:, up])
        w_down, _ = strength(down, n[:, down], end)
        fresh = w_down <= 0
        start[:, down] = np.where(fresh, end[:, None], start[:, down])
        start_i[:, down] = np.where(fresh, k, start_i[:, down])
        n[:, down] = np.where(fresh, 0.0, n[:, down])
        if log_allowed is None:
            strongest = np.maximum(np.where(begun, best, -np.inf), np.where(inside, worst, -np.inf))
            strongest = np.where(strongest >= log_min, strongest - log_rate, -np.inf)
            maxima = np.maximum(maxima, strongest)
        else:
            limit = np.maximum(log_allowed + log_rate, log_min)
            for side, sign, value, when in ((1, -1.0, best, begun), (0, 1.0, worst, inside)):
                hit = when & (value >= limit)
                if hit.any():
                    q = np.nonzero(hit)[0]
                    alerts.append(np.column_stack([q, end[q], np.full(q.size, sign)]))
                    muted_until[q, side] = end[q] + mute
                    if first_only:
                        live[q] = False
        pos = end
        position[:, k] = pos
        total[:, k] = total[:, k - 1] + count

        if grows:
            w_all = np.concatenate([w_up, w_down], axis=1)
            held = np.where(w_all >= p.QUIET_EVIDENCE, start_i, n_steps + 1).min(axis=1)
            shut = (muted_until >= 0).any(axis=1)
            moved = np.zeros(paths, dtype=bool)
            while True:
                nxt = np.minimum(base_i + 1, n_steps)
                ok = (
                    ~shut
                    & (nxt <= np.minimum(held, k))
                    & (total[rows, k] - total[rows, nxt] >= p.GUARD_EVENTS)
                    & (m < np.maximum(grow_to, m0))
                )
                if not ok.any():
                    break
                q = np.nonzero(ok)[0]
                t[q] += position[q, nxt[q]] - position[q, base_i[q]]
                m[q] += total[q, nxt[q]] - total[q, base_i[q]]
                base_i[q] = nxt[q]
                moved |= ok
            if moved.any():
                q = np.nonzero(moved)[0]
                behind = start_i[q] < base_i[q][:, None]
                base_pos = position[q, base_i[q]][:, None]
                left = (total[q, k] - total[q, base_i[q]])[:, None]
                start[q] = np.where(behind, base_pos, start[q])
                n[q] = np.where(behind, left, n[q])
                start_i[q] = np.where(behind, base_i[q][:, None], start_i[q])
        if (first_only and not live.any()) or bool((pos > horizon).all()):
            break
    return maxima, np.concatenate(alerts) if alerts else np.zeros((0, 3))


def path_maxima(streams: Walk, levels: list[Callable[[FloatArray], FloatArray]], **kw: float) -> FloatArray:
    """Strongest evidence of each steady path; see :func:`walk`."""
    return walk(streams, levels, **kw)[0]  # type: ignore[arg-type]


def false_alerts(
    streams: Walk,
    levels: list[Callable[[FloatArray], FloatArray]],
    maxima: FloatArray,
    *,
    log_allowed: float,
    horizon: float,
    mute: float,
    grow_to: float,
) -> FloatArray:
    """Alerts of all paths at a limit; only paths whose ``maxima`` reach it are walked again."""
    hot = np.nonzero(maxima >= log_allowed - 1e-12)[0]
    if hot.size == 0:
        return np.zeros((0, 3))
    part = Walk(
        streams.exposure[hot],
        streams.counts[hot],
        streams.located,
        streams.base_events[hot],
        streams.base_exposure[hot],
        streams.known,
        streams.index,
    )
    _, alerts = walk(part, levels, horizon=horizon, grow_to=grow_to, log_allowed=log_allowed, mute=mute)
    alerts[:, 0] = hot[alerts[:, 0].astype(int)]
    return alerts
