"""A task and what it is to be done to in; what it made of each, as each is done, out: in parallel processes.

Workers are started afresh (spawned), so nothing of the caller's state or threads leaks into them, and each computes
on one thread: the processors are shared out by process. An interrupt ends the workers at once, but lets each take
back the file that it was about to write.
"""

from __future__ import annotations

import copyreg
import multiprocessing
import os
import signal
from collections.abc import Callable, Generator, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from concurrent.futures.process import BrokenProcessPool
from types import MappingProxyType
from typing import Any, Final, NoReturn, TypeVar

from benchtool import errors

__all__ = ["processors", "run_tasks"]

Item = TypeVar("Item")
Outcome = TypeVar("Outcome")

_ENDED_BY_SIGNAL: Final = 128 + signal.SIGTERM
_THREAD_SETTINGS: Final = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")


def processors() -> int:
    """Return how many processors this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def run_tasks(
    task: Callable[[Item], Outcome], items: Sequence[Item], jobs: int
) -> Generator[tuple[int, Outcome | None], None, None]:
    """Yield the place of each item and what `task` returned for it, as they are done; None where its process died.

    Parameters
    ----------
    task : a function of a module, with arguments and results that can be pickled; what it raises is raised here
    jobs : processes; with one, or for one item, all is done in this process

    Closing the iterator, or any exception in it, ends the workers.
    """
    if jobs < 2 or len(items) < 2:
        for place, item in enumerate(items):
            yield place, task(item)
        return
    left = dict(enumerate(items))
    try:
        for place, outcome in _in_pool(task, left, min(jobs, len(items))):
            del left[place]
            yield place, outcome
    except BrokenProcessPool:
        # One process was killed, for want of memory as a rule, and took the pool with it: find out which item it was.
        for place, item in left.items():
            yield place, _alone(task, item)


def _alone(task: Callable[[Item], Outcome], item: Item) -> Outcome | None:
    try:
        return next(iter(_in_pool(task, {0: item}, 1)))[1]
    except BrokenProcessPool:
        return None


def _in_pool(
    task: Callable[[Item], Outcome], items: dict[int, Item], jobs: int
) -> Generator[tuple[int, Outcome], None, None]:
    others = set(multiprocessing.active_children())
    pool = ProcessPoolExecutor(jobs, multiprocessing.get_context("spawn"), _start_worker)
    try:
        places = {pool.submit(_work, task, item): place for place, item in items.items()}
        for future in as_completed(places):
            yield places.pop(future), future.result()
    except BaseException:
        pool.shutdown(wait=False, cancel_futures=True)
        for worker in set(multiprocessing.active_children()) - others:
            worker.terminate()
        raise
    finally:
        pool.shutdown()


def _work(task: Callable[[Item], Outcome], item: Item) -> Outcome:
    try:
        return task(item)
    except SystemExit:
        # Everything on the way out has been tidied up; the pool would go on to the next item.
        os._exit(_ENDED_BY_SIGNAL)


def _start_worker() -> None:
    for name in _THREAD_SETTINGS:
        os.environ.setdefault(name, "1")
    # The terminal sends an interrupt to all processes of a command; only the first answers it, and ends the others.
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    signal.signal(signal.SIGTERM, _leave)
    copyreg.pickle(MappingProxyType, _take_apart_mapping)
    for error in vars(errors).values():
        if isinstance(error, type) and issubclass(error, errors.BenchtoolError):
            copyreg.pickle(error, _take_apart_error)


def _leave(_signal: int, _frame: object) -> NoReturn:
    raise SystemExit(_ENDED_BY_SIGNAL)


def _take_apart_mapping(mapping: MappingProxyType[Any, Any]) -> tuple[Any, ...]:
    return MappingProxyType, (dict(mapping),)


def _take_apart_error(error: errors.BenchtoolError) -> tuple[Any, ...]:
    return _put_together, (type(error), vars(error))


def _put_together(kind: type[errors.BenchtoolError], state: dict[str, Any]) -> errors.BenchtoolError:
    error = kind.__new__(kind)
    vars(error).update(state)
    return error
