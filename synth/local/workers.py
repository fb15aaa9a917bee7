"""Independent pieces of work on several cores, with the same results in the same order as on one.

Processes are started afresh (spawn), so nothing is inherited by accident; a script that calls the library without the
usual ``if __name__ == '__main__'`` cannot start any, and the work is then done in the process itself.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Sequence
from typing import TypeVar

from synth.base.progress import Listener, silent

Work = TypeVar("Work")
Result = TypeVar("Result")
_THREADS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")


def cores(wanted: int | None = None) -> int:
    """How many processes to use: ``wanted``, or as many as this process may run on."""
    if wanted is not None:
        return max(1, wanted)
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def in_order(
    function: Callable[[Work], Result], works: Sequence[Work], workers: int, progress: Listener = silent
) -> Iterator[Result]:
    """``function`` of every piece of work, in order; ``function`` must be found by name in a module."""
    done = 0
    if workers > 1 and len(works) > 1:
        try:
            for result in _spawned(function, works, workers):
                done += 1
                yield result
        except _Broken as broken:
            progress(f"no further processes ({broken}); going on in this one")
    for work in works[done:]:
        yield function(work)


class _Broken(Exception):
    """The pool could not be started or died."""


def _spawned(function: Callable[[Work], Result], works: Sequence[Work], workers: int) -> Iterator[Result]:
    from concurrent.futures import ProcessPoolExecutor
    from concurrent.futures.process import BrokenProcessPool
    from multiprocessing import get_context

    pool = ProcessPoolExecutor(min(workers, len(works)), mp_context=get_context("spawn"))
    before = {name: os.environ.get(name) for name in _THREADS}
    os.environ.update(dict.fromkeys(_THREADS, "1"))  # small matrices gain nothing from threads of their own
    try:
        waiting = [pool.submit(function, work) for work in works]
        for future in waiting:
            try:
                result = future.result()
            except (BrokenProcessPool, OSError, RuntimeError) as error:
                raise _Broken(str(error).split("\n")[0]) from error
            yield result
    finally:
        pool.shutdown(wait=True, cancel_futures=True)
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value
