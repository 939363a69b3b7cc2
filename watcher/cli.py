"""The command line: a thin shell around ``watcher.commands`` with one handler for our errors."""

from __future__ import annotations

import json
import logging
import sys
from collections.abc import Callable
from datetime import datetime
from functools import wraps
from pathlib import Path
from typing import Any

import click

__all__ = ["main"]

_CONFIG = click.option(
    "-c",
    "--config",
    "config_path",
    type=click.Path(path_type=Path),
    help="Configuration (default plant.toml).",
)
_JSON = click.option("--json", "as_json", is_flag=True, help="Print one JSON document.")
_AT = click.option(
    "--at",
    "at",
    help='Take this as now: "2026-03-04T10:15" in plant time; otherwise the clock counts, or the last pass if that was made with --at.',
)
_BY = click.option("--by", required=True, help="Who says so.")
_NOTE = click.option("--note", help="What was found, in a few words.")


class _Fault(click.ClickException):
    """Ends the command with our exit status; the text is one sentence or a listing."""

    def __init__(self, text: str, status: int) -> None:
        super().__init__(text)
        self.__dict__["exit_code"] = status

    def show(self, file: Any = None) -> None:
        """Print it as it is, without click's own heading."""
        del file
        click.echo(self.message, err=True)


def _config(ctx: click.Context, path: Path | None) -> Any:
    from watcher.config import ConfigError, load_config

    chosen = path or ctx.obj or Path("plant.toml")
    try:
        return load_config(chosen)
    except ConfigError as error:
        raise _Fault("\n".join(error.problems), 2) from error


def _moment(config: Any, at: str | None, *, live: bool = False) -> datetime:
    from watcher.commands import present, real_clock

    if at is None:
        return real_clock().astimezone(config.zone) if live else present(config)
    try:
        moment = datetime.fromisoformat(at)
    except ValueError:
        raise _Fault(f'--at: found "{at}"; accepted is a time such as "2026-03-04T10:15".', 2) from None
    return moment if moment.tzinfo else moment.replace(tzinfo=config.zone)


def _print(value: Any) -> None:
    click.echo(json.dumps(value, ensure_ascii=False, indent=1))


def _handled(function: Callable[..., Any]) -> Callable[..., Any]:
    """Turn our own errors into one line and an exit status."""

    @wraps(function)
    def inner(*args: Any, **kwargs: Any) -> Any:
        from watcher.leasing import LeaseHeldError
        from watcher.store import AlertStateError, StoreError

        try:
            return function(*args, **kwargs)
        except AlertStateError as error:
            raise _Fault(str(error), 2) from error
        except (StoreError, LeaseHeldError) as error:
            raise _Fault(str(error), 1) from error

    return inner


def _stream(config: Any, name: str | None) -> str | None:
    if name is not None and name not in config.streams:
        raise _Fault(f'There is no stream "{name}"; there are {", ".join(config.streams)}.', 2)
    return name


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@_CONFIG
@click.option("-v", "--verbose", is_flag=True, help="Log what is done to standard error.")
@click.version_option(package_name="gapbell", message="gapbell %(version)s")
@click.pass_context
def main(ctx: click.Context, config_path: Path | None, *, verbose: bool) -> None:
    """Tell a quality team when a rare failure stream has really shifted, and be silent otherwise."""
    ctx.obj = config_path
    logging.basicConfig(
        stream=sys.stderr,
        level=logging.INFO if verbose else logging.WARNING,
        format="%(asctime)s %(levelname)s %(message)s",
    )


@main.command()
@_CONFIG
@_AT
@_JSON
@click.pass_context
@_handled
def cycle(ctx: click.Context, config_path: Path | None, at: str | None, *, as_json: bool) -> None:
    """Make one pass: collect, assess, raise or withdraw, deliver."""
    from watcher import commands, textout

    config = _config(ctx, config_path)
    report = commands.cycle(config, now=_moment(config, at, live=True))
    if as_json:
        _print(report.as_json())
    else:
        click.echo(textout.cycle_text(report))
    ctx.exit(0 if report.is_fine else 1)


@main.command()
@_CONFIG
@click.pass_context
@_handled
def watch(ctx: click.Context, config_path: Path | None) -> None:
    """Stay, and make passes and digests on schedule until stopped."""
    from watcher.daemon import watch as run

    logging.getLogger().setLevel(logging.INFO)
    config = _config(ctx, config_path)
    ctx.exit(run(config))


@main.command()
@_CONFIG
@_AT
@_JSON
@click.pass_context
@_handled
def status(ctx: click.Context, config_path: Path | None, at: str | None, *, as_json: bool) -> None:
    """Show the standing of every stream, source and channel."""
    from watcher import commands, textout

    config = _config(ctx, config_path)
    found = commands.status(config, now=_moment(config, at))
    if as_json:
        _print(found)
    else:
        click.echo(textout.status_text(found, config))
    wrong = any(s["error"] or s["stale"] for s in found["sources"]) or any(
        c["failed"] for c in found["channels"]
    )
    ctx.exit(1 if wrong else 0)


@main.group(invoke_without_command=True)
@_CONFIG
@click.option("--all", "everything", is_flag=True, help="Settled and withdrawn ones too.")
@_JSON
@click.pass_context
@_handled
def alerts(ctx: click.Context, config_path: Path | None, *, everything: bool, as_json: bool) -> None:
    """List open (or all) alerts; `alerts show ID` shows one with its evidence."""
    ctx.obj = config_path or ctx.obj
    if ctx.invoked_subcommand is not None:
        return
    from watcher import commands, textout

    config = _config(ctx, config_path)
    found = commands.list_alerts(config, everything=everything)
    if as_json:
        _print(found)
    else:
        click.echo(textout.alerts_text(found["alerts"], config, everything=everything))


@alerts.command("show")
@click.argument("alert_id")
@_CONFIG
@_JSON
@click.pass_context
@_handled
def alerts_show(ctx: click.Context, alert_id: str, config_path: Path | None, *, as_json: bool) -> None:
    """Show one alert with its evidence, records, history and how to redo its figures."""
    from watcher import commands, textout

    config = _config(ctx, config_path)
    found = commands.show_alert(config, alert_id)
    if as_json:
        _print(found)
    else:
        click.echo(textout.alert_text(found, config))


@main.command()
@click.argument("alert_id")
@_BY
@_NOTE
@_AT
@_CONFIG
@click.pass_context
@_handled
def take(
    ctx: click.Context, alert_id: str, by: str, note: str | None, at: str | None, config_path: Path | None
) -> None:
    """Say that somebody is on it."""
    from watcher import commands

    config = _config(ctx, config_path)
    done = commands.take(config, alert_id, by=by, note=note, now=_moment(config, at))
    click.echo(f"{done.label} is taken by {by}.")


@main.command()
@click.argument("alert_id")
@_BY
@click.option(
    "--finding",
    required=True,
    type=click.Choice(["cause-found", "no-cause", "recording-error", "intended-change"]),
    help="What it was.",
)
@_NOTE
@_AT
@_CONFIG
@click.pass_context
@_handled
def settle(
    ctx: click.Context, alert_id: str, by: str, finding: str, note: str | None, at: str | None, config_path: Path | None
) -> None:  # fmt: skip
    """Settle an alert with a finding."""
    from watcher import commands

    config = _config(ctx, config_path)
    done = commands.settle(config, alert_id, by=by, finding=finding, note=note, now=_moment(config, at))
    after = {
        "intended-change": "A new baseline starts at the shift.",
        "recording-error": "Correct the records in their source; the rules start again from now.",
    }.get(finding, "The rules start again from now.")
    click.echo(f"{done.label} is settled: {finding}. {after}")


@main.command()
@_CONFIG
@_AT
@click.option("--out", type=click.Path(path_type=Path), help="Write mail, text and page into this folder.")
@click.option("--send", is_flag=True, help="Send it, once for its period.")
@_JSON
@click.pass_context
@_handled
def digest(
    ctx: click.Context,
    config_path: Path | None,
    at: str | None,
    out: Path | None,
    *,
    send: bool,
    as_json: bool,
) -> None:
    """Compose the digest."""
    from watcher import commands

    config = _config(ctx, config_path)
    done = commands.write_digest(config, now=_moment(config, at), out=out, send=send)
    if as_json:
        _print(done)
        return
    if out is None and not send:
        click.echo(done["text"], nl=False)
    for name in done["files"]:
        click.echo(f"Wrote {name}")
    if send:
        click.echo(
            "The digest is on its way."
            if done["sent"]
            else "The digest of this period was sent before; nothing was sent now."
        )


@main.command()
@_CONFIG
@_AT
@click.option("--send-test", is_flag=True, help="Send a test message on every channel.")
@_JSON
@click.pass_context
@_handled
def check(
    ctx: click.Context, config_path: Path | None, at: str | None, *, send_test: bool, as_json: bool
) -> None:
    """Check the configuration, reach sources and channels, show the first rows as understood."""
    from watcher import commands, textout

    config = _config(ctx, config_path)
    found = commands.check(config, now=_moment(config, at, live=True), send_test=send_test)
    if as_json:
        _print(found)
    else:
        click.echo(textout.check_text(found, config))
    ctx.exit(1 if found["problems"] else 0)


@main.command()
@_CONFIG
@click.option("--source", help="Only this source.")
@click.option("--stream", help="Only what belongs to this stream.")
@click.option("--history", is_flag=True, help="Earlier revisions too.")
@_JSON
@click.pass_context
@_handled
def records(
    ctx: click.Context, config_path: Path | None, source: str | None, stream: str | None, *, history: bool, as_json: bool
) -> None:  # fmt: skip
    """List every record as understood, with file, line and revision."""
    from watcher import commands, textout

    config = _config(ctx, config_path)
    if source is not None and source not in config.sources:
        raise _Fault(f'There is no source "{source}"; there are {", ".join(config.sources)}.', 2)
    found = commands.list_records(config, source=source, stream=_stream(config, stream), history=history)
    if as_json:
        _print(found)
    else:
        click.echo(textout.records_text(found["records"]))


@main.command()
@_CONFIG
@click.option("--source", help="Only this source.")
@click.option("--retry", is_flag=True, help="Read them again after a mapping was corrected.")
@_JSON
@click.pass_context
@_handled
def rejects(
    ctx: click.Context, config_path: Path | None, source: str | None, *, retry: bool, as_json: bool
) -> None:
    """List set-aside rows with their reasons."""
    from watcher import commands, textout

    config = _config(ctx, config_path)
    if retry:
        _later("rejects --retry")
    found = commands.list_rejects(config, source=source)
    if as_json:
        _print(found)
    else:
        click.echo(textout.rejects_text(found["rejects"]))


@main.command()
@_CONFIG
@click.option("--from", "start", help="First day to show alerts from.")
@click.option("--to", "end", help="Last day.")
@click.option(
    "--settle-after", default="30 days", show_default=True, help="When each alert is taken as settled."
)
@click.option("--html", type=click.Path(path_type=Path), help="Write a page.")
@_JSON
@click.pass_context
@_handled
def rehearse(
    ctx: click.Context, config_path: Path | None, start: str | None, end: str | None, settle_after: str, html: Path | None,
    *, as_json: bool,
) -> None:  # fmt: skip
    """Run the engine over past records; nothing is sent or stored."""
    from pydantic import ValidationError

    from watcher import textout
    from watcher.commands import real_clock
    from watcher.config import Span
    from watcher.config.values import day_end_us
    from watcher.rehearsal import rehearse as run

    config = _config(ctx, config_path)
    if html is not None:
        _later("rehearse --html")
    try:
        span = Span.model_validate(settle_after)
    except ValidationError:
        raise _Fault(
            f'--settle-after: found "{settle_after}"; accepted is a length of time such as "30 days".', 2
        ) from None
    first = _moment(config, start) if start else None
    last = _moment(config, end)
    if end is not None and len(end) <= 10:  # a whole day belongs to the window
        last = datetime.fromtimestamp(day_end_us(last.date(), config.zone) / 1e6, config.zone)
    found = run(config, start=first, end=last, settle_after=span, clock=real_clock)
    if as_json:
        _print(found)
    else:
        click.echo(textout.rehearsal_text(found, config))


@main.command()
@click.argument("stream")
@_CONFIG
@_JSON
@click.option("--from", "start", hidden=True)
@click.option("--to", "end", hidden=True)
@click.option("--by", hidden=True)
@click.option("--reason", hidden=True)
@click.pass_context
@_handled
def baseline(
    ctx: click.Context, stream: str, config_path: Path | None, start: str | None, end: str | None, by: str | None, reason: str | None,
    *, as_json: bool,
) -> None:  # fmt: skip
    """Show every baseline that a stream had."""
    from watcher import commands, textout

    config = _config(ctx, config_path)
    if start or end or by or reason:
        _later("setting a baseline from the command line")
    name = _stream(config, stream)
    assert name is not None
    found = commands.list_baselines(config, name)
    if as_json:
        _print(found)
    else:
        click.echo(textout.baselines_text(found, config))


@main.command()
@click.option(
    "--out", type=click.Path(path_type=Path), help="Folder for mails, chat bodies, digest and pictures."
)
@click.pass_context
def trial(ctx: click.Context, out: Path | None) -> None:
    """Run an invented yard's three years through the whole product."""
    from watcher.trial.run import run

    ctx.exit(run(out, click.echo))


def _later(what: str) -> None:
    raise _Fault(f"{what} is not yet available in this version.", 1)


def _add_later(name: str, text: str) -> None:
    @main.command(
        name, help=f"{text} (Not yet available.)", context_settings={"ignore_unknown_options": True}
    )
    @click.argument("rest", nargs=-1)
    def command(rest: tuple[str, ...]) -> None:
        del rest
        _later(f"gapbell {name}")


for _name, _text in (
    ("new", "Write a commented starter configuration."),
    ("pause", "Pause a stream for a stated time."),
    ("resume", "Resume a paused stream."),
    ("time-to-signal", "How long until shifts of several sizes would be noticed."),
    ("advise", "Which form can see anything, and why."),
):
    _add_later(_name, _text)
