"""Alert, update, withdrawal, reminder, settled and feed notice, in words that a fitter understands."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping, Sequence
from datetime import datetime
from functools import lru_cache
from typing import Any

from watcher.notify import words as w
from watcher.notify.base import Message
from watcher.notify.views import AlertView, PlantView, StreamView

__all__ = ["SAFETY", "alert_message", "feed_notice", "headline", "html_page", "summary_sentence", "wrap"]

SAFETY = (
    "Investigate every event on its own, whatever the statistics say. A quiet stretch is no proof of safety."
    " Local rules and licensed practice come first."
)
_EVENT_TYPES = {
    "alert": "gapbell.alert.raised", "update": "gapbell.alert.updated", "withdrawal": "gapbell.alert.withdrawn",
    "reminder": "gapbell.alert.reminded", "settled": "gapbell.alert.settled",
}  # fmt: skip
_MOST_RECORDS = 8
_WIDTH = 76


def wrap(text: str, indent: str = "") -> str:
    """Break a paragraph into short lines."""
    return textwrap.fill(
        text, _WIDTH, initial_indent=indent, subsequent_indent=indent, break_on_hyphens=False
    )


def _rate(stream: StreamView, rate: float | None) -> str:
    return w.how_often(rate, stream.unit, stream.express_per)


def headline(stream: StreamView, direction: str, evidence: Mapping[str, Any]) -> str:
    """Say what changed, for a subject."""
    title = w.clean(stream.title)
    now = _rate(stream, evidence["since"]["rate"])
    if direction == "worse":
        verb = "more defects" if stream.per_unit else "coming closer together"
        return f"{title}: {verb}, {now}"
    if not evidence["since"]["events"]:
        return f"{title}: none for {w.figure(evidence['since']['exposure'], 3)} {stream.unit}"
    verb = "fewer defects" if stream.per_unit else "coming further apart"
    return f"{title}: {verb}, {now}"


def summary_sentence(
    stream: StreamView, direction: str, evidence: Mapping[str, Any], plant: PlantView
) -> str:
    """Say in one sentence what changed, since when, and how it was before."""
    since, base = evidence["since"], evidence["baseline"]
    when = w.rough_day(evidence["shift_began"]["estimate"], plant.zone)
    before = _rate(stream, base["rate"])
    if direction == "better" and not since["events"]:
        return (
            f"{w.clean(stream.title)}: none for {w.figure(since['exposure'], 3)} {stream.unit}, since {when};"
            f" before that {before}."
        )
    if stream.per_unit:
        verb = "have become more frequent" if direction == "worse" else "have become rarer"
    else:
        verb = "are coming closer together" if direction == "worse" else "are coming further apart"
    return (
        f"{w.clean(stream.title)} {verb}: {_rate(stream, since['rate'])} since {when}, before that {before}."
    )


def _how_sure(evidence: Mapping[str, Any], confidence: float = 0.95) -> str:
    ratio = evidence["rate_ratio"]
    sure = w.percent(ratio.get("confidence", confidence))
    return (
        f"A stream that had not changed would show evidence this strong {w.recurrence(evidence)}."
        f" The rate since then is {w.times(ratio['estimate'])} the usual one ({sure} interval"
        f" {w.figure(ratio['low'])} to {w.figure(ratio['high'])})."
    )


def _since_when(stream: StreamView, evidence: Mapping[str, Any], plant: PlantView) -> str:
    began, since, base = evidence["shift_began"], evidence["since"], evidence["baseline"]
    span = w.span_of_days(began["earliest"], began["latest"], plant.zone)
    usual = (
        f"The usual rate is the stated one, {_rate(stream, base['rate'])}."
        if base["events"] is None
        else f"The usual rate, {_rate(stream, base['rate'])}, rests on {w.count(round(base['events']), 'event')}"
        f" in {w.figure(base['exposure'], 3)} {stream.unit}."
    )
    return (
        f"The change began {span}, most likely about {w.day(began['estimate'], plant.zone)}. Since then"
        f" {w.count(since['events'], 'event')} in {w.figure(since['exposure'], 3)} {stream.unit}. {usual}"
    )


def _records(view: AlertView, plant: PlantView) -> list[str]:
    lines = []
    shown = list(view.records)[-_MOST_RECORDS:]
    for r in shown:
        parts = [w.moment(r.time, plant.zone)]
        if r.unit:
            parts.append(w.clean(r.unit))
        if view.stream.per_unit or r.count > 1:
            parts.append(w.count(round(r.count), "defect"))
        parts += [f"{w.clean(k)} {w.clean(v)}" for k, v in r.attributes.items() if v]
        parts.append(f"{w.clean(r.file)}, line {r.line}")
        lines.append("; ".join(parts))
    more = len(view.records) - len(shown)
    if more > 0:
        lines.insert(0, f"{more} earlier; gapbell alerts show {view.label} lists them all")
    return lines


def _look_first(evidence: Mapping[str, Any]) -> str:
    looked = evidence["looked_at"]
    found = evidence["look_first"]
    if not found:
        names = ", ".join(w.clean(a) for a in looked["attributes"])
        return f"Nothing stands out among: {names} (compared with {looked['against']})."
    text = "; ".join(
        f"{w.clean(f['attribute'])} {w.clean(f['value'])}: {f['events']} of {f['of']} events, usually {w.percent(f['usual_share'])}"
        for f in found
    )
    return f"{text} (compared with {looked['against']}; by chance alone as much would show in {w.percent(found[0]['p_adjusted'])} of cases)."


def _limits_of_this(view: AlertView) -> str:
    text = "The figures say that the rate has changed, not why."
    base = view.evidence["baseline"]
    warnings = [x["text"] for x in base["warnings"]]
    if view.direction == "better":
        text += " Fewer events can also mean that fewer are found or written down."
    return " ".join([text, *warnings])


def _sections(view: AlertView, plant: PlantView) -> list[tuple[str, list[str]]]:
    """Headed paragraphs of an alert, in order of use."""
    stream, evidence = view.stream, view.evidence
    out: list[tuple[str, list[str]]] = []
    if stream.safety:
        out.append(("First", [SAFETY]))
    out.append(("How sure", [_how_sure(evidence)]))
    out.append(("Since when", [_since_when(stream, evidence, plant)]))
    if view.records:
        out.append(("Events since then", _records(view, plant)))
    if (evidence.get("looked_at") or {}).get("against"):
        out.append(("Where to look first", [_look_first(evidence)]))
    if stream.reaction_plan:
        out.append(("Reaction plan", [w.clean(stream.reaction_plan)]))
    out.append(("What this does not say", [_limits_of_this(view)]))
    return out


def _commands(view: AlertView) -> list[str]:
    if view.state == "taken":
        return [f'gapbell settle {view.label} --by "NAME" --finding cause-found']
    return [
        f'gapbell take {view.label} --by "NAME"',
        f'gapbell settle {view.label} --by "NAME" --finding cause-found',
    ]


def _opening(view: AlertView, kind: str, plant: PlantView) -> str:
    summary = summary_sentence(view.stream, view.direction, view.evidence, plant)
    if kind == "update":
        return f"The evidence for {view.label} has grown. {summary}"
    if kind == "withdrawal":
        return (
            f"{view.label} is withdrawn: {view.what_changed or 'its evidence is gone'} It had said: {summary}"
        )
    if kind == "reminder":
        return f"Nobody has taken {view.label} yet. {summary}"
    if kind == "settled":
        finding = {
            "cause-found": "a cause was found", "no-cause": "no cause was found", "recording-error": "a recording error",
            "intended-change": "an intended change; a new baseline starts at the shift",
        }.get(view.finding or "", view.finding or "")  # fmt: skip
        note = f" Note: {w.clean(view.note)}" if view.note else ""
        return f"{view.label} was settled by {w.clean(view.settled_by)}: {finding}.{note}"
    return summary


def _subject(view: AlertView, kind: str) -> str:
    head = headline(view.stream, view.direction, view.evidence)
    first = {"alert": view.direction.capitalize(), "update": f"{view.direction.capitalize()}, more evidence"}
    label = {"withdrawal": "Withdrawn", "reminder": "Not yet taken", "settled": "Settled", **first}[kind]
    return f"{label}: {head} [{view.label}]"


def alert_message(
    plant: PlantView,
    view: AlertView,
    *,
    kind: str,
    recipient: str,
    message_id: str,
    thread: str,
    now: datetime,
    pictures: Sequence[tuple[str, bytes, str]] = (),
) -> Message:
    """Compose a message about an alert; ``pictures`` are (content id, PNG, what is to be seen)."""
    opening = _opening(view, kind, plant)
    brief = kind in {"withdrawal", "settled"}
    sections = [] if brief else _sections(view, plant)
    commands = [] if brief else _commands(view)
    lines = [wrap(opening), ""]
    for head, paragraphs in sections:
        lines.append(head)
        lines += [wrap(p, "  ") for p in paragraphs]
        lines.append("")
    if commands:
        lines += ["In gapbell", *[f"  {c}" for c in commands], ""]
    if brief and view.stream.safety:
        lines += [wrap(SAFETY), ""]
    lines.append(
        f"{w.clean(plant.name)}, alert {view.label}, {w.moment(view.evidence['raised_at'], plant.zone)}"
    )
    html = html_page(
        "alert.html.j2", subject=_subject(view, kind), opening=opening, sections=sections, commands=commands,
        pictures=[(cid, alt) for cid, _, alt in pictures], plant=w.clean(plant.name), label=view.label,
        raised=w.moment(view.evidence["raised_at"], plant.zone), direction=view.direction,
        safety=SAFETY if brief and view.stream.safety else None,
    )  # fmt: skip
    short = opening if brief else f"{opening}\n{_how_sure(view.evidence)}"
    if view.stream.safety:
        short += f"\n{SAFETY}"
    if view.stream.reaction_plan and not brief:
        short += f"\n{w.clean(view.stream.reaction_plan)}"
    return Message(
        message_id=message_id, kind=kind, subject=_subject(view, kind), text="\n".join(lines) + "\n", html=html,
        event_type=_EVENT_TYPES[kind], created=now.astimezone(plant.zone), recipient=recipient,
        images={cid: png for cid, png, _ in pictures}, thread=thread, alert_label=view.label,
        data={"id": view.label, "state": view.state, **view.evidence}, short=f"{short}\n[{view.label}, {w.clean(plant.name)}]",
    )  # fmt: skip


def feed_notice(
    plant: PlantView, *, subject: str, lines: Sequence[str], recipient: str, message_id: str, now: datetime
) -> Message:
    """Compose a notice to the maintainers about a source, a delivery or the watcher itself."""
    created = now.astimezone(plant.zone)
    foot = f"{w.clean(plant.name)}, {w.moment(created, plant.zone)}"
    body = [w.clean(line) for line in lines]
    text = "\n\n".join([wrap(line) for line in body] + [foot]) + "\n"
    html = html_page("notice.html.j2", subject=w.clean(subject), lines=body, foot=foot)
    return Message(
        message_id=message_id, kind="feed-notice", subject=w.clean(subject), text=text, html=html,
        event_type="gapbell.feed-notice", created=created, recipient=recipient, data={"subject": subject, "lines": list(lines)},
        short="\n".join([w.clean(subject), *body]),
    )  # fmt: skip


@lru_cache(maxsize=1)
def _templates() -> Any:
    from jinja2 import Environment, PackageLoader, StrictUndefined

    return Environment(
        loader=PackageLoader("watcher.notify"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )


def html_page(name: str, **values: Any) -> str:
    """Render one of our templates; everything put in is escaped."""
    return str(_templates().get_template(name).render(**values))
