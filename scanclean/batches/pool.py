"""Jobs in the calling process or in several of them; what happens to one does not touch the others.

Built on the standard library's process pool, whose processes are started afresh ("spawn", on every
system alike). A process that dies takes the whole pool with it; here the jobs that were in hand are
then tried once more, each in a pool of its own, so that only a job that kills its process fails.
"""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import signal
import threading
import warnings
from collections import deque
from collections.abc import Generator, Iterator
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass
from multiprocessing import connection
from typing import Generic, Protocol, TypeVar

__all__ = ["Job", "Ready", "run_jobs"]

T = TypeVar("T")
T_co = TypeVar("T_co", covariant=True)

# the libraries under NumPy and SciPy start threads of their own, which get in each other's way
_ONE_THREAD = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")


class Job(Protocol[T_co]):
    """Something to be done in any process: a value that can be pickled, as its result can."""

    def __call__(self) -> T_co:
        """Do it; an exception ends the whole run."""

    def lost(self) -> T_co:
        """The result of a job whose process died, twice."""


@dataclass(frozen=True)
class Ready(Generic[T]):
    """A result that takes no work, among jobs; no process is asked for it."""

    result: T


def run_jobs(
    ready: Iterator[Job[T] | Ready[T]],
    *,
    processes: int,
    later: deque[Job[T] | Ready[T]] | None = None,
    stop: threading.Event | None = None,
) -> Generator[T, None, None]:
    """Do jobs and yield their results as they come.

    Parameters
    ----------
    ready : iterator of Job and Ready
        Taken one at a time, no more than one beyond what is being done.
    processes : int
        1 does everything in the calling process.
    later : deque of Job and Ready, optional
        What the caller adds when it has seen a result; it goes first.
    stop : threading.Event, optional
        Once set, no further job is begun; those in hand are finished.
    """
    source = _Source(ready, later, stop)
    if processes == 1:
        while (job := source.next()) is not None:
            yield job.result if isinstance(job, Ready) else job()
        return
    with _Pool[T](processes) as pool:
        in_hand: dict[Future[T], Job[T]] = {}
        while True:
            # one job waits in the queue, so that no process waits for the caller
            while len(in_hand) <= processes and (job := source.next()) is not None:
                if isinstance(job, Ready):
                    yield job.result
                else:
                    in_hand[pool.submit(job)] = job
            if not in_hand:
                return
            done, _ = wait(in_hand, return_when=FIRST_COMPLETED)
            broken = any(isinstance(future.exception(), BrokenProcessPool) for future in done)
            if broken:
                done, _ = wait(in_hand)
                pool.restart()
            # in the order in which they were begun
            for future in [future for future in in_hand if future in done]:
                begun = in_hand.pop(future)
                if isinstance(future.exception(), BrokenProcessPool):
                    yield _alone(begun)
                else:
                    yield future.result()


def _alone(job: Job[T]) -> T:
    with _Pool[T](1) as pool:
        try:
            return pool.submit(job).result()
        except BrokenProcessPool:
            return job.lost()


class _Source(Generic[T]):
    """Where jobs come from."""

    def __init__(
        self,
        ready: Iterator[Job[T] | Ready[T]],
        later: deque[Job[T] | Ready[T]] | None,
        stop: threading.Event | None,
    ) -> None:
        self._ready, self._later, self._stop = ready, later, stop

    def next(self) -> Job[T] | Ready[T] | None:
        if self._stop is not None and self._stop.is_set():
            return None
        return self._later.popleft() if self._later else next(self._ready, None)


class _Pool(Generic[T]):
    """A process pool that can be made anew, and whose processes end with it."""

    def __init__(self, processes: int) -> None:
        self._processes = processes
        self._others = set(multiprocessing.active_children())
        self._executor = self._start()

    def _start(self) -> ProcessPoolExecutor:
        context = multiprocessing.get_context("spawn")
        return ProcessPoolExecutor(self._processes, mp_context=context, initializer=_set_up)

    def __enter__(self) -> _Pool[T]:
        return self

    def __exit__(self, kind: type[BaseException] | None, *_: object) -> None:
        if kind is not None:  # nobody waits for what is in hand
            self._executor.shutdown(wait=False, cancel_futures=True)
            # an interrupt may have come between two starts: look until none is left
            while mine := set(multiprocessing.active_children()) - self._others:
                for process in mine:
                    process.terminate()
                for process in mine:
                    process.join()
        self._executor.shutdown(wait=True)

    def submit(self, job: Job[T]) -> Future[T]:
        # a process may be started here: it gets these settings before it imports anything
        with _environment(dict.fromkeys(_ONE_THREAD, "1")), _interrupts_held():
            try:
                return self._executor.submit(_call, job)
            except BrokenProcessPool as error:
                future: Future[T] = Future()
                future.set_exception(error)
                return future

    def restart(self) -> None:
        """Go on with new processes after one died."""
        self._executor.shutdown(wait=True)
        self._executor = self._start()


def _call(job: Job[T]) -> T:
    return job()


def _set_up() -> None:
    """In a new process: leave interrupts to the caller, and end when it ends, however it does."""
    warnings.simplefilter("ignore")
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    caller = multiprocessing.parent_process()
    if caller is not None:
        threading.Thread(target=_end_with, args=(caller.sentinel,), daemon=True).start()


def _end_with(sentinel: int) -> None:
    connection.wait([sentinel])
    os._exit(1)


@contextlib.contextmanager
def _environment(values: dict[str, str]) -> Iterator[None]:
    before = {name: os.environ.get(name) for name in values}
    os.environ.update(values)
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                del os.environ[name]
            else:
                os.environ[name] = value


@contextlib.contextmanager
def _interrupts_held() -> Iterator[None]:
    """A process started meanwhile does not see Ctrl-C, not even while it imports."""
    if not hasattr(signal, "pthread_sigmask"):
        yield
        return
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)
