"""The pictures: staircase, gap strip and counts per unit, drawn in ink on a light ground."""

from __future__ import annotations

import io
import math
import os
import tempfile
from collections.abc import Mapping
from pathlib import Path
from typing import Any, Literal

import numpy as np

from watcher.notify import words as w
from watcher.notify.views import SeriesView, StreamView

__all__ = ["alert_pictures", "gap_strip", "staircase", "tile", "unit_dots"]

# Okabe & Ito (2008): told apart by colour-blind readers and in grey; shape says the same again
INK, USUAL, FAN, PAPER = "#1d2327", "#8b949c", "#dfe3e6", "#ffffff"
WARM, COOL = "#d55e00", "#0072b2"
_FAN_TAIL = 0.025
_MOST_STEMS = 60
_COLOURS = 48


def _figure(width: float, height: float, layout: Literal["constrained"] | None = "constrained") -> Any:
    """Return an empty figure; matplotlib is loaded here and nowhere else."""
    if "MPLCONFIGDIR" not in os.environ and not os.access(Path("~").expanduser(), os.W_OK):
        os.environ["MPLCONFIGDIR"] = tempfile.mkdtemp(prefix="gapbell-fonts-")
    from matplotlib.figure import Figure

    return Figure(figsize=(width, height), dpi=150, facecolor=PAPER, layout=layout)


def _png(figure: Any) -> bytes:
    """Render to a small PNG with few colours."""
    from PIL import Image

    raw = io.BytesIO()
    figure.savefig(raw, format="png")
    image = Image.open(raw).convert("RGB").quantize(_COLOURS)
    out = io.BytesIO()
    image.save(out, format="PNG", optimize=True)
    return out.getvalue()


def _bare(axes: Any) -> None:
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        axes.spines[side].set_color(USUAL)
    axes.tick_params(colors=INK, labelsize=9)


def _thousands(value: float, _at: int) -> str:
    return f"{value:,.0f}" if value >= 10 or value == int(value) else f"{value:g}"


def _accent(direction: str | None) -> str:
    return WARM if direction == "worse" else COOL if direction == "better" else INK


def _fan(base: Mapping[str, Any], start: float, ends: Any) -> tuple[Any, Any, Any]:
    """Expected events after ``start`` at the baseline's rate, and the limits that 95 % stay within."""
    from scipy.special import nbdtr, pdtr

    span = np.maximum(ends - start, 0.0)
    mean = span * base["rate"]
    top = np.arange(0, max(10, int(mean.max() * 2 + 12 * math.sqrt(mean.max() + 1) + 12)))
    low, high = np.zeros_like(mean), np.zeros_like(mean)
    m, t = base["events"], base["exposure"]
    for i, mu in enumerate(mean):
        cdf = pdtr(top, mu) if m is None else nbdtr(top, max(1, round(m)), t / (t + span[i]))
        low[i] = top[min(int(np.searchsorted(cdf, _FAN_TAIL)), top.size - 1)]
        high[i] = top[min(int(np.searchsorted(cdf, 1 - _FAN_TAIL)), top.size - 1)]
    return mean, low, high


def _window(series: SeriesView, evidence: Mapping[str, Any] | None) -> float:
    """Position from which to draw: all of a short history, else the part around what matters."""
    end = float(series.exposure.sum()) + series.open_exposure
    events = series.event_positions
    if events.size <= 45:
        return 0.0
    start = float(events[-45])
    if evidence is not None:
        began = evidence["shift_began"]["exposure_at"]
        start = min(start, max(0.0, began - 1.2 * (end - began)))
    return start


def staircase(
    view: StreamView, evidence: Mapping[str, Any] | None = None, direction: str | None = None
) -> bytes:
    """Draw cumulative events over exposure with the baseline's fan, the shift's start and the open gap."""
    series = view.series
    assert series is not None
    figure = _figure(6.0, 3.6)
    axes = figure.add_subplot()
    _bare(axes)
    begin = _window(series, evidence)
    end = float(series.exposure.sum()) + series.open_exposure
    events = series.event_positions[series.event_positions >= begin]
    xs = np.concatenate([[begin], np.repeat(events, 2)])
    ys = np.concatenate([[0.0], np.repeat(np.arange(events.size), 2) + np.tile([0.0, 1.0], events.size)])
    base = evidence["baseline"] if evidence is not None else view.data.get("baseline")
    accent = _accent(direction)
    began = evidence["shift_began"]["exposure_at"] if evidence is not None else None
    if base is not None:
        fan_from = began if began is not None else max(begin, series.baseline_to)
        ends = np.linspace(fan_from, max(end, fan_from * (1 + 1e-9)), 60)
        already = float((events <= fan_from).sum())
        mean, low, high = _fan(base, fan_from, ends)
        axes.fill_between(ends, already + low, already + high, color=FAN, linewidth=0, zorder=1)
        axes.plot(ends, already + mean, color=USUAL, linewidth=1.2, linestyle=(0, (1, 2)), zorder=2)
        axes.annotate(
            "as usual", (ends[-1], already + (low[-1] if direction == "worse" else high[-1])), color="#5c666e", fontsize=9, ha="right",
            va="top" if direction == "worse" else "bottom", xytext=(-2, -4 if direction == "worse" else 4), textcoords="offset points",
        )  # fmt: skip
    axes.plot(xs, ys, color=INK, linewidth=1.6, solid_joinstyle="miter", zorder=3)
    if began is not None:
        late = events[events > began]
        if late.size:
            marker = "^" if direction == "worse" else "v"
            heights = np.arange(events.size - late.size, events.size) + 1.0
            axes.plot(late, heights, marker, color=accent, markersize=6, zorder=5)
        axes.axvline(began, color=accent, linewidth=1.2, zorder=2)
        span = evidence["shift_began"] if evidence is not None else {}
        axes.axvspan(
            max(begin, span.get("exposure_earliest", began)), span.get("exposure_latest", began), ymax=0.035, color=accent,
            alpha=0.45, linewidth=0, zorder=2,
        )  # fmt: skip
        axes.annotate(
            "shift began", (began, 0.98), xycoords=("data", "axes fraction"), color=accent, fontsize=9, ha="right", va="top",
            xytext=(-4, 0), textcoords="offset points",
        )  # fmt: skip
    last = float(events[-1]) if events.size else begin
    if end > last:
        axes.plot(
            [last, end], [events.size] * 2, color=accent, linewidth=1.6, linestyle=(0, (3, 2)), zorder=4
        )
        axes.plot(
            [end], [events.size], "o", markerfacecolor=PAPER, markeredgecolor=accent, markersize=6, zorder=5
        )
    axes.set_xlim(begin, end + 0.02 * (end - begin) if end > begin else begin + 1)
    axes.set_ylim(bottom=0)
    axes.set_ylabel("events" if not view.per_unit else "defects", color=INK, fontsize=9)
    axes.set_xlabel(view.unit, color=INK, fontsize=9)
    axes.xaxis.set_major_formatter(_thousands)
    axes.locator_params(axis="x", nbins=5)
    axes.yaxis.get_major_locator().set_params(integer=True)
    return _png(figure)


def gap_strip(
    view: StreamView, evidence: Mapping[str, Any] | None = None, direction: str | None = None
) -> bytes:
    """Draw the gaps in order on a log scale over the usual zone; the open gap is the last, hollow stem."""
    series = view.series
    assert series is not None
    figure = _figure(6.0, 2.6)
    axes = figure.add_subplot()
    _bare(axes)
    positions = series.event_positions
    gaps = np.diff(positions, prepend=0.0)[-_MOST_STEMS:]
    shown = positions[-_MOST_STEMS:]
    base = evidence["baseline"] if evidence is not None else view.data.get("baseline")
    positive = gaps[gaps > 0]
    floor = float(positive.min()) * 0.6 if positive.size else 0.5
    x = np.arange(1, gaps.size + 1)
    if base is not None:
        mean = 1.0 / base["rate"]
        axes.axhspan(-math.log1p(-_FAN_TAIL) * mean, -math.log(_FAN_TAIL) * mean, color=FAN, linewidth=0)
        axes.axhline(math.log(2.0) * mean, color=USUAL, linewidth=1.2, linestyle=(0, (1, 2)))
        floor = min(floor, -math.log1p(-_FAN_TAIL) * mean * 0.8)
    began = evidence["shift_began"]["exposure_at"] if evidence is not None else math.inf
    accent = _accent(direction)
    for late, colour, marker in ((False, INK, "o"), (True, accent, "^" if direction == "worse" else "v")):
        mine = (shown > began) == late
        if mine.any():
            tops = np.maximum(gaps[mine], floor)
            axes.vlines(x[mine], floor, tops, color=colour, linewidth=1.4)
            axes.plot(x[mine], tops, marker, color=colour, markersize=4.5)
    if series.open_exposure > 0:
        at, top = gaps.size + 1, max(series.open_exposure, floor)
        axes.vlines([at], floor, [top], color=accent, linewidth=1.4, linestyle=(0, (3, 2)))
        axes.plot([at], [top], "o", markerfacecolor=PAPER, markeredgecolor=accent, markersize=6)
        axes.annotate(
            "open",
            (at, top),
            color=accent,
            fontsize=9,
            ha="center",
            va="bottom",
            xytext=(0, 5),
            textcoords="offset points",
        )
    axes.set_yscale("log")
    axes.yaxis.set_major_formatter(_thousands)
    axes.set_ylim(bottom=floor)
    axes.margins(y=0.15)
    axes.set_ylabel(view.unit, color=INK, fontsize=9)
    axes.set_xlabel("events in order", color=INK, fontsize=9)
    axes.set_xticks([])
    return _png(figure)


def unit_dots(
    view: StreamView, evidence: Mapping[str, Any] | None = None, direction: str | None = None
) -> bytes:
    """Draw each unit's defects over the number expected on it, against the zone usual for its size."""
    from scipy.special import pdtrik

    series = view.series
    assert series is not None
    figure = _figure(6.0, 2.8)
    axes = figure.add_subplot()
    _bare(axes)
    base = evidence["baseline"] if evidence is not None else view.data.get("baseline")
    sizes, counts = series.exposure[-120:], series.events[-120:]
    ends = np.cumsum(series.exposure)[-120:]
    rate = base["rate"] if base is not None else counts.sum() / max(sizes.sum(), 1e-12)
    x = np.arange(1, sizes.size + 1)
    scale = view.express_per
    usual = np.ceil(pdtrik(1 - _FAN_TAIL, np.maximum(sizes * rate, 1e-9))) / sizes * scale
    axes.fill_between(x, 0, usual, step="mid", color=FAN, linewidth=0)
    axes.axhline(rate * scale, color=USUAL, linewidth=1.2, linestyle=(0, (1, 2)))
    began = evidence["shift_began"]["exposure_at"] if evidence is not None else math.inf
    accent = _accent(direction)
    area = 8 + 34 * sizes / sizes.max()
    for late, colour, marker in ((False, INK, "o"), (True, accent, "^" if direction == "worse" else "v")):
        mine = (ends > began) == late
        if mine.any():
            axes.scatter(
                x[mine],
                (counts / sizes * scale)[mine],
                s=area[mine],
                color=colour,
                marker=marker,
                linewidths=0,
                alpha=0.85,
            )
    axes.set_ylim(bottom=-0.04 * max(1e-12, float((counts / sizes * scale).max())))
    axes.set_xticks([])
    axes.set_xlabel("units in order, larger marks for larger units", color=INK, fontsize=9)
    axes.set_ylabel(
        f"defects per {scale:,.0f} {view.unit}" if scale != 1 else "defects per unit", color=INK, fontsize=9
    )
    return _png(figure)


def tile(view: StreamView) -> bytes:
    """Draw a small staircase for the digest."""
    series = view.series
    assert series is not None
    figure = _figure(2.4, 0.9, None)
    axes = figure.add_axes((0.01, 0.04, 0.98, 0.92))
    axes.axis("off")
    begin = _window(series, None)
    end = float(series.exposure.sum()) + series.open_exposure
    events = series.event_positions[series.event_positions >= begin]
    xs = np.concatenate([[begin], np.repeat(events, 2)])
    ys = np.concatenate([[0.0], np.repeat(np.arange(events.size), 2) + np.tile([0.0, 1.0], events.size)])
    base = view.data.get("baseline")
    standing = view.data.get("standing")
    accent = _accent(standing if standing in {"worse", "better"} else None)
    if base is not None and end > begin:
        ends = np.linspace(begin, end, 30)
        _, low, high = _fan(base, begin, ends)
        axes.fill_between(ends, low, high, color=FAN, linewidth=0)
    axes.plot(xs, ys, color=INK, linewidth=1.4)
    last = float(events[-1]) if events.size else begin
    if end > last:
        axes.plot([last, end], [events.size] * 2, color=accent, linewidth=1.4, linestyle=(0, (3, 2)))
        axes.plot([end], [events.size], "o", markerfacecolor=PAPER, markeredgecolor=accent, markersize=5)
    axes.set_xlim(begin, end + 0.04 * max(end - begin, 1e-9))
    return _png(figure)


def alert_pictures(
    view: StreamView, evidence: Mapping[str, Any], direction: str
) -> list[tuple[str, bytes, str]]:
    """Return the pictures of an alert: (content id, PNG, what is to be seen)."""
    if view.series is None:
        return []
    since = evidence["since"]
    usual = w.how_often(evidence["baseline"]["rate"], view.unit, view.express_per)
    where = "above" if direction == "worse" else "below"
    seen = (
        f"Staircase of {w.clean(view.title)}: {w.count(since['events'], 'event')} in the last {w.figure(since['exposure'], 3)}"
        f" {view.unit}, {where} the grey fan of what is usual ({usual})."
    )
    out = [("staircase", staircase(view, evidence, direction), seen)]
    if view.per_unit:
        out.append(
            (
                "units",
                unit_dots(view, evidence, direction),
                "Defects on each of the latest units over the usual zone in grey.",
            )
        )
    else:
        last = (
            f" The open gap is {w.figure(view.series.open_exposure, 3)} {view.unit}."
            if view.series.open_exposure > 0
            else ""
        )
        out.append(
            (
                "gaps",
                gap_strip(view, evidence, direction),
                f"The latest gaps in order over the usual zone in grey.{last}",
            )
        )
    return out
