"""Checks of arguments, each error naming the argument and the value found."""

from __future__ import annotations

import math

__all__ = ["need_at_least", "need_positive", "need_share"]


def need_share(value: float, name: str) -> float:
    """Return ``value`` if it lies strictly between 0 and 1."""
    if not 0.0 < value < 1.0:
        raise ValueError(f"{name} must lie between 0 and 1, not {value!r}")
    return value


def need_at_least(value: float, least: float, name: str) -> float:
    """Return ``value`` if it is finite and ``least`` or more."""
    if not (value >= least and math.isfinite(value)):
        raise ValueError(f"{name} must be {least:g} or more, not {value!r}")
    return value


def need_positive(value: float, name: str) -> float:
    """Return ``value`` if it is finite and above 0."""
    if not (value > 0.0 and math.isfinite(value)):
        raise ValueError(f"{name} must be above 0, not {value!r}")
    return value
