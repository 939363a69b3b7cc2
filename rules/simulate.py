"""Steady streams under the whole alerting protocol, many at once: the calibration's measuring instrument.

The step rules here and in :mod:`rules.assess` are one protocol written twice, vectorised and plain; a test
walks both over the same series and demands the same alerts.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from rules import protocol as p
from rules.cusum import BANK, evidence_array
from rules.model import FloatArray, IntArray
from rules.run_length import cusum_level

__all__ = ["Walk", "draw_streams", "false_alerts", "log_level_functions", "path_maxima", "walk"]

_RATIOS = np.array([*BANK, *(1.0 / r for r in BANK)])
_UP = _RATIOS > 1.0
_N_UP = int(_UP.sum())
_GRID = np.concatenate([np.linspace(0.02, 16.0, 400), [40.0]])
"""Limits at which levels are tabulated; around ln δ, where a level jumps, two more points are put in."""


def log_level_functions() -> list[Callable[[FloatArray], FloatArray]]:
    """Return, per member of the bank, ln(expected events between false signals) of a limit, vectorised."""
    out: list[Callable[[FloatArray], FloatArray]] = []
    for ratio in _RATIOS:
        jump = abs(math.log(ratio))
        grid = np.unique(np.concatenate([_GRID, [jump, jump * (1 + 1e-6)]]))
        table = np.maximum.accumulate([math.log(cusum_level(float(ratio), g)) for g in grid])
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


def draw_streams(
    rng: np.random.Generator,
    paths: int,
    *,
    base_events: float,
    horizon: float,
    step: float,
    change_at: float = math.inf,
    ratio: float = 1.0,
) -> Walk:
    """Draw streams of rate 1 with their baselines; ``step`` 0 means located events, else Poisson counts.

    ``base_events`` may be ``inf`` (rate known). A change multiplies the rate by ``ratio`` from exposure
    ``change_at`` on. ``horizon`` is in expected events of the steady stream.
    """
    known = math.isinf(base_events)
    if step <= 0:
        n_steps = int(horizon * max(1.0, min(ratio, 3.0)) + 6 * math.sqrt(horizon) + 20)
        e = rng.exponential(1.0, (paths, n_steps))
        if math.isfinite(change_at):
            ends = np.cumsum(e, axis=1)
            starts = ends - e
            # time-change of a unit Poisson process: past the change the operational clock runs `ratio` faster
            warp = np.where(ends <= change_at, ends, change_at + (ends - change_at) / ratio)
            warp0 = np.where(starts <= change_at, starts, change_at + (starts - change_at) / ratio)
            e = warp - warp0
        counts = np.ones(e.shape, dtype=np.int64)
        base_n = np.full(paths, 1.0 if known else base_events)
        base_t = np.ones(paths) if known else rng.gamma(base_events, 1.0, paths)
        return Walk(e, counts, located=True, base_events=base_n, base_exposure=base_t, known=known)
    n_steps = max(1, math.ceil(horizon / step))
    e = np.full((paths, n_steps), step)
    position = np.arange(n_steps) * step
    rate = np.where(position >= change_at, ratio, 1.0)
    counts = rng.poisson(e * rate)
    if known:
        ones = np.ones(paths)
        return Walk(e, counts, located=False, base_events=ones, base_exposure=ones, known=True)
    base_n, base_t = np.zeros(paths), np.zeros(paths)
    short = np.ones(paths, dtype=bool)
    while short.any():
        base_n[short] += rng.poisson(step, int(short.sum()))
        base_t[short] += step
        short = base_n < base_events
    return Walk(e, counts, located=False, base_events=base_n, base_exposure=base_t, known=False)


def _poisson_tail_log(
    counts: FloatArray, exposure: FloatArray, m: FloatArray, t: FloatArray, *, known: bool
) -> FloatArray:
    """Ln P(N >= counts) of a step, predictive (negative binomial) or Poisson."""
    from scipy.special import betainc, gammainc

    n = np.maximum(counts, 1)
    tail = gammainc(n, exposure / t) if known else betainc(n, m, exposure / (exposure + t))
    return np.asarray(np.where(counts > 0, np.log(np.maximum(tail, 1e-300)), 0.0))


def _floor_ok(
    n: FloatArray, exposure: FloatArray, m: FloatArray, t: FloatArray, *, known: bool
) -> FloatArray:
    """P(N <= n) of the stretch is at most the floor's probability."""
    from scipy.special import betaincc, gammaincc

    tail = gammaincc(n + 1.0, exposure / t) if known else betaincc(n + 1.0, m, exposure / (exposure + t))
    return np.asarray(tail <= p.FLOOR_PROBABILITY)


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
    x, c, known = streams.exposure, streams.counts, streams.known
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
    last_event = np.zeros(paths)
    maxima = np.full(paths, -np.inf)
    alerts: list[FloatArray] = []
    live = np.ones(paths, dtype=bool)
    rows = np.arange(paths)
    log_gap, log_count, log_min = math.log(p.GAP_WEIGHT), math.log(p.COUNT_WEIGHT), math.log(p.MIN_LEVEL)

    def strength(part: slice, n_now: FloatArray, end: FloatArray) -> tuple[FloatArray, FloatArray]:
        span = np.maximum(end[:, None] - start[:, part], 0.0)
        w = evidence_array(_RATIOS[part], n_now, span, m[:, None], t[:, None], known=known)
        return w, span

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
                muted_until[q, side] = -1.0
        on = muted_until < 0
        log_rate = np.zeros(paths) if known else np.log(m / t)
        inside = live & (end <= horizon)

        # event-free part first where events are located, or the step has none
        free = np.ones(paths, dtype=bool) if streams.located else count == 0
        w, span = strength(down, n[:, down], end)
        best = np.full(paths, -np.inf)
        for j in range(w.shape[1]):
            good = free & (w[:, j] > 0.5) & on[:, 1]
            if good.any():
                q = np.nonzero(good)[0]
                q = q[_floor_ok(n[q, _N_UP + j], span[q, j], m[q], t[q], known=known)]
                best[q] = np.maximum(best[q], levels[_N_UP + j](w[q, j]))
        gap = end - np.maximum(last_event, start[:, down].min(axis=1))
        log_p = -gap / t if known else -m * np.log1p(gap / t)
        rule = log_gap - log_p
        best = np.where(
            free & on[:, 1] & (log_p <= math.log(p.FLOOR_PROBABILITY)), np.maximum(best, rule), best
        )

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
            good = (w[:, j] > 0.5) & (n[:, j] >= p.MIN_EVENTS_WORSE) & (count > 0) & on[:, 0]
            worst = np.where(good, np.maximum(worst, levels[j](w[:, j])), worst)
        if streams.located:
            gap = x[:, k - 1]
            tail = -np.expm1(-gap / t) if known else -np.expm1(-m * np.log1p(gap / t))
            rule = log_gap - np.log(np.maximum(tail, 1e-300))
            worst = np.where(on[:, 0] & (k > 1), np.maximum(worst, rule), worst)
        else:
            tail_log = _poisson_tail_log(count, x[:, k - 1], m, t, known=known)
            rule = log_count - tail_log + np.log(x[:, k - 1]) + log_rate
            worst = np.where(on[:, 0] & (count >= p.MIN_EVENTS_WORSE), np.maximum(worst, rule), worst)

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
        last_event = np.where(count > 0, end, last_event)

        if log_allowed is None:
            strongest = np.maximum(best, worst)
            strongest = np.where(strongest >= log_min, strongest - log_rate, -np.inf)
            maxima = np.where(inside, np.maximum(maxima, strongest), maxima)
        else:
            limit = np.maximum(log_allowed + log_rate, log_min)
            for side, sign, value in ((1, -1.0, best), (0, 1.0, worst)):
                hit = inside & (value >= limit)
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
    )
    _, alerts = walk(part, levels, horizon=horizon, grow_to=grow_to, log_allowed=log_allowed, mute=mute)
    alerts[:, 0] = hot[alerts[:, 0].astype(int)]
    return alerts
