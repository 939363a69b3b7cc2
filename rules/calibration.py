"""From a promised number of false alerts a year to the limits of all rules together, and back."""

from __future__ import annotations

import hashlib
import json
import math
from dataclasses import dataclass
from functools import lru_cache
from importlib import resources
from typing import Any

import numpy as np

from rules import protocol

__all__ = ["RECURRENCE_CAP_YEARS", "Calibration", "CalibrationError", "load_table"]

RECURRENCE_CAP_YEARS = 1000.0
"""Beyond this the simulation cannot resolve a recurrence interval; it is worded as "less than once in"."""

_FULL_GROWN = 60.0
"""The cap up to which the table's baselines grow."""

_FLOORED = -3.8
"""ln kappa at or below this means that the floors bind and the budget stays unspent."""


class CalibrationError(Exception):
    """The stored calibration table cannot be used with this version of the rules."""


@dataclass(frozen=True, slots=True)
class _Table:
    log_yearly: tuple[float, ...]
    log_budgets: tuple[float, ...]
    steps: dict[float, tuple[float, ...]]
    """Index of dispersion -> expected events of a step, rising."""
    indices: tuple[float, ...]
    cells: dict[tuple[bool, float, float], tuple[tuple[float, ...], Any]]
    """(grows, step, index) -> (1/m grid rising, array over base, yearly rate, budget)."""


@lru_cache(maxsize=1)
def load_table() -> _Table:
    """Read the stored table, refusing one that is damaged or of another protocol."""
    text = resources.files("rules").joinpath("data/calibration.json").read_text(encoding="utf-8")
    body = json.loads(text)
    want = body.pop("sha256", "")
    if hashlib.sha256(json.dumps(body, sort_keys=True).encode()).hexdigest() != want:
        raise CalibrationError(
            "The calibration table rules/data/calibration.json was altered after it was made."
        )
    if body["protocol"] != protocol.PROTOCOL_VERSION:
        raise CalibrationError(
            f"The calibration table is for protocol {body['protocol']}, the rules are {protocol.PROTOCOL_VERSION};"
            " run deploy/make_calibration_table.py."
        )
    yearly, budgets = body["yearly"], body["budgets"]
    rows: dict[tuple[bool, float, float, float], list[list[float]]] = {}
    for name in body["log_kappa"]:
        base, grows, step, index, _ = name.split("|")
        key = (grows == "1", float(step), float(index), float(base))
        if key not in rows:
            rows[key] = [_filled(body["log_kappa"][f"{base}|{grows}|{step}|{index}|{y:g}"]) for y in yearly]
    cells: dict[tuple[bool, float, float], tuple[tuple[float, ...], Any]] = {}
    for grows, step, index in {key[:3] for key in rows}:
        bases = {b for *cell, b in rows if tuple(cell) == (grows, step, index)}
        if grows:  # a baseline that starts at its full size does not grow
            full = {
                b for g, s, i, b in rows if (g, s, i) == (False, step, index) and b >= _FULL_GROWN
            } - bases
            rows |= {(grows, step, index, b): rows[False, step, index, b] for b in full}
            bases |= full
        order = sorted(bases, reverse=True)
        grid = tuple(0.0 if math.isinf(b) else 1.0 / b for b in order)
        cells[grows, step, index] = (grid, np.array([rows[grows, step, index, b] for b in order]))
    steps = {i: tuple(sorted({step for _, step, index in cells if index == i})) for i in body["indices"]}
    log_budgets = tuple(math.log(b) for b in budgets)
    return _Table(tuple(map(math.log, yearly)), log_budgets, steps, tuple(body["indices"]), cells)


def _filled(row: list[float]) -> list[float]:
    """Where the floors bind, carry the next smaller budget's factor: safe, since the floors hold anyway."""
    out = list(row)
    for i in range(len(out) - 2, -1, -1):
        if out[i] <= _FLOORED:
            out[i] = out[i + 1]
    return out


def _bracket(grid: tuple[float, ...], value: float) -> tuple[int, float]:
    """Return the lower neighbour and the share of the way to the next; rising or falling grids, clamped."""
    rising = grid[-1] > grid[0]
    for i in range(len(grid) - 1):
        inside = value <= grid[i + 1] if rising else value >= grid[i + 1]
        if inside or i == len(grid) - 2:
            share = (value - grid[i]) / (grid[i + 1] - grid[i])
            return i, min(1.0, max(0.0, share))
    return 0, 0.0


def _mix(grid: tuple[float, ...], value: float, offset: float) -> list[tuple[float, float]]:
    """Neighbours of ``value`` on a grid, with their weights on a log scale; clamped at the ends."""
    i, share = _bracket(tuple(math.log(g + offset) for g in grid), math.log(value + offset))
    return [(g, w) for g, w in ((grid[i], 1.0 - share), (grid[i + 1], share)) if w > 0.0]


def _interpolate(
    cell: tuple[tuple[float, ...], Any], inverse: float, log_yearly: float, log_budget: float
) -> float:
    table = load_table()
    grid, values = cell
    total = 0.0
    i, a = _bracket(grid, inverse)
    j, b = _bracket(table.log_yearly, log_yearly)
    k, c = _bracket(table.log_budgets, log_budget)
    for di, wi in ((0, 1.0 - a), (1, a)):
        for dj, wj in ((0, 1.0 - b), (1, b)):
            for dk, wk in ((0, 1.0 - c), (1, c)):
                weight = wi * wj * wk
                if weight > 0.0:
                    total += weight * float(values[i + di, j + dj, k + dk])
    return total


@dataclass(frozen=True, slots=True)
class Calibration:
    """The limits of one stream's rules.

    Attributes
    ----------
    base_events : float
        Events of the *first* baseline (``inf`` for a stated rate).
    grow_to : float
        Growth cap of the baseline, 0 if it is frozen.
    step : float
        Expected events of one grouped step, 0 where events are located.
    budget : float
        Promised false alerts a year of this stream.
    index : float
        Index of dispersion, 1 unless recognised as more.

    Notes
    -----
    Every rule is put on one scale, its *level*: the expected exposure, in mean gaps at a known rate, between
    its own false signals at the present evidence. A stream alerts when a rule's level (times the rule's
    weight) passes ``kappa * rate * exposure a year / budget``. kappa carries everything else: the union of
    the rules, the luck of the baseline, its growth, and settling 30 days later (``simulate``).
    """

    base_events: float
    grow_to: float
    step: float
    budget: float
    index: float = 1.0

    def log_kappa(self, yearly: float, budget: float | None = None) -> float:
        """Ln kappa at ``yearly`` expected events a year; clamped to the table's edges."""
        table = load_table()
        log_budget = math.log(self.budget if budget is None else budget)
        log_yearly = math.log(max(yearly, 1e-9))
        inverse = 0.0 if math.isinf(self.base_events) else 1.0 / self.base_events
        grows = self.grow_to > self.base_events
        kinds = [True] if self.grow_to >= 45.0 and grows else [True, False] if grows else [False]
        worst = -math.inf
        for kind in kinds:
            total = 0.0
            for index, part in _mix(table.indices, self.index, 0.0):
                for step, share in _mix(table.steps[index], self.step, 0.25):
                    cell = table.cells[kind, step, index]
                    total += share * part * _interpolate(cell, inverse, log_yearly, log_budget)
            worst = max(worst, total)
        return worst

    def log_limit(self, rate: float, exposure_per_year: float) -> float:
        """Ln of the level at which a rule of weight 1 alerts."""
        yearly = max(rate * exposure_per_year, 1e-9)
        return max(self.log_kappa(yearly) + math.log(yearly / self.budget), math.log(protocol.MIN_LEVEL))

    def unspent(self, rate: float, exposure_per_year: float) -> bool:
        """Whether the floors bind, so that the budget cannot be spent sensibly."""
        yearly = max(rate * exposure_per_year, 1e-9)
        return self.log_kappa(yearly) + math.log(yearly / self.budget) <= math.log(protocol.MIN_LEVEL)

    def recurrence_years(self, log_level: float, rate: float, exposure_per_year: float) -> float:
        """Years between signals this strong of a steady stream with this baseline; capped."""
        log_yearly = math.log(max(rate * exposure_per_year, 1e-9))
        low, high = -math.log(RECURRENCE_CAP_YEARS), math.log(50.0)

        def spare(log_budget: float) -> float:
            kappa = self.log_kappa(math.exp(log_yearly), math.exp(log_budget))
            return log_level - (kappa + log_yearly - log_budget)

        if spare(low) >= 0.0:
            return RECURRENCE_CAP_YEARS
        for _ in range(40):
            middle = (low + high) / 2.0
            if spare(middle) >= 0.0:
                high = middle
            else:
                low = middle
        return math.exp(-high)
