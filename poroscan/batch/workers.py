"""Processes that measure pictures side by side, and what happens when one of them dies.

This module imports nothing heavy: a new process reads it first, and ``_begin`` sets the number of threads before
any numerical library is loaded.
"""

from __future__ import annotations

import multiprocessing
import os
import signal
import threading
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from multiprocessing.connection import wait as wait_for
from typing import TypeVar

Task = TypeVar("Task")
Result = TypeVar("Result")

_ONE_THREAD = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS", "BLIS_NUM_THREADS")


def usable_cores() -> int:
    """Number of processor cores this process may use."""
    try:
        return max(1, len(os.sched_getaffinity(0)))
    except AttributeError:  # not offered by every operating system
        return max(1, os.cpu_count() or 1)


def run_tasks(
    function: Callable[[Task], Result], tasks: Iterable[Task], *, workers: int
) -> Iterator[tuple[Task, Result | None]]:
    """Run a function over tasks; yield each task with its result, in the order in which they end.

    A process that dies (killed, out of memory, crashed library) breaks its whole pool. The pool is then made anew, and what
    was lost is tried once more, one task at a time, so that only the one at fault is given up.

    Parameters
    ----------
    function
        Function of one task, importable by name. Exceptions it raises end the run.
    tasks
        The tasks, taken as they are needed.
    workers
        Number of processes; 0 works in this process (where a crash ends the run).

    Yields
    ------
    tuple
        The task and its result; None where a process died that worked on it alone.
    """
    if workers == 0:
        for task in tasks:
            yield task, function(task)
        return
    source, suspects = iter(tasks), deque[Task]()
    while True:
        broken: list[Task] = []
        yield from _one_pool(function, source, workers, broken)
        if not broken:
            return
        suspects.extend(broken)
        while suspects:
            yield from _one_alone(function, suspects)


def _one_pool(
    function: Callable[[Task], Result], source: Iterator[Task], workers: int, broken: list[Task]
) -> Iterator[tuple[Task, Result]]:
    """Work through the source until it ends or the pool breaks; tasks that went down with it are put in ``broken``."""
    with _pool(workers) as pool:
        running: dict[Future[Result], Task] = {}
        while not broken:
            for task in _up_to(source, 2 * workers - len(running)):
                try:
                    running[pool.submit(function, task)] = task
                except BrokenProcessPool:
                    broken.append(task)
            if not running:
                break
            for future in wait(running, return_when=FIRST_COMPLETED).done:
                task = running.pop(future)
                try:
                    result = future.result()
                except BrokenProcessPool:
                    broken.append(task)
                    continue
                yield task, result
        for future, task in running.items():  # the pool is broken: every future is done or ends now
            try:
                result = future.result()
            except BrokenProcessPool:
                broken.append(task)
                continue
            yield task, result


def _one_alone(function: Callable[[Task], Result], suspects: deque[Task]) -> Iterator[tuple[Task, Result | None]]:
    """Try suspects one at a time in one fresh process, until they are through or it dies on one."""
    with _pool(1) as pool:
        while suspects:
            task = suspects.popleft()
            try:
                result = pool.submit(function, task).result()
            except BrokenProcessPool:
                yield task, None
                return
            yield task, result


def _up_to(source: Iterator[Task], number: int) -> Iterator[Task]:
    for _ in range(number):
        try:
            yield next(source)
        except StopIteration:
            return


class _Pool(ProcessPoolExecutor):
    def __exit__(self, kind: object, value: object, trace: object) -> None:
        # on an error or an interrupt nothing that still waits is begun
        self.shutdown(wait=True, cancel_futures=kind is not None)


def _pool(workers: int) -> _Pool:
    return _Pool(workers, mp_context=multiprocessing.get_context("spawn"), initializer=_begin)


def _begin() -> None:
    for name in _ONE_THREAD:
        os.environ[name] = "1"
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # the parent answers an interrupt
    parent = multiprocessing.parent_process()
    if parent is not None:
        threading.Thread(target=_leave_with, args=(parent.sentinel,), daemon=True).start()


def _leave_with(sentinel: int) -> None:
    """End this process when its parent has died: an orphan must not write into a folder that a new run has taken."""
    wait_for([sentinel])
    os._exit(1)
