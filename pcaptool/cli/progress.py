"""A progress bar on stderr: bytes, frames per second, time left; silent where nobody watches."""

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager


@contextmanager
def progress(quiet: bool) -> Iterator[Callable[[int, int, int], None] | None]:
    """Give a function of (bytes done, bytes in all, frames so far) that moves the bar, or None."""
    if quiet or not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, DownloadColumn, Progress, TextColumn, TimeRemainingColumn

    begun = time.monotonic()
    bar = Progress(BarColumn(28), DownloadColumn(), TextColumn("{task.fields[rate]}"), TimeRemainingColumn(),
                   console=Console(stderr=True), transient=True)
    with bar:
        task = bar.add_task("", total=None, rate="")

        def show(done: int, total: int, frames: int) -> None:
            rate = frames / max(time.monotonic() - begun, 1e-3)
            bar.update(task, total=total, completed=done, rate=f"{rate:,.0f} frames/s")

        yield show
