"""Beside a monthly rate chart: `python tests/bench/monthly.py`.

Rate known, change at the turn of a month. Mean months to the signal of a chart of monthly rates with 3-sigma
limits, of an exact monthly Poisson limit, and of gapbell's rules together, all at the same false alerts a year:
those that the 3-sigma limits raise (both sides), measured for each. Drawn lots at the exact limit make its rate
the same; a real one would be slower still. Independent of the engine: the charts' months are exact.
"""

from __future__ import annotations

import math

import detection
from scipy.stats import poisson

from rules import simulate

RATIOS = (1.5, 2.0, 3.0, 5.0, 1 / 2, 1 / 3, 1 / 5)


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


def main() -> None:
    """Print one table for each yearly rate."""
    levels = simulate.log_level_functions()
    for yearly in (4.0, 15.0, 60.0):
        mean = yearly / 12.0
        alpha = sigma_chart(mean, 1.0)
        apart = yearly / (12.0 * alpha)
        limit = detection.limit_for(levels, apart)
        none = float(poisson.pmf(0, mean))
        print(
            f"{yearly:g} events a year ({none:.0%} of months without any), {12 * alpha:.2f} false alerts a year"
        )
        print("  change    3-sigma   exact limit   gapbell   (mean months to the signal)")
        for ratio in RATIOS:
            ours = detection.delay(levels, limit, ratio, apart) / mean
            name = f"x{ratio:g}" if ratio > 1 else f"/{1 / ratio:g}"
            chart, exact = 1 / max(sigma_chart(mean, ratio), 1e-12), 1 / exact_chart(mean, ratio, alpha)
            text = f"{chart:9.1f}" if chart < 1e6 else "    never"
            print(f"  {name:<8} {text}   {exact:9.1f}   {ours:9.1f}", flush=True)


if __name__ == "__main__":
    main()
