"""``pcaptool simulate``: a capture with known damage, and its truth."""

from pathlib import Path

import click

from pcaptool.cli.errors import told


@click.command(no_args_is_help=True)
@click.argument("profile", metavar="PROFILE")
@click.option("--out", "-o", required=True, type=click.Path(dir_okay=False, path_type=Path), metavar="FILE",
              help="Capture to write; .gz compresses. The truth goes to NAME.truth.csv beside it.")
@click.option("--plan", "plan_file", type=click.Path(dir_okay=False, path_type=Path), metavar="TOML",
              help="Plan file; the options below are then left aside.")
@click.option("--seed", type=int, default=1, show_default=True, help="The same seed gives the same bytes.")
@click.option("--start", default="2026-03-01T00:00:00+00:00", metavar="TIME", help="Time of the first frame.")
@click.option("--links", type=click.IntRange(1, 200), default=5, show_default=True, help="Transmitters.")
@click.option("--frames", type=click.IntRange(1), default=1000, show_default=True, help="Frames each of them sends.")
@click.option("--interval", type=float, default=2.0, show_default=True, help="Seconds between frames of a link.")
@click.option("--bit-error-rate", type=click.FloatRange(0, 1), default=0.0, help="Independent bit errors.")
@click.option("--burst", nargs=3, type=float, default=None, metavar="TO_BAD TO_GOOD WRONG",
              help="Two-state bit errors: transition rates, error probability in the bad state.")
@click.option("--loss", type=click.FloatRange(0, 1), default=0.0, help="Share of frames lost on the air.")
@click.option("--loss-burst", type=click.FloatRange(1), default=1.0, help="Mean run of lost frames.")
@click.option("--repeat", type=click.FloatRange(0, 1), default=0.0, help="Share of frames sent twice.")
@click.option("--late", type=click.FloatRange(0, 1), default=0.0, help="Share of frames delivered late.")
@click.option("--restart-at", type=float, multiple=True, metavar="SECONDS", help="Restart of every link, after the start.")
@click.option("--backhaul-loss", type=click.FloatRange(0, 1), default=0.0, help="Share of datagrams lost.")
@click.option("--foreign", type=click.IntRange(0), default=0, help="Packets of other traffic.")
@click.option("--snap-length", type=click.IntRange(0), default=0, help="Bytes kept of each packet; 0: all.")
@click.option("--parts", type=click.IntRange(1), default=1, help="Capture files of equal time.")
def simulate(profile: str, out: Path, plan_file: Path | None, seed: int, start: str, links: int, frames: int,
             interval: float, bit_error_rate: float, burst: tuple[float, float, float] | None, loss: float,
             loss_burst: float, repeat: float, late: float, restart_at: tuple[float, ...], backhaul_loss: float,
             foreign: int, snap_length: int, parts: int) -> None:
    """Write a capture with known damage, and the truth of every frame.

    \b
    pcaptool simulate merrowdale --out demo.pcap --loss 0.01 --seed 7
    pcaptool simulate merrowdale --out day.pcap.gz --plan day.toml

    A plan is TOML: seed, start, duration, and one [[link]] per transmitter with
    key, interval, loss, bit_error_rate, burst, periodic, weak, restart_at ...
    """
    with told():
        from pcaptool.profile import load_profile
        from pcaptool.simulate import Burst, LinkPlan, Plan, load_plan
        from pcaptool.simulate import simulate as run

        loaded = load_profile(profile)
        if plan_file:
            plan = load_plan(plan_file)
        else:
            common = dict(interval=interval, bit_error_rate=bit_error_rate, loss=loss, loss_burst=loss_burst,
                          repeat=repeat, late=late, restart_at=restart_at,
                          burst=Burst(to_bad=burst[0], to_good=burst[1], wrong=burst[2]) if burst else None)
            plan = Plan(seed=seed, start=start, duration=interval * (frames + 0.5), foreign=foreign, parts=parts,
                        snap_length=snap_length, backhaul_loss={"*": backhaul_loss},
                        link=tuple(LinkPlan(key=_key(loaded.link.by, i), first=interval * i / links / 2,
                                            **common)  # type: ignore[arg-type]
                                   for i in range(links)))
        for path in run(loaded, plan).write(out):
            click.echo(str(path))


def _key(by: tuple[str, ...], i: int) -> dict[str, int]:
    """Return the key of transmitter i: gateways 1 and 2 in turn, transmitters numbered from 1."""
    return {reference: 1 + i % 2 if reference.startswith("wrapper.") and len(by) > 1 else 1 + i
            for reference in by if not reference.startswith("carrier.")}
