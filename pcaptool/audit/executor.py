"""Processes that decode pieces beside this one; any other executor can be handed in instead."""

import multiprocessing
import sys
from concurrent.futures import ProcessPoolExecutor


def processes(workers: int) -> ProcessPoolExecutor:
    """Return an executor of worker processes; forked where that is safe, so that they start warm."""
    method = "fork" if sys.platform == "linux" else "spawn"
    pool = ProcessPoolExecutor(workers, mp_context=multiprocessing.get_context(method))
    pool.submit(int)        # starts the workers now, before this process has threads of its own
    return pool
