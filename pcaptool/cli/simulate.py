"""``pcaptool simulate``: a capture with known damage, and its truth."""

from pathlib import Path
from typing import Any

import click

from pcaptool.cli.errors import told

BESIDE_PLAN = ("profile", "out", "plan_file", "seed")


def _numbers(text: str, separator: str, least: int, most: int, expected: str) -> tuple[float, ...]:
    """Return numbers with a separator between, some of which may be left out at the end."""
    try:
        numbers = tuple(float(word) for word in text.split(separator))
    except ValueError:
        numbers = ()
    if not least <= len(numbers) <= most:
        raise click.BadParameter(f"found {text!r}, expected {expected}")
    return numbers


def _burst(ctx: click.Context, param: click.Parameter, text: str | None) -> tuple[float, ...] | None:
    return None if text is None else _numbers(text, ",", 3, 4, "three or four numbers, as 0.0005,0.05,0.5")


def _restarts(ctx: click.Context, param: click.Parameter, texts: tuple[str, ...]) -> list[dict[str, Any]]:
    expected = "seconds, or seconds:counter, as 900:128"
    restarts = []
    for text in texts:
        at, *to = _numbers(text, ":", 1, 2, expected)
        if to and not to[0].is_integer():
            raise click.BadParameter(f"found {text!r}, expected {expected}")
        restarts.append({"at": at, "to": int(to[0]) if to else 0})
    return restarts


PROBABILITY = click.FloatRange(0, 1)


@click.command(no_args_is_help=True)
@click.argument("profile", metavar="PROFILE")
@click.option("--out", "-o", required=True, type=click.Path(dir_okay=False, path_type=Path), metavar="FILE",
              help="Capture to write: NAME.pcap, with NAME.truth.csv beside it; NAME.pcap.gz packs both.")
@click.option("--plan", "plan_file", type=click.Path(dir_okay=False, path_type=Path), metavar="TOML",
              help="Plan file, instead of the options below; only --seed may stand beside it.")
@click.option("--seed", type=click.IntRange(0), default=1, show_default=True,
              help="The same seed, the same bytes.")
@click.option("--start", default="2026-03-01T00:00:00Z", show_default=True, metavar="TIME",
              help="Time of the first frame.")
@click.option("--links", type=click.IntRange(1, 10_000), default=5, show_default=True, help="Transmitters.")
@click.option("--frames", type=click.IntRange(1), default=1000, show_default=True,
              help="Frames each of them sends.")
@click.option("--interval", type=click.FloatRange(0, min_open=True), default=2.0, show_default=True,
              metavar="SECONDS", help="From one frame of a link to its next.")
@click.option("--bit-error-rate", type=PROBABILITY, default=0.0, metavar="P", help="Independent bit errors.")
@click.option("--burst", callback=_burst, metavar="P,R,PB[,PG]",
              help="Two-state bit errors: good to bad, bad to good, wrong in bad, wrong in good.")
@click.option("--burst-fresh", is_flag=True, help="The state begins anew with every frame; else it runs on.")
@click.option("--loss", type=PROBABILITY, default=0.0, metavar="P", help="Frames lost on the air.")
@click.option("--loss-burst", type=click.FloatRange(1), default=None, metavar="N",
              help="Mean run of lost frames; without it, each is lost for itself.")
@click.option("--repeat", type=PROBABILITY, default=0.0, metavar="P", help="Frames sent twice.")
@click.option("--late", type=PROBABILITY, default=0.0, metavar="P", help="Frames forwarded after later ones.")
@click.option("--late-places", type=click.IntRange(1, 1000), default=2, show_default=True, metavar="N",
              help="How many frames overtake them.")
@click.option("--restart", callback=_restarts, multiple=True, metavar="SECONDS[:COUNTER]",
              help="All links restart then, counters at 0 or COUNTER.")
@click.option("--backhaul-loss", type=PROBABILITY, default=0.0, metavar="P",
              help="Datagrams lost behind gateways.")
@click.option("--foreign", type=click.IntRange(0), default=0, metavar="N", help="Packets of other traffic.")
@click.option("--snap-length", type=click.IntRange(0), default=0, metavar="BYTES",
              help="Kept of a packet; 0: all.")
@click.option("--split", default="1", show_default=True, metavar="N|TIME",
              help='Capture files: how many, or the time of each as "6 h".')
@click.option("--nanoseconds", is_flag=True, help="Times in ns, else µs.")
@click.option("--byte-order", type=click.Choice(["little", "big"]), default="little", show_default=True,
              help="Of the capture's headers.")
@click.pass_context
def simulate(ctx: click.Context, /, profile: str, out: Path, plan_file: Path | None, seed: int, start: str,
             links: int, frames: int, interval: float, burst: tuple[float, ...] | None, burst_fresh: bool,
             restart: list[dict[str, Any]], backhaul_loss: float, split: str, **options: Any
             ) -> None:
    """Write a capture with known damage, and the truth of every frame beside it as CSV.

    \b
    pcaptool simulate merrowdale --out demo.pcap --loss 0.01 --seed 7
    pcaptool simulate merrowdale --out fade.pcap --burst 0.0005,0.05,0.5
    pcaptool simulate merrowdale --out b.pcap.gz --restart 600 --restart 900:128
    pcaptool simulate my-radio.toml --out day.pcap --plan day.toml --seed 2

    A plan says all of that link by link. day.toml may be:

    \b
    seed     = 1
    start    = 2026-03-01T00:00:00Z
    duration = "24 h"
    split    = "6 h"                        # day-01.pcap, day-02.pcap ...
    foreign  = 600                          # packets of other traffic

    \b
    [[backhaul]]
    gateway = 2
    loss    = 0.02

    \b
    [[link]]
    key      = { unit = 2 }                 # the profile's link key
    gateway  = 1
    interval = "20 s"
    fields   = { depth = { walk = 1.3, step = 0.01, low = 0, high = 3 } }
    bit_error_rate_by_time = [["17:00", 0], ["18:15", 0.02], ["19:00", 0]]
    burst    = { to_bad = 0.0005, to_good = 0.05, wrong = 0.5 }
    periodic = { every = "10 ms", bits = 6, during = [["6 h", "8 h"]] }
    loss     = 0.01
    outage   = [["18 h", "18.1 h"]]
    restart  = [{ at = "9 h", to = 0 }]
    """
    with told():
        from pcaptool.profile import load_profile
        from pcaptool.simulate import even_plan, load_plan
        from pcaptool.simulate import simulate as run

        loaded = load_profile(profile)
        if plan_file:
            _alone(ctx)
            plan = load_plan(plan_file)
            if _given(ctx, "seed"):
                plan = plan.model_copy(update={"seed": seed})
        else:
            names = ("to_bad", "to_good", "wrong", "wrong_in_good")
            whole = ("foreign", "snap_length", "nanoseconds", "byte_order")
            link = {k: v for k, v in options.items() if k not in whole} | {
                "burst": dict(zip(names, burst, strict=False)) | {"fresh": burst_fresh} if burst else None,
                "restart": restart}
            rest = {k: options[k] for k in whole} | {
                "seed": seed, "start": start, "split": int(split) if split.isdecimal() else split,
                "backhaul": [{"loss": backhaul_loss}]}
            plan = even_plan(loaded, links=links, frames=frames, interval=interval, link=link, rest=rest)
        for path in run(loaded, plan, plan_file.name if plan_file else "options").write(out):
            click.echo(str(path))


def _given(ctx: click.Context, name: str) -> bool:
    return ctx.get_parameter_source(name) == click.core.ParameterSource.COMMANDLINE


def _alone(ctx: click.Context) -> None:
    """Raise UsageError for options that a plan would leave aside."""
    from pcaptool.problem import Problem, UsageError

    beside = [p.opts[0] for p in ctx.command.params
              if p.name and p.name not in BESIDE_PLAN and _given(ctx, p.name)]
    if beside:
        raise UsageError(Problem(file="--plan", place="", found="also " + ", ".join(beside),
                                 expected="a plan alone, or with --seed", fix="write them into the plan"))
