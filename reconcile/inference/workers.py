"""Several processes at one task, each of which holds the same large thing; the answers never depend on how many."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor
from contextlib import contextmanager
from multiprocessing import get_context
from typing import Any

from reconcile.inference.memory import keep_freed_memory

_HELD: list[Any] = []  # of a worker process, which gets it once and not with every task


def _hold(shared: Any) -> None:  # noqa: ANN401  # whatever the tasks share
    keep_freed_memory()
    _HELD[:] = [shared]


def _work(task: tuple[Callable[..., Any], tuple[Any, ...]]) -> Any:  # noqa: ANN401
    function, arguments = task
    return function(_HELD[0], *arguments)


@contextmanager
def spread_over(workers: int, shared: Any) -> Iterator[Callable[..., list[Any]]]:  # noqa: ANN401
    """Give a way to run ``function(shared, *arguments)`` for several arguments, in their order.

    Parameters
    ----------
    workers : processes; with one, everything runs here
    shared : handed to every call first; it must survive the way to another process
    """
    if workers <= 1:
        yield lambda function, tasks: [function(shared, *arguments) for arguments in tasks]
        return
    with ProcessPoolExecutor(workers, get_context("spawn"), initializer=_hold, initargs=(shared,)) as pool:
        yield lambda function, tasks: list(pool.map(_work, [(function, arguments) for arguments in tasks]))
