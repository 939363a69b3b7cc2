"""How many false alerts steady streams really raise, against the promise: `python tests/bench/promise.py`.

Fresh seeds, six years, restarts; the limit's kappa is looked up at the yearly rate that each stream's own
baseline gives, as in use. One line per cell: measured / promised with its standard error, then year by year.
"""

from __future__ import annotations

import math

import numpy as np

from rules import protocol, simulate
from rules.calibration import Calibration

PATHS = 3000


def measure(base: float, step: float, yearly: float, budget: float) -> None:
    """Print one cell."""
    levels = simulate.log_level_functions()
    horizon = protocol.YEARS * yearly
    rng = np.random.default_rng([4711, int(min(base, 999)), int(step * 10), int(yearly)])
    streams = simulate.draw_streams(rng, PATHS, base_events=base, horizon=horizon, step=step)
    rule = Calibration(base, 60.0, step, budget)
    seen = (
        yearly * streams.base_events / streams.base_exposure if not streams.known else np.full(PATHS, yearly)
    )
    kappa = np.array([rule.log_kappa(float(v)) for v in seen])
    alerts: list[np.ndarray] = []
    # streams of about equal kappa are walked together
    for group in np.array_split(np.argsort(kappa), 6):
        part = simulate.Walk(
            streams.exposure[group],
            streams.counts[group],
            streams.located,
            streams.base_events[group],
            streams.base_exposure[group],
            streams.known,
        )
        allowed = float(kappa[group].mean()) + math.log(yearly / budget)
        _, found = simulate.walk(
            part, levels, horizon=horizon, log_allowed=allowed, mute=protocol.SETTLE_YEARS * yearly
        )
        alerts.append(found)
    every = np.concatenate(alerts)
    promised = protocol.YEARS * budget * PATHS
    years = np.histogram(every[:, 1] / yearly, np.arange(7))[0] / (budget * PATHS)
    error = math.sqrt(len(every)) / promised
    print(
        f"first events {base:>4g}  step {step:>3g}  {yearly:>4g} a year  budget {budget:g}:"
        f"  {len(every) / promised:.2f} ± {error:.2f}   by year {np.round(years, 2).tolist()}",
        flush=True,
    )


if __name__ == "__main__":
    for cell in (
        (5, 0, 4, 0.1), (5, 0, 15, 0.1), (12, 0, 15, 0.1), (30, 0, 15, 0.1), (math.inf, 0, 15, 0.1), (12, 0, 60, 0.05),
        (12, 0.3, 15, 0.1), (12, 3, 30, 0.1), (12, 10, 100, 0.1),
    ):  # fmt: skip
        measure(*map(float, cell))
