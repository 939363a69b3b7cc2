"""Exact mean run lengths of CUSUM schemes on exponential gaps and on Poisson counts.

All schemes on gaps rest on one function, the scale function of a Poisson process with drift (``_Ladder``):
the mean first passage of such a process reflected at its highest or lowest value is a formula in it.
"""

from __future__ import annotations

import math
from bisect import bisect_left
from dataclasses import dataclass, replace
from decimal import Decimal, localcontext
from fractions import Fraction
from functools import lru_cache
from typing import Literal

from rules.model import Direction

__all__ = ["count_cusum_run_length", "cusum_level", "cusum_limit", "gap_cusum_run_length"]

_MIN_RATIO, _MAX_RATIO = 0.01, 100.0
_NEAREST_TO_ONE = 0.999e-3
_PER_JUMP, _PER_LARGE_JUMP = 32, 128
"""Points of a table per jump ln δ, for δ up to 10 and above: linear between them is right to 0.1 %."""
_MOST_JUMPS = 45
"""The closed tail takes over after so many jumps at the latest; it is usually right to 1e-6 after ten."""
_TAIL_AGREES = 1e-6
_ROUNDING = 1e-9
"""An evidence of ln δ within this relative distance is one event's evidence, not a hair more."""
_LARGEST_CHAIN = 3_000
_MOST_JUMPS_EXACT = 600
_BEYOND_FLOATS = 1_500.0
"""A run length grows as e^decay a jump, and floats end at e^709; twice that leaves room for its factor."""


class _Ladder:
    """Scale function W of ``c t − a N(t)``, N a unit Poisson process, at x = (n + f) a for n = 0, 1, 2, ….

    ``W(x) = (1/c) Σ_j (−y_j)^j e^{y_j} / j!`` over ``y_j = (x − j a)/c >= 0`` (the waiting-time series of
    Erlang, 1909), which solves ``c W'(x) = W(x) − W(x − a)``. Its terms alternate and cancel, so that the sum
    is taken in decimal arithmetic; the caller sets the precision.
    """

    __slots__ = ("_growth", "_next", "_terms", "_unit", "_y", "_ys", "area", "drift", "scale", "slope")

    def __init__(self, jump: Decimal, drift: Decimal, offset: Decimal) -> None:
        self._unit = jump / drift
        self._growth = self._unit.exp()
        self._y = offset * self._unit
        self._next = self._y.exp()
        self._ys: list[Decimal] = []
        self._terms: list[Decimal] = []
        self.drift = drift
        self.scale = Decimal(0)
        self.slope = Decimal(0)
        self.area = Decimal(0)

    def climb(self) -> None:
        """Go up by one jump: ``scale`` W, ``slope`` its derivative (from the right), ``area`` its integral."""
        n = len(self._ys)
        self._terms = [q * y / (m - n) for m, (q, y) in enumerate(zip(self._terms, self._ys, strict=True))]
        self._ys.append(self._y)
        self._terms.append(self._next)
        self._y += self._unit
        self._next *= self._growth
        below = self.scale
        self.scale = sum(self._terms, Decimal(0)) / self.drift
        self.slope = (self.scale - below) / self.drift
        self.area += self.drift * self.scale - 1


def _digits(jumps: float, unit: float, decay: float) -> int:
    """Decimal digits that leave about 30 after the cancellation over so many jumps.

    The largest term grows by less than e^(unit + 1) a jump (``unit`` is jump / drift), while the slope of W
    shrinks by e^decay.
    """
    return 30 + int(jumps * (unit + 1.0 + decay) / math.log(10.0))


def _decay(unit: float) -> float:
    """Root z > 0 of ``z / unit = e^z − 1``, 0 if there is none: by e^z a jump falls the slope of W."""
    if unit >= 1.0:
        return 0.0
    z = 2.0 - 2.0 * math.log(unit)
    for _ in range(60):
        # Newton from the right on a convex function: it falls to the root and stays there
        z -= (math.expm1(z) - z / unit) / (math.exp(z) - 1.0 / unit)
    return z


def _ladder_at(x: Decimal, jump: Decimal) -> _Ladder:
    """Ladder of drift 1 climbed to x; the caller sets the precision."""
    steps = x / jump
    n = int(steps)
    ladder = _Ladder(jump, Decimal(1), steps - n)
    for _ in range(n + 1):
        ladder.climb()
    return ladder


@dataclass(frozen=True, slots=True)
class _Member:
    """Level of one design ratio: closed below ``first``, a table of ln level up to ``top``, closed beyond.

    Beyond the table it is ``grow e^h − line h − rest``, which collects the residues at 1 (−1 for δ > 1) and
    0 of the Laplace transform of W; what it leaves out dies away exponentially, and the table reaches to
    where it is gone.
    """

    worse: bool
    jump: float
    drift: float
    first: float
    step: float
    log_levels: tuple[float, ...]
    top: float
    grow: float
    line: float
    rest: float

    def head(self, statistic: float) -> float:
        """Level below the table."""
        if statistic <= 0.0:
            return 0.0
        if not self.worse:
            return math.expm1(statistic / self.drift)
        over = (statistic - self.jump) / self.drift
        if over <= _ROUNDING * self.jump / self.drift:
            return 1.0
        return 2.0 + math.exp(over) / (math.expm1(self.jump / self.drift) - over)

    def tail(self, statistic: float) -> float:
        """Level beyond the table."""
        if statistic > 600.0:
            return math.inf if statistic > 700.0 else math.exp(statistic + math.log(self.grow))
        return self.grow * math.exp(statistic) - self.line * statistic - self.rest


@lru_cache(maxsize=512)
def _member(ratio: float) -> _Member:
    """Tabulate one design ratio; a few milliseconds, then kept."""
    if not (_MIN_RATIO <= ratio <= _MAX_RATIO) or abs(ratio - 1.0) < _NEAREST_TO_ONE:
        raise ValueError(
            f"design ratio {ratio!r} must lie between {_MIN_RATIO} and {_MAX_RATIO}, not within 0.001 of 1"
        )
    worse = ratio > 1.0
    a, c = abs(math.log(ratio)), abs(ratio - 1.0)
    with localcontext() as context:
        context.prec = _digits(_MOST_JUMPS, a / c, a)
        delta = Decimal(ratio)
        jump, drift = abs(delta.ln()), abs(delta - 1)
        net = abs(drift - jump)
        if worse:
            grow = (jump * delta - drift) / net**2
            line, rest = 1 / net, 2 / net - (jump / net) ** 2 / 2
        else:
            grow = 1 / (drift - jump * delta)
            line, rest = 1 / net, (jump / net) ** 2 / 2
        first = 2 * a if worse else a
        per_jump = _PER_JUMP if ratio <= 10.0 else _PER_LARGE_JUMP
        step = a / per_jump
        closed = _Member(worse, a, c, first, step, (), math.nan, float(grow), float(line), float(rest))
        ladders = [_Ladder(jump, drift, Decimal(i) / per_jump) for i in range(per_jump)]
        for ladder in ladders:
            ladder.climb()
        levels: list[float] = []
        for n in range(1, _MOST_JUMPS):
            apart = 0.0
            for i, ladder in enumerate(ladders):
                ladder.climb()
                level = float(ladder.scale**2 / ladder.slope - ladder.area if worse else ladder.area)
                if n > 1 or not worse:
                    levels.append(math.log(level))
                apart = max(apart, abs(closed.tail((n + i / per_jump) * a) / level - 1.0))
            if apart < _TAIL_AGREES:
                break
    top = first + len(levels) * step
    levels.append(math.log(closed.tail(top)))
    return replace(closed, log_levels=tuple(levels), top=top)


def cusum_level(design_ratio: float, statistic: float) -> float:
    """Mean exposure between false signals of a CUSUM whose limit is ``statistic``.

    Parameters
    ----------
    design_ratio : float
        Rate ratio δ the CUSUM is designed for, 0.01 to 100, not within 0.001 of 1; below 1 it watches for fewer events.
    statistic : float
        Limit in log-likelihood units.

    Returns
    -------
    float
        In expected events of the steady, known rate; ``inf`` beyond the largest float.

    Notes
    -----
    ``W ← max(0, W + n ln δ − (δ−1) λ e)``, zero start, watched continuously: with δ > 1 it jumps at events
    and signals there; with δ < 1 it rises during a gap and signals in the middle of it (Page 1954; Lucas
    1985). With the scale function W of the unreflected path (see ``_Ladder``) the level is
    ``W(h)²/W'(h) − ∫W`` for δ > 1 and ``∫W`` for δ < 1, integrals from 0 to h (Avram, Kyprianou & Pistorius
    2004; Pistorius 2004). A single event reaches ln δ, so for δ > 1 any limit up to that has level 1. Below
    the first kinks and far out closed forms serve; in between exact values are tabulated once per ratio, and
    ln level is interpolated, with a relative error below 0.1 % (``tests/rules/test_run_length.py``).

    Examples
    --------
    >>> round(cusum_level(2.0, 3.0), 1)
    68.6
    >>> round(cusum_level(0.5, 3.0), 1)
    108.9
    """
    member = _member(design_ratio)
    if statistic > member.top:
        return member.tail(statistic)
    if statistic < member.first:
        return member.head(statistic)
    at = (statistic - member.first) / member.step
    i = min(int(at), len(member.log_levels) - 2)
    low = member.log_levels[i]
    return math.exp(low + (at - i) * (member.log_levels[i + 1] - low))


def _limit_below_table(member: _Member, level: float) -> float:
    """Inverse of ``_Member.head``."""
    if not member.worse:
        return member.drift * math.log1p(level)
    if level <= 1.0:
        return 5e-324
    room = math.expm1(member.jump / member.drift)
    least = _ROUNDING * 2.0 * member.jump / member.drift
    if level <= 2.0 + 1.0 / room:
        # just above one event's evidence, where the level jumps from 1
        return member.jump + least * member.drift
    over = member.jump / member.drift
    for _ in range(60):
        # Newton on u − ln(room − u), which rises and bends up: from the right it falls to the root
        move = (over - math.log((room - over) * (level - 2.0))) / (1.0 + 1.0 / (room - over))
        over -= move
        if abs(move) < 1e-15:
            break
    return member.jump + max(over, least) * member.drift


def cusum_limit(design_ratio: float, level: float) -> float:
    """Smallest limit at which :func:`cusum_level` is at least ``level``.

    Parameters
    ----------
    design_ratio : float
        As in :func:`cusum_level`.
    level : float
        Wanted mean exposure between false signals, in expected events.

    Returns
    -------
    float
        In log-likelihood units; 0 for a level of 0 or less.

    Examples
    --------
    >>> round(cusum_limit(2.0, cusum_level(2.0, 5.0)), 9)
    5.0
    """
    if level <= 0:
        return 0.0
    if math.isinf(level):
        return math.inf
    member = _member(design_ratio)
    wanted = math.log(level)
    logs = member.log_levels
    if wanted < logs[0]:
        return _limit_below_table(member, level)
    if wanted <= logs[-1]:
        i = max(1, bisect_left(logs, wanted))
        share = (wanted - logs[i - 1]) / (logs[i] - logs[i - 1])
        return member.first + (i - 1 + share) * member.step
    h = max(member.top, wanted - math.log(member.grow))
    for _ in range(60):
        if h > 600.0:
            return wanted - math.log(member.grow)
        # Newton on ln level, which is nearly straight in h
        value = member.tail(h)
        slope = (member.grow * math.exp(h) - member.line) / value
        move = (wanted - math.log(value)) / slope
        h += move
        if abs(move) < 1e-13 * h:
            break
    return h


def gap_cusum_run_length(
    reference: float, limit: float, direction: Direction, *, mean_gap: float = 1.0, start: float = 0.0
) -> float:
    """Mean number of events until a CUSUM of exponential gaps signals, looked at only at events.

    Parameters
    ----------
    reference, limit : float
        Reference value k and limit h, in the unit of the gaps, both > 0.
    direction : {"worse", "better"}
        "worse" is ``S ← max(0, S + k − X)``, "better" is ``S ← max(0, S + X − k)``; signal at S >= h.
    mean_gap : float
        True mean of the gaps.
    start : float
        Head start, 0 up to below ``limit``.

    Returns
    -------
    float
        ``inf`` beyond the largest float.

    Notes
    -----
    Worse: ``W(H−u) W(H)/W'(H) − ∫_0^{H−u} W`` with H = h + k, u = start + k; better:
    ``1 + ∫_start^{H} W``; W as in ``_Ladder`` with jump k and drift 1, all divided by the mean gap. For
    h <= k these are the closed forms of Vardeman & Ray (1985). Summed in decimal arithmetic, so that a large
    h/k costs time, never digits.

    Examples
    --------
    >>> round(gap_cusum_run_length(0.7, 4.0, "worse"), 9)
    382.311103034
    >>> round(gap_cusum_run_length(2.0, 1.5, "better"), 9)
    29.874607424
    """
    if not (reference > 0 and limit > 0 and mean_gap > 0 and 0 <= start < limit):
        raise ValueError(
            f"reference {reference!r}, limit {limit!r} and mean gap {mean_gap!r} must be above 0, "
            f"and start {start!r} from 0 to below the limit"
        )
    jumps = (limit + reference) / reference
    if jumps > _MOST_JUMPS_EXACT:
        raise ValueError(f"limit {limit!r} is more than {_MOST_JUMPS_EXACT} times reference {reference!r}")
    decay = _decay(reference / mean_gap) if direction == "worse" else 0.0
    if jumps * decay > _BEYOND_FLOATS:
        return math.inf
    with localcontext() as context:
        context.prec = _digits(jumps + 1, reference / mean_gap, decay)
        unit = Decimal(mean_gap)
        k, h, s = Decimal(reference) / unit, Decimal(limit) / unit, Decimal(start) / unit
        top = _ladder_at(h + k, k)
        if direction == "better":
            return float(1 + top.area - (_ladder_at(s, k).area if s else 0))
        left = _ladder_at(h - s, k)
        return float(left.scale * top.scale / top.slope - left.area)


def count_cusum_run_length(
    reference: float,
    limit: float,
    mean: float,
    *,
    direction: Direction = "worse",
    start: float = 0.0,
    signal: Literal[">=", ">"] = ">=",
) -> float:
    """Mean number of counts until a CUSUM of Poisson counts signals.

    Parameters
    ----------
    reference, limit : float
        Reference value k and limit h; k, h and ``start`` must be multiples of one fraction 1/d, d <= 1000.
    mean : float
        True mean of the counts, > 0.
    direction : {"worse", "better"}
        "worse" is ``S ← max(0, S + C − k)``, "better" is ``S ← max(0, S + k − C)``.
    start : float
        Head start, 0 up to below ``limit``.
    signal : {">=", ">"}
        Whether reaching the limit already signals. On a lattice this changes much: 422 against 655 counts in
        the example.

    Returns
    -------
    float

    Notes
    -----
    A finite Markov chain on the multiples of 1/d below the limit, solved exactly (Brook & Evans 1972; Lucas
    1985).

    Examples
    --------
    >>> round(count_cusum_run_length(5, 10, 4.0), 2)
    421.65
    >>> round(count_cusum_run_length(5, 10, 4.0, signal=">"), 2)
    655.48
    """
    if not (reference > 0 and limit > 0 and mean > 0 and 0 <= start < limit):
        raise ValueError(
            f"reference {reference!r}, limit {limit!r} and mean {mean!r} must be above 0, "
            f"and start {start!r} from 0 to below the limit"
        )
    parts = [Fraction(v).limit_denominator(1_000) for v in (reference, limit, start)]
    if any(abs(float(f) - v) > 1e-9 for f, v in zip(parts, (reference, limit, start), strict=True)):
        raise ValueError(f"{reference!r}, {limit!r} and {start!r} are not multiples of one simple fraction")
    per_one = math.lcm(*(f.denominator for f in parts))
    k, h, first = (int(f * per_one) for f in parts)
    states = h if signal == ">=" else h + 1
    if states > _LARGEST_CHAIN:
        raise ValueError(f"the chain has {states} states; {_LARGEST_CHAIN} are allowed")
    import numpy as np
    from scipy.special import gammainc, gammaincc, gammaln

    # sums are in units of 1/d: a count of c moves by c d − k (worse) or k − c d (better)
    here, there = np.arange(states)[:, None], np.arange(states)[None, :]
    move = there - here + k if direction == "worse" else here + k - there
    count, odd = np.divmod(move, per_one)
    possible = (odd == 0) & (count >= 0)
    c = np.where(possible, count, 0)
    chain = np.where(possible, np.exp(c * math.log(mean) - mean - gammaln(c + 1.0)), 0.0)
    if direction == "worse":
        last = (k - here[:, 0]) // per_one
        chain[:, 0] = np.where(last >= 0, gammaincc(np.maximum(last, 0) + 1.0, mean), 0.0)
    else:
        least = -((-here[:, 0] - k) // per_one)
        chain[:, 0] = gammainc(np.maximum(least, 1), mean)
    return float(np.linalg.solve(np.eye(states) - chain, np.ones(states))[first])
