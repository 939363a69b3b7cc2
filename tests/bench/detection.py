"""Delay to an alert against the best possible: `python tests/bench/detection.py`.

Known rate, all rules, both directions, at one false alert in 50, 200 and 1,000 expected events (measured with
restarts off, from a zero start). The floor is the CUSUM tuned to exactly the change, given its own direction's
half of the false alerts (Moustakides 1986); its run lengths are exact. Below it the growing baseline: twelve
first events, two steady years with 20 events, one false alert in 20 years, against the same with the rate known.
Last, beside a monthly rate chart at the same false alerts a year.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.stats import poisson

from rules import protocol, simulate
from rules.calibration import Calibration
from rules.run_length import cusum_limit, gap_cusum_run_length

RATIOS = (1.25, 1.5, 2.0, 3.0, 5.0, 10.0)
PATHS = 4000


def tuned_delay(ratio: float, apart: float) -> float:
    """Mean exposure to the alert of the exactly tuned CUSUM, one false alert in ``apart`` events a side."""
    h, k, c = cusum_limit(ratio, apart), abs(math.log(ratio)), abs(ratio - 1.0)
    if ratio > 1:
        return (1.0 + gap_cusum_run_length(k / c, (h - k) / c, "worse", mean_gap=1 / ratio)) / ratio
    return (gap_cusum_run_length(k / c, (h - k) / c, "better", mean_gap=1 / ratio) - 1.0) / ratio


def limit_for(levels, apart: float) -> float:
    """Ln of the level at which all rules together raise one false alert in ``apart`` expected events."""
    rng = np.random.default_rng(1)
    streams = simulate.draw_streams(rng, PATHS, base_events=math.inf, horizon=2 * apart, step=0.0)
    maxima, _ = simulate.walk(streams, levels, horizon=2 * apart)
    # the share of paths without an alert within 2 apart, at an about constant hazard
    return float(np.quantile(maxima, math.exp(-2.0)))


def delay(levels, limit: float, ratio: float, apart: float) -> float:
    """Mean exposure to the alert in the right direction.

    The simulation notes `better` at the end of the gap in the middle of which it rose; what was left of that
    gap is exponential, with mean 1 / ratio, and is taken off.
    """
    horizon = 60.0 + 14.0 * tuned_delay(ratio, apart)
    rng = np.random.default_rng([2, int(ratio * 100)])
    streams = simulate.draw_streams(
        rng, PATHS // 2, base_events=math.inf, horizon=horizon, step=0.0, change_at=0.0, ratio=ratio
    )
    _, alerts = simulate.walk(streams, levels, horizon=horizon, log_allowed=limit, mute=1e9)
    right = alerts[alerts[:, 2] == (1.0 if ratio > 1 else -1.0)]
    first = np.full(PATHS // 2, horizon)
    np.minimum.at(first, right[:, 0].astype(int), right[:, 1])
    return float(first.mean()) - (1.0 / ratio if ratio < 1 else 0.0)


def known_rate() -> None:
    """Print the ratios to the best possible."""
    levels = simulate.log_level_functions()
    for apart in (50.0, 200.0, 1000.0):
        limit = limit_for(levels, apart)
        both = [*RATIOS, *(1.0 / r for r in RATIOS)]
        cells = [(r, delay(levels, limit, r, apart) / tuned_delay(r, 2 * apart)) for r in both]
        text = "  ".join(f"{'x' if r > 1 else '/'}{max(r, 1 / r):g} {v:.2f}" for r, v in cells)
        print(f"one false alert in {apart:g} events:  {text}", flush=True)


def growing(ratio: float = 2.0) -> None:
    """Print median delays after two steady years, in mean gaps."""
    levels = simulate.log_level_functions()
    yearly, budget, change, horizon = 10.0, 0.05, 20.0, 140.0
    medians = {}
    for base, grow in ((12.0, 60.0), (32.0, 0.0), (math.inf, 0.0)):
        rng = np.random.default_rng([3, int(min(base, 999))])
        streams = simulate.draw_streams(
            rng, PATHS, base_events=base, horizon=horizon, step=0.0, change_at=change, ratio=ratio
        )
        rule = Calibration(base, grow, 0.0, budget)
        allowed = rule.log_kappa(yearly) + math.log(yearly / budget)
        _, alerts = simulate.walk(
            streams, levels, horizon=horizon, grow_to=grow, log_allowed=allowed, mute=protocol.SETTLE_YEARS * yearly,
        )  # fmt: skip
        late = alerts[(alerts[:, 2] > 0) & (alerts[:, 1] > change)]
        first = np.full(PATHS, np.inf)
        np.minimum.at(first, late[:, 0].astype(int), late[:, 1] - change)
        medians[base] = float(np.median(first))
    known = medians[math.inf]
    print(
        f"x{ratio:g} after two steady years: 12 first events, grown {medians[12.0]:.1f} ({medians[12.0] / known:.2f}),"
        f" 32 frozen {medians[32.0]:.1f} ({medians[32.0] / known:.2f}), known {known:.1f}",
        flush=True,
    )


MONTHLY_RATIOS = (1.5, 2.0, 3.0, 5.0, 1 / 2, 1 / 3, 1 / 5)


def sigma_chart(mean: float, ratio: float) -> float:
    """Probability of a point outside 3-sigma limits."""
    width = 3.0 * math.sqrt(mean)
    rate = mean * ratio
    above = float(poisson.sf(math.floor(mean + width), rate))
    below = float(poisson.cdf(math.ceil(mean - width) - 1, rate)) if mean - width > 0 else 0.0
    return above + below


def exact_chart(mean: float, ratio: float, alpha: float) -> float:
    """Probability of a point outside exact limits of alpha / 2 on each side, lots drawn on the limits."""
    rate = mean * ratio
    c = int(poisson.isf(alpha / 2, mean)) + 1
    share = (alpha / 2 - float(poisson.sf(c - 1, mean))) / float(poisson.pmf(c - 1, mean))
    above = float(poisson.sf(c - 1, rate)) + share * float(poisson.pmf(c - 1, rate))
    d = -1
    while float(poisson.cdf(d + 1, mean)) <= alpha / 2:
        d += 1
    part = (alpha / 2 - float(poisson.cdf(d, mean))) / float(poisson.pmf(d + 1, mean))
    below = float(poisson.cdf(d, rate)) + part * float(poisson.pmf(d + 1, rate))
    return above + below


def beside_monthly() -> None:
    """Print, for each yearly rate, mean months to the signal at the same false alerts a year.

    A chart of monthly rates with 3-sigma limits, an exact monthly Poisson limit (lots drawn on it, or it would be
    slower still) and all rules together; rate known, change at the turn of a month, the charts' months exact.
    """
    levels = simulate.log_level_functions()
    for yearly in (4.0, 15.0, 60.0):
        mean = yearly / 12.0
        alpha = sigma_chart(mean, 1.0)
        apart = yearly / (12.0 * alpha)
        limit = limit_for(levels, apart)
        none = float(poisson.pmf(0, mean))
        print(
            f"{yearly:g} events a year ({none:.0%} of months without any), {12 * alpha:.2f} false alerts a year"
        )
        print("  change    3-sigma   exact limit   gapbell   (mean months to the signal)")
        for ratio in MONTHLY_RATIOS:
            ours = delay(levels, limit, ratio, apart) / mean
            name = f"x{ratio:g}" if ratio > 1 else f"/{1 / ratio:g}"
            chart, exact = 1 / max(sigma_chart(mean, ratio), 1e-12), 1 / exact_chart(mean, ratio, alpha)
            text = f"{chart:9.1f}" if chart < 1e6 else "    never"
            print(f"  {name:<8} {text}   {exact:9.1f}   {ours:9.1f}", flush=True)


if __name__ == "__main__":
    known_rate()
    growing(2.0)
    growing(3.0)
    beside_monthly()
