"""Turn the program's own errors into text on stderr and exit statuses."""

from collections.abc import Iterator
from contextlib import contextmanager

import click

from pcaptool.problem import CaptureError, PcaptoolError


@contextmanager
def told() -> Iterator[None]:
    """Print problems instead of a traceback: status 2, or 3 for captures."""
    try:
        yield
    except PcaptoolError as error:
        from pcaptool.report.terminal import visible

        for problem in error.problems:
            click.echo("\n".join(visible(line) for line in str(problem).split("\n")), err=True)
        raise click.exceptions.Exit(3 if isinstance(error, CaptureError) else 2) from None
