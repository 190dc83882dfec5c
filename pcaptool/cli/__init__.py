"""The command line: one file per command, imported when it is called."""

import gc
import os
import sys
from importlib import import_module
from pathlib import Path
from tempfile import gettempdir

import click

from pcaptool import __version__

COMMANDS = {
    "audit": "audit captures: which links lost, corrupted or repaired frames",
    "profile": "check, list and show profiles",
    "simulate": "write a capture with known damage, and its truth",
}
STATUS = """
Exit status: 0 all within limits; 1 a limit is exceeded; 2 wrong usage or profile;
3 a capture could not be read whole (what could be read is reported).
"""


class Commands(click.Group):
    """A group whose commands are imported one by one."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        command = getattr(import_module(f"pcaptool.cli.{cmd_name}"), cmd_name)
        assert isinstance(command, click.Command)
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))


@click.group(cls=Commands, epilog="Completion: run 'pcaptool --completion bash' (zsh, fish) and follow its first line.",
             context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 80})
@click.version_option(__version__, message="pcaptool %(version)s")
@click.option("--completion", type=click.Choice(["bash", "zsh", "fish"]), is_eager=True, expose_value=False,
              callback=lambda ctx, _, shell: _completion(ctx, shell), help="Print the completion script of a shell.")
def cli() -> None:
    """Post-process packet captures of radio gateways that forward frames in UDP.

    \b
    pcaptool audit site/ --profile merrowdale --out audit-site
    pcaptool profile show merrowdale
    pcaptool simulate merrowdale --out demo.pcap --seed 7
    """


def _completion(ctx: click.Context, shell: str | None) -> None:
    if shell is None or ctx.resilient_parsing:
        return
    from click.shell_completion import get_completion_class

    kind = get_completion_class(shell)
    assert kind is not None
    place = {"bash": "~/.bashrc", "zsh": "~/.zshrc", "fish": "~/.config/fish/completions/pcaptool.fish"}[shell]
    click.echo(f"# append this to {place}")
    click.echo(kind(cli, {}, "pcaptool", "_PCAPTOOL_COMPLETE").source())
    ctx.exit(0)


def kernel_folder() -> Path:
    """Return the folder for compiled kernels: the user's cache, or a temporary one where that is read-only."""
    base = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache")
    folder = base / "pcaptool" / f"kernels-{__version__}"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        if os.access(folder, os.W_OK):
            return folder
    except OSError:
        pass
    folder = Path(gettempdir()) / f"pcaptool-kernels-{os.getuid() if hasattr(os, 'getuid') else 'user'}"
    folder.mkdir(parents=True, exist_ok=True)
    return folder


def main() -> None:
    """Run the command line; what the process leaves behind is flushed, then it ends at once."""
    gc.disable()            # nothing to collect while modules load
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    os.environ.setdefault("NUMBA_CACHE_DIR", str(kernel_folder()))
    status = 0
    try:
        returned = cli.main(standalone_mode=False)
        status = returned if isinstance(returned, int) else 0
    except click.exceptions.Exit as stop:
        status = stop.exit_code
    except click.ClickException as error:
        error.show()
        status = 2
    except (click.Abort, KeyboardInterrupt):
        click.echo("interrupted; nothing half-written is left", err=True)
        status = 130
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    except SystemExit as stop:
        status = stop.code if isinstance(stop.code, int) else 1
    try:
        sys.stdout.flush()
        sys.stderr.flush()
    except BrokenPipeError:
        pass
    os._exit(status)        # spares the teardown of compiled code, a quarter of a short run
