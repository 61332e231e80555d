"""Work on many files in processes: the same results in the same order, however many there are."""

from __future__ import annotations

import multiprocessing
import os
import signal
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, as_completed, wait
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from types import TracebackType
from typing import Generic, TypeVar

Job = TypeVar("Job")
Result = TypeVar("Result")

LARGEST_CHUNK = 16  # files handed over at once: the hand-over then costs far less than the work
MOST_WORKERS = 60  # Windows waits for no more than 63 processes at once
FEW = 24  # files that are done here sooner than processes start up
_THREADS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS")


class Crew(Generic[Job, Result]):
    """Processes that do one kind of work on many files; they start when they are first needed.

    Parameters
    ----------
    workers : processes; 1: all is done in this one
    work : a function at the top of its module, from a job to its result
    lost : the result of a job on which its process died
    """

    def __init__(self, workers: int, work: Callable[[Job], Result], lost: Callable[[Job], Result]) -> None:
        self.workers, self.work, self.lost = min(workers, MOST_WORKERS), work, lost
        self._pool: ProcessPoolExecutor | None = None

    def __enter__(self) -> Crew[Job, Result]:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Let the processes go; what has not begun is not done any more."""
        self._stop()

    def run(self, jobs: Sequence[Job], tick: Callable[[int], None]) -> list[Result]:
        """Return the results in the order of the jobs; `tick` is told now and then how many are done."""
        if self.workers > 1 and len(jobs) > FEW:
            with _one_thread_each():
                if self._start():
                    return self._share_out(jobs, tick)
        results = []
        for job in jobs:
            results.append(self.work(job))
            tick(len(results))
        return results

    def _share_out(self, jobs: Sequence[Job], tick: Callable[[int], None]) -> list[Result]:
        """Hand the jobs over in chunks; of chunks whose process died, find the file that did it."""
        size = max(1, min(LARGEST_CHUNK, len(jobs) // (4 * self.workers)))
        chunks = [jobs[first : first + size] for first in range(0, len(jobs), size)]
        waiting, done = deque(range(len(chunks))), dict[int, list[Result]]()
        while len(done) < len(chunks):
            died = self._until_one_dies(chunks, waiting, done, lambda: tick(sum(map(len, done.values()))))
            if died:
                self._stop()
                for number in died:
                    done[number] = self._one_by_one(chunks[number])
                self._start()
        return [result for number in range(len(chunks)) for result in done[number]]

    def _until_one_dies(
        self,
        chunks: Sequence[Sequence[Job]],
        waiting: deque[int],
        done: dict[int, list[Result]],
        tick: Callable[[], None],
    ) -> list[int]:
        """Work through the waiting chunks; return those that were lost together with a process, in order."""
        running: dict[Future[list[Result]], int] = {}
        died: list[int] = []
        while (waiting and not died) or running:
            while waiting and not died and len(running) < 2 * self.workers:
                try:
                    running[self._submit(chunks[waiting[0]])] = waiting[0]
                except BrokenProcessPool:
                    died.append(waiting[0])
                waiting.popleft()
            for future in wait(running, return_when=FIRST_COMPLETED).done:
                number = running.pop(future)
                try:
                    done[number] = future.result()
                except BrokenProcessPool:
                    died.append(number)
            tick()
        return sorted(died)

    def _one_by_one(self, jobs: Sequence[Job]) -> list[Result]:
        """Do each job in a process that nothing else shares."""
        results: list[Result] = []
        for job in jobs:
            if self._pool is None:
                self._pool = _pool(1)
            try:
                results += self._submit([job]).result()
            except BrokenProcessPool:
                results.append(self.lost(job))
                self._stop()
        self._stop()
        return results

    def _submit(self, jobs: Sequence[Job]) -> Future[list[Result]]:
        assert self._pool is not None
        return self._pool.submit(_each, self.work, list(jobs))

    def _start(self) -> bool:
        """Start the processes where they do not run yet; returns False where this machine allows none."""
        if self._pool is None:
            try:
                self._pool = _pool(self.workers)
                next(as_completed([self._pool.submit(_ready) for _ in range(self.workers)])).result()
            except (BrokenProcessPool, OSError, NotImplementedError):  # no semaphores, or a script without a main guard
                self._stop()
                self.workers = 1
        return self._pool is not None

    def _stop(self) -> None:
        if self._pool is not None:
            self._pool.shutdown(wait=True, cancel_futures=True)
            self._pool = None


def _pool(workers: int) -> ProcessPoolExecutor:
    # Spawned on every system: a forked process would inherit locks that another thread holds.
    return ProcessPoolExecutor(workers, mp_context=multiprocessing.get_context("spawn"), initializer=_leave_interrupts)


def _leave_interrupts() -> None:
    """Leave Ctrl-C to the process that started this one."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)


def _ready() -> None:
    """Show that a process came up."""


def _each(work: Callable[[Job], Result], jobs: Sequence[Job]) -> list[Result]:
    return [work(job) for job in jobs]


@contextmanager
def _one_thread_each() -> Iterator[None]:
    """Let processes that start meanwhile keep linear algebra to one thread: several would stand in each other's way."""
    before = {name: os.environ.get(name) for name in _THREADS}
    os.environ.update(dict.fromkeys(_THREADS, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value
