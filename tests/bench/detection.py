"""Delay to an alert against the best possible: `python tests/bench/detection.py`.

Known rate, all rules, both directions, at one false alert in 50, 200 and 1,000 expected events (measured with
restarts off, from a zero start). The floor is the CUSUM tuned to exactly the change, given its own direction's
half of the false alerts (Moustakides 1986); its run lengths are exact. Below it the growing baseline: twelve
first events, two steady years with 20 events, one false alert in 20 years, against the same with the rate known.
"""

from __future__ import annotations

import math

import numpy as np

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


if __name__ == "__main__":
    known_rate()
    growing(2.0)
    growing(3.0)
