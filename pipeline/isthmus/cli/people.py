"""The commands about one person's data. A key comes on stdin, because command lines stand in histories and lists of
processes, and goes to stdout only."""

from __future__ import annotations

import sys
from datetime import date
from typing import Annotated

import typer

from isthmus.cli.app import AsOf, Config, all_series, app, day_of
from isthmus.console import Console

__all__ = ["forget", "lookup"]


@app.command()
def lookup(
    config: Config,
    reverse: Annotated[bool, typer.Option("--reverse", help="from a pseudonym to the key that has it")] = False,
    as_of: AsOf = None,
) -> None:
    """The pseudonym of a party, or with --reverse whose one is. For who may hold the secret.

    Reads one line from stdin and writes to stdout: a line for each party that a table of yours ever made of the key,
    and one for the key itself. The other way round, the log's window is read for the key, and nothing is kept. The log
    of signals is told that there was a lookup, and not of whom.

    \b
    Examples
      isthmus lookup configs/email.toml < key.txt
      isthmus lookup configs/email.toml --reverse --as-of 2026-11-30 < pseudonym.txt
    """
    from isthmus.lookup import key_within, pseudonyms_of
    from isthmus.nightly import window_of, yesterday
    from isthmus.settings import load
    from isthmus.signals import examine, note

    settings = load(config)
    examine(settings)
    text = _line()
    note(settings, "lookup", reverse=reverse)
    if reverse:
        typer.echo(key_within(settings, text, *window_of(settings, as_of or yesterday())))
    else:
        typer.echo("\n".join(pseudonyms_of(settings, text)))


@app.command()
def forget(
    config: Config,
    before: Annotated[
        date | None, typer.Option("--before", metavar="DATE", parser=day_of, help="nights whose as_of is before it")
    ] = None,
    party: Annotated[bool, typer.Option("--party", help="one party, whose key or pseudonym stands on stdin")] = False,
    dry_run: Annotated[bool, typer.Option("--dry-run", help="only say what would be removed")] = False,
) -> None:
    """Remove old nights of the file's series, or one party from all of them, with all kept work that tells of them.

    Of a party, the rows go; other parties' scores, counts and ranks stay as they were published, and each night that
    changed says so in its warnings. Then every file below run.work and run.warehouse is searched; exit code 74 when
    one still holds the party. The log itself is never touched: remove the party there first, or the next night has it
    again.

    \b
    Examples
      isthmus forget configs/email.toml --before 2026-09-01 --dry-run
      isthmus forget configs/email.toml --party < key.txt
    """
    from isthmus.forget import forget_nights, forget_party, unknown_series
    from isthmus.signals import note

    if (before is not None) == party:
        raise typer.BadParameter("give one of --before DATE and --party")
    every = all_series(config)
    say = Console().say
    if before is not None:
        done = forget_nights(every, before, dry=dry_run)
    else:
        done = forget_party(every, _line(), dry=dry_run)
    nights = ", ".join(map(str, done.nights)) or "none"
    would = "would be " if dry_run else ""
    if before is not None:
        say(f"nights {would}removed: {nights}")
    else:
        say(f"nights {would}published again without the party: {nights} ({done.rows} rows)")
    if not dry_run:
        note(every[0], "forgotten", nights=len(done.nights), party=party)
        say("what was kept between nights is removed; the next night reads its window again")
    if party and not dry_run:
        say(f"{done.looked_at} files below run.work and run.warehouse searched: none holds the party")
    if others := unknown_series(every):
        say(
            f"warning: the warehouse also has {', '.join(others)}, which these settings do not define; nothing there "
            "was touched"
        )
    if done.in_log:
        say("warning: the log still has the party; remove it there, or the next night publishes it again")
    if party and done.in_log is None:
        say("warning: the log could not be searched for the party")


def _line() -> str:
    """The line on stdin."""
    if sys.stdin.isatty():
        Console().say("party:")
    if not (text := sys.stdin.readline().strip()):
        raise typer.BadParameter("nothing came on stdin; give the party there, on one line")
    return text
