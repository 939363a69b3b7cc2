"""The weekly digest: one screen that says how everything stands, then a card per stream; mail and page."""

from __future__ import annotations

import base64
from collections.abc import Mapping, Sequence
from datetime import datetime
from typing import Any

from watcher import pictures
from watcher.notify import words as w
from watcher.notify.base import Message
from watcher.notify.compose import SAFETY, html_page, summary_sentence, wrap
from watcher.notify.views import AlertView, DigestView, PlantView, StreamView

__all__ = ["digest_message", "digest_page"]

_ORDER = ("worse", "silent", "better", "steady", "learning")
_HEADS = {
    "worse": "Needs attention", "silent": "Not seen", "better": "Better", "steady": "Steady", "learning": "Learning",
}  # fmt: skip


def _rate_words(view: StreamView) -> str:
    base = view.data.get("baseline")
    if base is None:
        need = next((a["text"] for a in view.data["advice"] if a["code"] == "too-few"), "No baseline yet.")
        return str(need)
    usual = f"Usually {w.how_often(base['rate'], view.unit, view.express_per)}"
    if base["events"] is None:
        return f"{usual} (stated)."
    low, high = base["low"], base["high"]
    if view.express_per != 1.0 or base["rate"] >= 0.8:
        scale = 1e6 if view.express_per == 1e6 else view.express_per
        span = f"{w.figure(low * scale)} to {w.figure(high * scale)}"
    else:
        span = f"one in {w.figure(1 / high)} to {w.figure(1 / low) if low > 0 else 'many'}"
    return f"{usual} (95 % interval {span}; {w.count(round(base['events']), 'event')})."


def _standing_words(view: StreamView, plant: PlantView) -> list[str]:
    d = view.data
    last = d.get("last_event")
    lines = [_rate_words(view)]
    if last is None:
        lines.append(f"No event yet in {w.figure(d['exposure'], 3)} {view.unit}.")
    elif not view.per_unit:
        lines.append(
            f"{w.figure(d['open_gap'], 3)} {view.unit} since the last event, on {w.day(last, plant.zone)}."
        )
    else:
        lines.append(f"Last defect on {w.day(last, plant.zone)}.")
    if d["standing"] == "silent":
        lines.append("Its feed is silent: nothing is known since then, and the quiet counts for nothing.")
    if d.get("ahead"):
        lines.append(
            f"{w.count(d['ahead'], 'record')} dated after this moment {'waits' if d['ahead'] == 1 else 'wait'}."
        )
    lines += [a["text"] for a in d["advice"] if a["code"] != "too-few" or d.get("baseline")]
    return [w.clean(x) for x in lines]


def _alert_words(view: AlertView, plant: PlantView) -> str:
    who = f"taken by {w.clean(view.taken_by)}" if view.taken_by else "nobody has taken it yet"
    eased = " It has eased since." if view.evidence.get("eased") else ""
    return (
        f"{view.label}: {summary_sentence(view.stream, view.direction, view.evidence, plant)}{eased} ({who})"
    )


def _health(view: DigestView, plant: PlantView) -> list[str]:
    out = []
    for s in view.sources:
        if s["error"]:
            out.append(f"Source {s['source']}: {s['error']}")
        elif s["stale"]:
            out.append(f"Source {s['source']}: silent; last record {w.day(s['last_record'], plant.zone)}.")
        if s["set_aside"]:
            out.append(
                f"Source {s['source']}: {w.count(s['set_aside'], 'row')} set aside; gapbell rejects lists them."
            )
    out += [
        f"Channel {c['channel']}: {c['waiting']} waiting, {c['failed']} failed. {c['error'] or ''}".strip()
        for c in view.channels
        if c["waiting"] or c["failed"] or c["error"]
    ]
    return [w.clean(x) for x in (out or ["Every source was heard from and every message was delivered."])]


def _grouped(view: DigestView) -> list[tuple[str, list[StreamView]]]:
    groups = []
    for standing in _ORDER:
        mine = [s for s in view.streams if s.data["standing"] == standing]
        if mine:
            groups.append((_HEADS[standing], sorted(mine, key=lambda s: -float(s.data.get("level") or 0.0))))
    return groups


def _opening(view: DigestView) -> str:
    counts = [(sum(s.data["standing"] == standing for s in view.streams), standing) for standing in _ORDER]
    parts = ", ".join(f"{n} {standing}" for n, standing in counts if n)
    return f"{w.count(len(view.streams), 'stream')}: {parts}." if parts else "No streams are watched."


def _subject(plant: PlantView, view: DigestView) -> str:
    week = view.end.astimezone(plant.zone).isocalendar()
    return f"{w.clean(plant.name)}, week {week.week}: {_opening(view).removesuffix('.')}"


def _text(plant: PlantView, view: DigestView) -> str:
    lines = [wrap(_opening(view)), ""]
    if view.open_alerts:
        lines += ["Open alerts", *[wrap(_alert_words(a, plant), "  ") for a in view.open_alerts], ""]
    for head, mine in _grouped(view):
        lines.append(head)
        for s in mine:
            lines.append(wrap(w.clean(s.title), "  "))
            lines += [wrap(x, "    ") for x in _standing_words(s, plant)]
        lines.append("")
    lines += ["Feeds and delivery", *[wrap(x, "  ") for x in _health(view, plant)], ""]
    if view.unseen:
        lines += ["What this digest could not see", *[wrap(w.clean(x), "  ") for x in view.unseen], ""]
    if view.taken_back:
        lines += [
            "Records corrected since the last digest",
            *[wrap(w.clean(x), "  ") for x in view.taken_back],
            "",
        ]
    if any(s.safety for s in view.streams):
        lines += ["Safety streams", wrap(SAFETY, "  "), ""]
    start, end = w.day(view.start, plant.zone), w.moment(view.end, plant.zone)
    lines.append(f"{w.clean(plant.name)}, {start} to {end}")
    return "\n".join(lines) + "\n"


def _html(plant: PlantView, view: DigestView, images: Mapping[str, str]) -> str:
    groups = [
        (
            head,
            [
                {
                    "title": w.clean(s.title),
                    "lines": _standing_words(s, plant),
                    "image": images.get(s.name),
                    "alt": _alt(s),
                }
                for s in mine
            ],
        )
        for head, mine in _grouped(view)
    ]
    return html_page(
        "digest.html.j2", subject=_subject(plant, view), opening=_opening(view),
        alerts=[_alert_words(a, plant) for a in view.open_alerts], groups=groups, health=_health(view, plant),
        unseen=[w.clean(x) for x in view.unseen], taken_back=[w.clean(x) for x in view.taken_back],
        safety=SAFETY if any(s.safety for s in view.streams) else None, plant=w.clean(plant.name),
        span=f"{w.day(view.start, plant.zone)} to {w.moment(view.end, plant.zone)}",
    )  # fmt: skip


def _alt(view: StreamView) -> str:
    return f"Small staircase of {w.clean(view.title)}: events over {view.unit}, the usual fan in grey."


def _tiles(streams: Sequence[StreamView]) -> dict[str, bytes]:
    return {f"tile-{i}": pictures.tile(s) for i, s in enumerate(streams) if s.series is not None}


def digest_message(
    plant: PlantView,
    view: DigestView,
    *,
    recipient: str,
    message_id: str,
    now: datetime,
    tiles: Mapping[str, bytes] | None = None,
) -> Message:
    """Compose the digest as a mail; its pictures may be drawn once and handed in for every recipient."""
    drawn = dict(tiles) if tiles is not None else _tiles(view.streams)
    named = {s.name: f"cid:tile-{i}" for i, s in enumerate(view.streams) if f"tile-{i}" in drawn}
    return Message(
        message_id=message_id, kind="digest", subject=_subject(plant, view), text=_text(plant, view),
        html=_html(plant, view, named), event_type="gapbell.digest", created=now.astimezone(plant.zone), recipient=recipient,
        images=drawn, data=_data(view),
        short="\n".join([_subject(plant, view), *[_alert_words(a, plant) for a in view.open_alerts], *_health(view, plant)]),
    )  # fmt: skip


def _data(view: DigestView) -> dict[str, Any]:
    return {
        "from": view.start.isoformat(), "to": view.end.isoformat(),
        "streams": [{"stream": s.name, "standing": s.data["standing"]} for s in view.streams],
        "open_alerts": [a.label for a in view.open_alerts],
    }  # fmt: skip


def digest_page(plant: PlantView, view: DigestView) -> str:
    """Return the digest as one self-contained page."""
    named = {
        view.streams[int(cid.removeprefix("tile-"))].name: "data:image/png;base64,"
        + base64.b64encode(png).decode()
        for cid, png in _tiles(view.streams).items()
    }
    return _html(plant, view, named)
