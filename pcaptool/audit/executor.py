"""Where pieces are decoded: here, in processes of our own, or in any executor that is handed in."""

import multiprocessing
import sys
from collections.abc import Callable
from concurrent.futures import Executor, Future, ProcessPoolExecutor
from typing import ParamSpec, TypeVar

P = ParamSpec("P")
T = TypeVar("T")


class Inline(Executor):
    """Runs each task when its result is asked for, in this thread."""

    def submit(self, fn: Callable[P, T], /, *args: P.args, **kwargs: P.kwargs) -> Future[T]:
        return _Lazy(lambda: fn(*args, **kwargs))


class _Lazy(Future[T]):
    def __init__(self, work: Callable[[], T]) -> None:
        super().__init__()
        self._work = work

    def result(self, timeout: float | None = None) -> T:
        if not self.done():
            self.set_result(self._work())
        return super().result(timeout)


def processes(jobs: int) -> ProcessPoolExecutor:
    """Return an executor of worker processes; forked where that is safe, so that they start warm."""
    method = "fork" if sys.platform == "linux" else "spawn"
    return ProcessPoolExecutor(jobs, mp_context=multiprocessing.get_context(method))
