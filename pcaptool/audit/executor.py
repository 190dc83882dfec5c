"""Who does the work beside this thread: processes that decode pieces, and a thread for hashes and encoding.

Any other executor can be handed in for the pieces.
"""

import multiprocessing
import signal
import sys
from collections.abc import Callable
from concurrent.futures import Executor, Future, ProcessPoolExecutor, ThreadPoolExecutor
from typing import ParamSpec, TypeVar

P = ParamSpec("P")
T = TypeVar("T")


def processes(workers: int) -> ProcessPoolExecutor:
    """Return an executor of worker processes; forked where that is safe, so that they start warm."""
    method = "fork" if sys.platform == "linux" else "spawn"
    pool = ProcessPoolExecutor(
        workers, mp_context=multiprocessing.get_context(method),
        initializer=signal.signal, initargs=(signal.SIGINT, signal.SIG_IGN))    # this process is interrupted for all
    pool.submit(int)        # starts the workers now, before this process has threads of its own
    return pool


class _AtOnce(Executor):
    """Does what is submitted before it returns."""

    def submit(self, fn: Callable[P, T], /, *args: P.args, **kwargs: P.kwargs) -> Future[T]:
        future: Future[T] = Future()
        try:
            future.set_result(fn(*args, **kwargs))
        except Exception as error:
            future.set_exception(error)
        return future


def beside(jobs: int) -> Executor:
    """Return an executor for what can go on beside this thread; with one job, one core does everything."""
    return ThreadPoolExecutor(1) if jobs > 1 else _AtOnce()
