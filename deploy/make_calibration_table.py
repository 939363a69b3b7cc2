"""Makes rules/data/calibration.json by seeded simulation: `python deploy/make_calibration_table.py [--quick]`.

For each first baseline, growth, step size, yearly rate and yearly budget it finds kappa: the factor by which
each single rule's expected exposure between its own false signals must exceed the stream's allowed one, so
that all rules together raise 6 b false alerts in the first six years. Minutes to half an hour on 2 cores.
"""

from __future__ import annotations

import argparse
import hashlib
import json
import math
import time
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np

from rules import protocol, simulate

SEED = 20261201
BASES = (4.0, 6.0, 9.0, 14.0, 25.0, 60.0, 150.0, math.inf)
FEW_BASES = {4.0, 9.0, 25.0, 60.0, 150.0, math.inf}
DISPERSED_STEPS = {2.0: {0.0, 0.5, 3.0}, 5.0: {0.0, 3.0}}
"""At 5 and half an event a step kappa runs into its upper end everywhere; what lies between is interpolated."""
YEARLY = (0.5, 1.5, 5.0, 15.0, 50.0)
BUDGETS = (0.5, 0.2, 0.07, 0.02, 0.007, 0.002)
STEPS = (0.0, 0.5, 1.5, 3.0, 6.0, 10.0, 15.0)
INDICES = (1.0, 2.0, 5.0)
GROW_TO = 60.0
PATHS = 10_000
GROUPED_PATHS = 4_000
"""For steps of counts, whose cells are many; 14 % noise at the smallest budget."""
DISPERSED_PATHS = 1_500
"""For over-dispersed streams, whose tails are slow; 25 % noise at the smallest budget."""
ALERTS_WANTED = 1_200


def kappas(job: tuple[float, bool, float, float, float, int]) -> list[float]:
    """ln kappa per budget for one baseline, growth, step, index and yearly rate."""
    base, grows, step, index, yearly, paths = job
    levels = simulate.log_level_functions()
    horizon = protocol.YEARS * yearly
    grow_to = GROW_TO if grows else 0.0
    paths = paths if yearly < 40 else paths // 2
    rng = np.random.default_rng(
        [SEED, int(min(base, 1e6)), int(grows), int(step * 10), int(index), int(yearly * 10)]
    )
    streams = simulate.draw_streams(rng, paths, base_events=base, horizon=horizon, step=step, index=index)
    maxima, _ = simulate.walk(streams, levels, horizon=horizon, grow_to=grow_to)
    out = []
    for budget in BUDGETS:
        promised = protocol.YEARS * budget
        use = min(paths, max(400, int(ALERTS_WANTED / promised)))
        part = simulate.Walk(
            streams.exposure[:use],
            streams.counts[:use],
            streams.located,
            streams.base_events[:use],
            streams.base_exposure[:use],
            streams.known,
            streams.index,
        )
        low, high = math.log(0.02), math.log(60.0)
        for _ in range(9):
            middle = (low + high) / 2
            alerts = simulate.false_alerts(
                part,
                levels,
                maxima[:use],
                log_allowed=middle + math.log(yearly / budget),
                horizon=horizon,
                mute=protocol.SETTLE_YEARS * yearly,
                grow_to=grow_to,
            )
            if len(alerts) / use > promised:
                low = middle
            else:
                high = middle
        out.append(round((low + high) / 2, 3))
    return out


def _paths(step: float, index: float) -> int:
    if index > 1.0:
        return DISPERSED_PATHS
    return PATHS if step == 0.0 else GROUPED_PATHS


def main() -> None:
    """Run every cell and write the table."""
    ask = argparse.ArgumentParser(description=__doc__)
    ask.add_argument("--quick", action="store_true", help="a twentieth of the paths, to try the script")
    ask.add_argument(
        "--out", type=Path, default=Path(__file__).parents[1] / "rules" / "data" / "calibration.json"
    )
    choice = ask.parse_args()
    share = 20 if choice.quick else 1
    cells = [
        (base, grows, step, index, yearly, _paths(step, index) // share)
        for index in INDICES
        for step in STEPS
        for grows in (True, False)
        for base in BASES
        for yearly in YEARLY
        if not (grows and base >= GROW_TO)
        and ((step == 0 and index == 1) or base in FEW_BASES)
        and (index == 1 or step in DISPERSED_STEPS[index])
    ]
    began = time.time()
    table: dict[str, list[float]] = {}
    with ProcessPoolExecutor(2) as pool:
        for cell, row in zip(cells, pool.map(kappas, cells), strict=True):
            base, grows, step, index, yearly, _ = cell
            table[f"{base:g}|{int(grows)}|{step:g}|{index:g}|{yearly:g}"] = row
            print(
                f"{time.time() - began:6.0f} s  {base:g} grows={grows} step={step:g} index={index:g} yearly={yearly:g}: {row}",
                flush=True,
            )
    body = {
        "protocol": protocol.PROTOCOL_VERSION,
        "seed": SEED,
        "paths": [PATHS // share, GROUPED_PATHS // share, DISPERSED_PATHS // share],
        "script": "deploy/make_calibration_table.py",
        "bases": ["inf" if math.isinf(b) else b for b in BASES],
        "yearly": YEARLY,
        "budgets": BUDGETS,
        "steps": STEPS,
        "indices": INDICES,
        "log_kappa": table,
    }
    text = json.dumps(body, sort_keys=True)
    body["sha256"] = hashlib.sha256(text.encode()).hexdigest()
    choice.out.parent.mkdir(exist_ok=True)
    choice.out.write_text(json.dumps(body, sort_keys=True, indent=0) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
