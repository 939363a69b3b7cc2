"""The constants of the alerting protocol, shared by the engine and by the simulation that calibrates it."""

from __future__ import annotations

__all__ = [
    "COUNT_WEIGHT",
    "FLOOR_PROBABILITY",
    "GAP_WEIGHT",
    "GUARD_EVENTS",
    "MIN_EVENTS_WORSE",
    "MIN_LEVEL",
    "PAIR_WEIGHT",
    "PROTOCOL_VERSION",
    "QUIET_EVIDENCE",
    "RUN_WEIGHT",
    "SETTLE_YEARS",
    "SUM_EVENTS",
    "SUM_WEIGHT",
    "YEARS",
]

PROTOCOL_VERSION = 3
"""Raise it with any change that alters a false-alert rate; the calibration table must then be made anew."""

GUARD_EVENTS = 4
"""Newest events that never join a growing baseline. Own simulation: 1, 4 and 8 differ by under 3 %."""

QUIET_EVIDENCE = 1.0
"""A stretch whose log likelihood ratio is at least this holds growth back at its start (0.5 to 2 tried)."""

GAP_WEIGHT = 0.1
"""Share of ``gap-limit`` and ``open-gap`` beside one CUSUM member's 1; costs the bank 0.5 % of its delay."""

COUNT_WEIGHT = 0.1
"""The same for ``count-limit``."""

SUM_EVENTS = 3
"""Gaps that ``gap-sum`` adds up."""

SUM_WEIGHT = RUN_WEIGHT = PAIR_WEIGHT = 0.03
"""The same for ``gap-sum``, ``median-run`` and ``near-limit-pair``: they add little to the bank, and cost little."""

MIN_EVENTS_WORSE = 2
"""Floor: no ``worse`` from fewer events inside the shift, whatever the budget would allow."""

FLOOR_PROBABILITY = 0.05
"""Floor: no ``better`` before the stretch is this improbable by itself (events at most as seen)."""

MIN_LEVEL = 4.0
"""Floor: no rule is run at less than this many expected events between its own false signals."""

SETTLE_YEARS = 30.0 / 365.25
"""The promise takes every false alert as settled, and the rules restarted, after this time."""

YEARS = 6.0
"""The promise is stated over this many years from the end of the first baseline."""
