"""A task and what it is to be done to in; what it made of each, as each is done, out: in parallel processes.

Workers are started afresh (spawned), so nothing of the caller's state or threads leaks into them, and each computes on
one thread: the processors are shared out by process. Each has a pipe of its own and shares no lock with the others, so
that one which dies, or is ended while it speaks, leaves nobody waiting.
"""

from __future__ import annotations

import copyreg
import multiprocessing
import os
import signal
import traceback
from collections import deque
from collections.abc import Callable, Generator, Iterator, Sequence
from contextlib import contextmanager, suppress
from multiprocessing.connection import Connection, wait
from typing import Any, Final, Generic, NoReturn, TypeVar

from benchtool import errors
from benchtool.whole_files import remove_unfinished

__all__ = ["processors", "run_tasks"]

Item = TypeVar("Item")
Outcome = TypeVar("Outcome")

_ENDED_BY_SIGNAL: Final = 128 + signal.SIGTERM
_PATIENCE_S: Final = 5.0
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

    Closing the iterator, or any exception in it, an interrupt too, ends the workers.
    """
    if jobs < 2 or len(items) < 2:
        for place, item in enumerate(items):
            yield place, task(item)
        return
    left = deque(enumerate(items))
    workers: list[_Worker[Item, Outcome]] = []
    try:
        while left and len(workers) < jobs:
            workers.append(_Worker(task, *left.popleft()))
        while workers:
            spoken = wait([worker.connection for worker in workers])
            for worker in [worker for worker in workers if worker.connection in spoken]:
                place = worker.place
                try:
                    outcome = worker.answer()
                except (EOFError, ConnectionError):  # killed, for want of memory as a rule
                    outcome = None
                    _replace(workers, worker, _Worker(task, *left.popleft()) if left else None)
                else:
                    if left:
                        worker.give(*left.popleft())
                    else:
                        _replace(workers, worker, None)
                yield place, outcome
    finally:
        for worker in workers:
            worker.end()


def _replace(
    workers: list[_Worker[Item, Outcome]], old: _Worker[Item, Outcome], new: _Worker[Item, Outcome] | None
) -> None:
    old.end()
    workers[workers.index(old) : workers.index(old) + 1] = [] if new is None else [new]


class _Worker(Generic[Item, Outcome]):
    """A process and the pipe to it; it has one item at a time."""

    def __init__(self, task: Callable[[Item], Outcome], place: int, item: Item) -> None:
        context = multiprocessing.get_context("spawn")
        self.connection, theirs = context.Pipe()
        self.process = context.Process(target=_serve, args=(theirs, task), daemon=True)
        with _interrupts_held():
            self.process.start()
        theirs.close()
        self.give(place, item)

    def give(self, place: int, item: Item) -> None:
        """Send the next item; a worker that has just died is found out when its answer is awaited."""
        self.place = place
        with suppress(ConnectionError):
            self.connection.send(item)

    def answer(self) -> Outcome:
        """Return what was made of the item, or raise what the task raised; EOFError where the process is gone."""
        raised, outcome = self.connection.recv()
        if raised:
            raise outcome
        answer: Outcome = outcome
        return answer

    def end(self) -> None:
        """End the process, by force where it does not heed."""
        self.connection.close()
        self.process.terminate()
        self.process.join(_PATIENCE_S)
        if self.process.is_alive():
            self.process.kill()
            self.process.join()


@contextmanager
def _interrupts_held() -> Iterator[None]:
    """Let an interrupt wait until a worker has been started: it starts deaf to it, not half-way into Python."""
    if not hasattr(signal, "pthread_sigmask"):
        yield
        return
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)


def _serve(connection: Connection, task: Callable[[Any], Any]) -> None:
    """Do the task to each item that comes, until no more can come."""
    # The terminal sends an interrupt to all processes of a command; only the first answers it, and ends the others.
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    signal.signal(signal.SIGTERM, _leave)
    for name in _THREAD_SETTINGS:
        os.environ.setdefault(name, "1")
    for error in vars(errors).values():
        if isinstance(error, type) and issubclass(error, errors.BenchtoolError):
            copyreg.pickle(error, _take_apart)
    while True:
        try:
            item = connection.recv()
        except (EOFError, ConnectionError):
            return
        try:
            answer: tuple[bool, Any] = (False, task(item))
        except Exception as error:  # it is raised where the task was given
            error.add_note(traceback.format_exc())
            answer = (True, error)
        connection.send(answer)


def _leave(_signal: int, _frame: object) -> NoReturn:
    # No exception: one that is raised inside a finaliser or a callback of a library is lost, and the work would go on.
    remove_unfinished()
    os._exit(_ENDED_BY_SIGNAL)


def _take_apart(error: errors.BenchtoolError) -> tuple[Any, ...]:
    return _put_together, (type(error), vars(error))


def _put_together(kind: type[errors.BenchtoolError], state: dict[str, Any]) -> errors.BenchtoolError:
    error = kind.__new__(kind)
    vars(error).update(state)
    return error
