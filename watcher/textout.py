"""What commands say to people: short sentences and plain tables."""

from __future__ import annotations

import sys
import textwrap
from collections.abc import Iterable, Mapping, Sequence
from datetime import datetime
from typing import TYPE_CHECKING, Any

from watcher.config import Config
from watcher.notify import words as w

if TYPE_CHECKING:
    from watcher.cycle import CycleReport

__all__ = [
    "alert_text", "alerts_text", "baselines_text", "check_text", "cycle_text", "records_text", "rehearsal_text", "rejects_text",
    "status_text", "table",
]  # fmt: skip

_WIDTH = 100
_ORDER = ("worse", "better", "silent", "learning", "steady")


def table(heads: Sequence[str], rows: Iterable[Sequence[object]]) -> str:
    """Lay out a table: fitted to the window on a terminal, aligned plain text elsewhere."""
    cells = [["–" if c is None else w.clean(c) for c in row] for row in rows]
    if sys.stdout.isatty():
        return _for_terminal(heads, cells)
    widths = [max([len(h), *(len(r[i]) for r in cells)]) for i, h in enumerate(heads)]
    lines = [
        "  ".join(c.ljust(n) for c, n in zip(row, widths, strict=True)).rstrip()
        for row in [list(heads), *cells]
    ]
    return "\n".join(lines)


def _for_terminal(heads: Sequence[str], cells: Sequence[Sequence[str]]) -> str:
    from rich import box
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    drawn = Table(box=box.SIMPLE_HEAD, pad_edge=False, show_edge=False)
    for head in heads:
        drawn.add_column(head, overflow="fold")
    for row in cells:
        drawn.add_row(*(Text(c) for c in row))  # as text: data is never read as markup
    console = Console(highlight=False)
    with console.capture() as capture:
        console.print(drawn)
    return capture.get().rstrip("\n")


def _wrap(text: str, indent: str = "") -> str:
    return textwrap.fill(
        w.clean(text), _WIDTH, initial_indent=indent, subsequent_indent=indent, break_on_hyphens=False, break_long_words=False
    )  # fmt: skip


def _short(value: str | None, config: Config) -> str:
    """Write a moment briefly in plant time; the zone is named once below the table."""
    if value is None:
        return "–"
    return f"{datetime.fromisoformat(value).astimezone(config.zone):%Y-%m-%d %H:%M}"


def _zone_line(config: Config) -> str:
    return f"Times are plant time ({config.zone.key})."


def _unit(config: Config, stream: str, fallback: str) -> str:
    s = config.streams.get(stream)
    return w.gap_unit(s.exposure, s.exposure_name) if s is not None else fallback


def _per(config: Config, stream: str) -> float:
    s = config.streams.get(stream)
    return s.express_per if s is not None else 1.0


def _amount(value: float | None) -> str:
    return "–" if value is None else w.figure(float(value), 3)


# -- cycle and status -----------------------------------------------------------------------------------------


def cycle_text(report: CycleReport) -> str:
    """Say what a pass did."""
    rows = []
    for s in report.sources:
        c = s.counts
        rows.append(
            (s.source, s.files, c.rows, c.new, c.changed, c.voided, c.repeated, c.set_aside, s.error or "")
        )
    heads = ("source", "files", "rows", "new", "changed", "voided", "repeated", "set aside", "trouble")
    parts = [table(heads, rows), ""]
    by_standing: dict[str, list[str]] = {}
    for name, standing in report.streams.items():
        by_standing.setdefault(standing, []).append(name)
    for standing in _ORDER:
        if standing in by_standing:
            parts.append(_wrap(f"{standing.capitalize()}: {', '.join(by_standing[standing])}."))
    parts += [_wrap(f"Not judged: {name}. {why}") for name, why in report.broken.items()]
    changes = report.changes
    said = [
        f"{word} {', '.join(labels)}"
        for word, labels in (
            ("raised", changes.raised),
            ("updated", changes.updated),
            ("withdrawn", changes.withdrawn),
        )
        if labels
    ]
    parts.append(
        _wrap(f"Alerts: {'; '.join(said)}." if said else "No alert was raised, updated or withdrawn.")
    )
    left = f", {report.given_up} given up" if report.given_up else ""
    parts.append(f"{w.count(report.delivered, 'message')} delivered, {report.waiting} waiting{left}.")
    return "\n".join(parts)


def status_text(found: Mapping[str, Any], config: Config) -> str:
    """Say how everything stands."""
    at = w.moment(found["at"], config.zone)
    parts = [f"{w.clean(found['plant'])}, {at}", ""]
    rank = {s: i for i, s in enumerate(_ORDER)}
    rows = [
        (
            s["stream"], s["standing"], s["events"], f"{_amount(s['exposure'])} {_unit(config, s['stream'], s['exposure_unit'])}",
            _amount(s["mean_gap"]), _amount(s["open_gap"]), _short(s["last_event"], config), s["alert"],
        )
        for s in sorted(found["streams"], key=lambda s: rank.get(s["standing"], 9))
    ]  # fmt: skip
    parts.append(
        table(("stream", "standing", "events", "in", "mean gap", "open gap", "last event", "alert"), rows)
    )
    for s in found["streams"]:
        lines = [a["text"] for a in s["advice"]] + list(s.get("notes", []))
        if s.get("ahead"):
            lines.append(f"{w.count(s['ahead'], 'record')} dated after this moment: kept, not judged yet.")
        parts += [_wrap(f"{s['stream']}: {line}", "  ") for line in lines]
    feeds = [
        (
            s["source"], s["records"], s["set_aside"], _short(s["last_record"], config), _short(s["last_contact"], config),
            s["error"] or ("silent" if s["stale"] else "well"),
        )
        for s in found["sources"]
    ]  # fmt: skip
    parts += ["", table(("source", "records", "set aside", "last record", "last contact", "state"), feeds)]
    if found["channels"]:
        ways = [
            (
                c["channel"],
                c["waiting"],
                c["failed"],
                _short(c["last_delivery"], config),
                c["error"] or "well",
            )
            for c in found["channels"]
        ]
        parts += ["", table(("channel", "waiting", "failed", "last delivery", "state"), ways)]
    watcher = found["watcher"]
    parts.append("")
    last = _short(watcher["last_pass"], config)
    if watcher["active"]:
        parts.append(
            _wrap(f"A watcher is active: host {watcher['host']}, process {watcher['pid']}. Last pass {last}.")
        )
    else:
        parts.append(f"No watcher is active just now. Last pass {last}.")
    parts += [_wrap(line) for line in found.get("later", [])]
    parts.append(_zone_line(config))
    return "\n".join(parts)


# -- alerts ---------------------------------------------------------------------------------------------------


def alerts_text(found: Sequence[Mapping[str, Any]], config: Config, *, everything: bool) -> str:
    """List alerts."""
    if not found:
        return "No alerts so far." if everything else "No open alerts."
    rows = [
        (a["id"], a["stream"], a["direction"], _state(a), _short(a["raised_at"], config), a["summary"])
        for a in found
    ]
    head = table(("alert", "stream", "direction", "state", "raised", "what"), rows)
    return f"{head}\n\n{_zone_line(config)} `gapbell alerts show ID` has the evidence."


def _state(a: Mapping[str, Any]) -> str:
    if a["state"] == "settled":
        return f"settled, {a['finding']}" if a.get("finding") else "settled"
    if a["state"] == "taken":
        return f"taken by {a['taken_by']}"
    return str(a["state"])


def alert_text(found: Mapping[str, Any], config: Config) -> str:
    """Show one alert: its evidence, records and history, and how its figures come about."""
    e = found
    unit = _unit(config, e["stream"], e["exposure_unit"])
    base, since, ratio, began = e["baseline"], e["since"], e["rate_ratio"], e["shift_began"]
    zone = config.zone
    span = w.span_of_days(began["earliest"], began["latest"], zone)
    parts = [
        _wrap(f"{e['id']}, {e['direction']}, {_state(e)}. {e['summary']}"),
        "",
        _facts(
            (
                ("raised", f"{w.moment(e['raised_at'], zone)}; noticed {w.moment(e['noticed_at'], zone)}"),
                (
                    "shift began",
                    f"most likely {w.day(began['estimate'], zone)}, {span}; after {_amount(began['exposure_at'])} {unit}",
                ),
                ("since then", f"{since['events']} events in {_exact(since['exposure'])} {unit}, rate {_exact(since['rate'])}"),
                ("baseline", _baseline_line(base, unit)),
                (
                    "rate ratio",
                    f"{_ratio(ratio)}, {w.percent(ratio['confidence'])} interval, corrected for how the stretch was found",
                ),
                ("uncorrected", f"{_ratio(ratio['uncorrected'])}, as if the stretch had been chosen beforehand"),
                ("recurrence", w.recurrence(e)),
            )
        ),
        "",
        table(
            ("rule", "design ratio", "statistic", "limit"),
            [(r["rule"], r["design_ratio"], _exact(r["statistic"]), _exact(r["limit"])) for r in e["rules"]],
        ),
    ]  # fmt: skip
    parts += _warnings(base)
    if e.get("now"):
        now = e["now"]
        parts += [
            "",
            _wrap(f"Now: {now['standing']}; {_amount(now['open_gap'])} {unit} since the last event."),
        ]
    parts += ["", _records_of(e, config)]
    looked = e["look_first"]
    parts += ["", _wrap("Where to look first: " + _looked(looked, e.get("looked_at")))]
    reaction = config.streams[e["stream"]].reaction_plan if e["stream"] in config.streams else None
    if reaction:
        parts += ["", _wrap(f"Reaction plan: {reaction}")]
    parts += ["", "How the figures come about"]
    parts += [_wrap(line, "  ") for line in e["how"]]
    parts += ["", "What happened to it"]
    parts += [
        _wrap(
            f"{_short(h['at'], config)}  {h['what']}"
            + (f" by {h['by']}" if h["by"] else "")
            + (f": {h['note']}" if h["note"] else ""),
            "  ",
        )
        for h in e["history"]
    ]
    parts += [
        _wrap(
            f"{_short(d['at'], config)}  {d['outcome']} to {d['recipient']} on {d['channel']}: {d['detail']}",
            "  ",
        )
        for d in e["deliveries"]
    ]
    if e["stream"] in config.streams and config.streams[e["stream"]].safety:
        from watcher.notify.compose import SAFETY

        parts += ["", _wrap(SAFETY)]
    parts += ["", _zone_line(config)]
    return "\n".join(parts)


def _facts(pairs: Sequence[tuple[str, str]]) -> str:
    width = max(len(k) for k, _ in pairs)
    return "\n".join(
        textwrap.fill(
            w.clean(text), _WIDTH, initial_indent=f"{key.ljust(width)}  ", subsequent_indent=" " * (width + 2),
            break_on_hyphens=False, break_long_words=False,
        )
        for key, text in pairs
    )  # fmt: skip


def _exact(value: float | None) -> str:
    """Write a figure with the digits that it is stored with, so that it can be redone by hand."""
    return "–" if value is None else f"{value:.6g}"


def _ratio(ratio: Mapping[str, Any]) -> str:
    return f"{_exact(ratio['estimate'])} ({_exact(ratio['low'])} to {_exact(ratio['high'])})"


def _baseline_line(base: Mapping[str, Any], unit: str) -> str:
    interval = f"{_exact(base['low'])} to {_exact(base['high'])}, {w.percent(base['confidence'])}"
    if base["events"] is None:
        return f"stated rate {_exact(base['rate'])} per {unit}"
    return (
        f"{_exact(base['events'])} events in {_exact(base['exposure'])} {unit}, rate {_exact(base['rate'])} ({interval});"
        f" {base['source']}"
    )


def _warnings(base: Mapping[str, Any] | None) -> list[str]:
    return [_wrap(f"Baseline: {x['text']}", "  ") for x in (base or {}).get("warnings", [])]


def _looked(found: Sequence[Mapping[str, Any]], at: Mapping[str, Any] | None) -> str:
    if not at or not at["against"]:
        return "no attributes to compare."
    if not found:
        return f"nothing stands out among: {', '.join(at['attributes'])} (compared with {at['against']})."
    places = "; ".join(
        f"{f['attribute']} {f['value']} ({f['events']} of {f['of']}, usually {w.percent(f['usual_share'])};"
        f" p {f['p']:.2g}, adjusted over all values {f['p_adjusted']:.2g})"
        for f in found
    )
    return f"{places}, compared with {at['against']}."


def _records_of(e: Mapping[str, Any], config: Config) -> str:
    if not e["record_details"]:
        return "No events since the shift." if not e["records"] else "Its records are no longer in the store."
    rows = [
        (
            _short(r["time"], config), " ".join(r["key"].values()), r["unit"], _exact(r["defects"]), r["file"], r["line"], r["revision"],
            "; ".join(f"{k} {v}" for k, v in r["attributes"].items() if v),
        )
        for r in e["record_details"]
    ]  # fmt: skip
    return table(("time", "key", "unit", "defects", "file", "line", "revision", "attributes"), rows)


# -- records, rejects, baselines, rehearsal -------------------------------------------------------------------


def records_text(found: Sequence[Mapping[str, Any]]) -> str:
    """List records."""
    if not found:
        return "No records."
    rows = [
        (
            r["source"], r["time"], " ".join(r["key"].values()), r["unit"], _exact(r["quantity"]), _exact(r["defects"]), r["file"],
            r["line"], r["revision"], "voided" if r["voided"] else "",
        )
        for r in found
    ]  # fmt: skip
    heads = ("source", "time", "key", "unit", "quantity", "defects", "file", "line", "revision", "")
    return table(heads, rows)


def rejects_text(found: Sequence[Mapping[str, Any]]) -> str:
    """List set-aside rows."""
    if not found:
        return "No row is set aside."
    rows = [
        (
            r["source"],
            r["file"],
            r["line"] if r["line"] is not None else "whole file",
            r["value"],
            r["reason"],
        )
        for r in found
    ]
    return table(("source", "file", "line", "value", "reason"), rows)


def baselines_text(found: Mapping[str, Any], config: Config) -> str:
    """List the baselines that a stream had."""
    stream = found["stream"]
    if not found["baselines"]:
        return f"{w.clean(stream)} has no baseline yet."
    rows = [
        (
            _short(b["noted_at"], config), _exact(b["events"]), _exact(b["exposure"]), _exact(b["rate"]),
            f"{_exact(b['low'])} to {_exact(b['high'])}", _short(b["from"], config), _short(b["to"], config), b["source"], b["by"],
            b["why"],
        )
        for b in found["baselines"]
    ]  # fmt: skip
    heads = ("noted", "events", "exposure", "rate", "interval", "from", "to", "source", "by", "why")
    parts = [table(heads, rows), *_warnings(found["baselines"][-1]), _zone_line(config)]
    return "\n".join(parts)


def rehearsal_text(found: Mapping[str, Any], config: Config) -> str:
    """Say what would have been alerted."""
    parts = []
    rows = [
        (
            s["stream"], s["standing"], s["events"], f"{_amount(s['exposure'])} {_unit(config, s['stream'], s['exposure_unit'])}",
            "–" if s["baseline"] is None
            else w.how_often(s["baseline"]["rate"], _unit(config, s["stream"], s["exposure_unit"]), _per(config, s["stream"])),
            len(s["alerts"]),
        )
        for s in found["streams"]
    ]  # fmt: skip
    parts.append(table(("stream", "standing", "events", "in", "usually", "alerts"), rows))
    alerts = [a for s in found["streams"] for a in s["alerts"]]
    if alerts:
        parts.append("")
        parts.append(
            table(
                ("raised", "stream", "direction", "what"),
                [
                    (_short(a["raised_at"], config), a["stream"], a["direction"], a["summary"])
                    for a in sorted(alerts, key=lambda a: str(a["raised_at"]))
                ],
            )
        )
    parts += [_wrap(f"{s['stream']}: {s['error']}") for s in found["streams"] if s.get("error")]
    parts += [_wrap(f"{e['source']}: {e['error']}") for e in found["errors"]]
    start = w.day(found["from"], config.zone) if found["from"] else "the first record"
    parts.append("")
    parts.append(
        _wrap(
            f"From {start} to {w.moment(found['to'], config.zone)}: {w.count(len(alerts), 'alert')} would have been raised."
            " Nothing was sent or stored."
        )
    )
    return "\n".join(parts)


# -- check ----------------------------------------------------------------------------------------------------


def check_text(found: Mapping[str, Any], config: Config) -> str:
    """Say what was checked, what was read and what is wrong."""
    parts = [f"{w.clean(found['config'])} is valid: {w.count(found['streams'], 'stream')}."]
    for s in found["sources"]:
        parts.append("")
        if s["error"]:
            parts.append(_wrap(f"Source {s['source']}: {s['error']}"))
            continue
        if s["file"] is None:
            parts.append(_wrap(f"Source {s['source']}: reached; no file is there yet."))
            continue
        parts.append(
            _wrap(
                f"Source {s['source']}: {w.count(s['files'], 'file')}; the newest, {s['file']}, is understood like this:"
            )
        )
        if s["rows"]:
            rows = [
                (
                    r["line"], _short(r["time"], config), " ".join(r["key"].values()), r["unit"], _exact(r["quantity"]),
                    _exact(r["defects"]), "; ".join(f"{k} {v}" for k, v in r["attributes"].items()),
                    "voids" if r["voided"] else "",
                )
                for r in s["rows"]
            ]  # fmt: skip
            parts.append(
                table(("line", "time", "key", "unit", "quantity", "defects", "columns kept", ""), rows)
            )
        parts += [
            _wrap(
                f"set aside, line {a['line']}: {a['reason']}" if a["line"] else f"refused: {a['reason']}",
                "  ",
            )
            for a in s["set_aside"]
        ]
    if found["channels"]:
        parts.append("")
        ways = [
            (c["channel"], "reached" if c["outcome"] == "sent" else c["outcome"], c["detail"])
            for c in found["channels"]
        ]
        parts.append(table(("channel", "state", "detail"), ways))
    for head, lines in (
        ("Not yet available", found["later"]),
        ("Worth knowing", found["notes"]),
        ("Problems", found["problems"]),
    ):
        if lines:
            parts += ["", head, *[_wrap(line, "  ") for line in lines]]
    parts += ["", _zone_line(config)]
    return "\n".join(parts)
