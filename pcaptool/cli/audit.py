"""``pcaptool audit``: parse options, call the API, print, exit."""

import gc
import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING

import click

from pcaptool.cli.errors import told

if TYPE_CHECKING:
    from pcaptool.report import Audit


@click.command(no_args_is_help=True)
@click.argument("captures", nargs=-1, required=True, metavar="CAPTURE...")
@click.option("--profile", "-p", "profiles", multiple=True, metavar="NAME|FILE",
              help="Profile to read them with; may be given again. Without it, the shipped profiles are tried.")
@click.option("--out", "-o", type=click.Path(file_okay=False, path_type=Path), metavar="DIR",
              help="Folder for report.html and the tables.")
@click.option("--from", "begin", metavar="TIME", help="Leave out frames before, as 2026-03-01T06:00 (UTC).")
@click.option("--until", "end", metavar="TIME", help="Leave out frames from then on.")
@click.option("--link", "links", multiple=True, metavar="NAME", help="Only this link; * and ? allowed.")
@click.option("--frames", type=click.Choice(["parquet", "csv", "none"]), default="parquet", show_default=True,
              help="How to leave the frame table.")
@click.option("--jobs", "-j", type=click.IntRange(1), default=None, help="Cores to use; default all.")
@click.option("--json", "as_json", is_flag=True, help="Print the summary as JSON instead of the tables.")
@click.option("--quiet", "-q", is_flag=True, help="No progress on stderr.")
@click.pass_context
def audit(ctx: click.Context, captures: tuple[str, ...], profiles: tuple[str, ...], out: Path | None, begin: str | None,
          end: str | None, links: tuple[str, ...], frames: str, jobs: int | None, as_json: bool,
          quiet: bool) -> None:
    """Audit captures: which links lost, corrupted or repaired frames.

    A CAPTURE is a file (pcap or pcapng, also gzip, bzip2, xz, zstd), a folder, searched downwards, or a
    pattern in quotes.

    \b
    pcaptool audit site/ --profile merrowdale --out audit-site
    pcaptool audit "site/*.pcap.gz" -p my-radio.toml -o out --frames csv
    pcaptool audit day.pcapng --link "2/*" --from 2026-03-01T14:00 --json
    """
    with told():
        prepare(quiet)
        from pcaptool.audit import Options
        from pcaptool.cli.progress import progress
        from pcaptool.report import audit as run

        gc.freeze()             # what was loaded stays; only what the audit makes is looked through
        gc.enable()
        with progress(quiet) as show:
            options = Options(begin=time_of(begin, "--from"), end=time_of(end, "--until"), links=links,
                              frames=frames != "none" and out is not None, jobs=jobs or os.cpu_count() or 1,
                              progress=show)
            near = out.absolute().parent if out else None
            near = near if near and near.is_dir() else None
            result = run(captures, list(profiles) or None, options=options, near=near)
        page = result.write(out, frames=frames) if out else None
        result.close()
    print_audit(result, as_json, page, named=not profiles)
    ctx.exit(status_of(result))


def prepare(quiet: bool) -> None:
    """Say so when the kernels must be compiled first."""
    folder = os.environ.get("NUMBA_CACHE_DIR")
    if folder and not quiet and Path(folder).is_dir() and not any(Path(folder).iterdir()):
        click.echo("first run on this machine: preparing the decoders, about half a minute", err=True)


def time_of(text: str | None, option: str) -> int | None:
    """Return a time given on the command line as ns; UTC unless it carries its own offset."""
    from datetime import UTC, datetime

    from pcaptool.problem import Problem, UsageError

    if text is None:
        return None
    try:
        moment = datetime.fromisoformat(text)
    except ValueError:
        raise UsageError(Problem(file=option, place="", found=repr(text), expected="an ISO 8601 time",
                                 fix="write 2026-03-01T14:32:00, in UTC, or with an offset such as +01:00")) from None
    moment = moment if moment.tzinfo else moment.replace(tzinfo=UTC)
    since = moment - datetime(1970, 1, 1, tzinfo=UTC)
    return (since.days * 86400 + since.seconds) * 1_000_000_000 + since.microseconds * 1000


def print_audit(result: "Audit", as_json: bool, page: Path | None, *, named: bool) -> None:
    """Print tables or JSON on stdout; what went wrong and where to look on stderr."""
    from pcaptool.report.terminal import ledger_text, links_text, verdict_text, visible

    r = result.result
    for problem in r.problems:
        click.echo(visible_lines(str(problem)), err=True)
    if as_json:
        import json

        click.echo(json.dumps(result.summary, indent=2, ensure_ascii=False))
        return
    colour = sys.stdout.isatty() and "NO_COLOR" not in os.environ and os.environ.get("TERM") != "dumb"
    if named:
        click.echo("Profile taken: " + ", ".join(p.name for p in r.profiles) + "\n")
    click.echo(links_text(r.links, colour=colour))
    click.echo(ledger_text(r.ledger))
    for note in r.notes:
        click.echo(visible(f"Note: {note}."))
    over = sum(str(row["verdict"]).startswith("over") for row in r.links)
    click.echo(verdict_text(r.verdict, r.totals, over))
    if page:
        click.echo(f"Open {page}", err=True)


def visible_lines(text: str) -> str:
    """Return text with control characters made visible, line by line."""
    from pcaptool.report.terminal import visible

    return "\n".join(visible(line) for line in text.split("\n"))


def status_of(result: "Audit") -> int:
    """Return the exit status of an audit; an exceeded limit comes before a damaged capture."""
    r = result.result
    return 1 if r.verdict == "limit exceeded" else 0 if r.whole else 3
