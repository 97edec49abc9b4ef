"""Who does the work: this process or worker processes, behind one interface."""

from __future__ import annotations

import multiprocessing
import os
import signal
import threading
from collections import deque
from concurrent.futures import BrokenExecutor, Executor, Future, ProcessPoolExecutor
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any, TypeVar

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Iterator

Task = TypeVar("Task")
Result = TypeVar("Result")

AHEAD_PER_WORKER = 4  # results that wait for their turn; bounds memory, and hides a slow picture from the others
ONE_THREAD = dict.fromkeys(
    ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS"), "1"
)


class Here(Executor):
    """Runs each task at once in this process."""

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:  # noqa: ANN401
        """Run a task.

        Parameters
        ----------
        fn : callable
            What to run.
        *args : object
            Passed on.
        **kwargs : object
            Passed on.

        Returns
        -------
        Future
            Done. What the task raises is raised here, so that an interrupt is prompt.
        """
        future: Future[Any] = Future()
        future.set_result(fn(*args, **kwargs))
        return future


class Workers(ProcessPoolExecutor):
    """Worker processes with one thread each, which leave Ctrl-C to their parent and end with it.

    Parameters
    ----------
    count : int
        Number of processes.
    """

    def __init__(self, count: int) -> None:
        # Not fork: a forked copy of a process with running threads can hang.
        super().__init__(count, mp_context=multiprocessing.get_context("spawn"), initializer=_begin)

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:  # noqa: ANN401
        """Hand a task out, starting a worker for it where there may be one more.

        Parameters
        ----------
        fn : callable
            What to run.
        *args : object
            Passed on.
        **kwargs : object
            Passed on.

        Returns
        -------
        Future
            Of its result.
        """
        with _quiet_birth():
            return super().submit(fn, *args, **kwargs)

    def drop(self) -> None:
        """End the workers at once, whatever they are doing."""
        for process in list((self._processes or {}).values()):
            process.terminate()
        self.shutdown(wait=True, cancel_futures=True)


def in_order(
    work: Callable[[Task], Result], tasks: Iterable[Task], workers: int, lost: Callable[[Task], Result]
) -> Iterator[Result]:
    """Work tasks off, and give the results in the order of the tasks.

    Tasks are handed out as workers free up and results taken as they come, so that memory stays flat.
    When a worker dies, each task that was under way is tried once more, alone, which also finds the one that kills.

    Parameters
    ----------
    work : callable
        Takes a task, gives its result; a function of a module, so that it can be sent to a worker.
    tasks : iterable
        What to do; it and its result can be sent to a worker.
    workers : int
        Number of processes; with 1 this process does it.
    lost : callable
        Takes a task that ended its worker twice, gives the result to record.

    Yields
    ------
    object
        Results.
    """
    pool: Executor = Here() if workers == 1 else Workers(workers)
    spare = Workers(1)  # starts no process before it is needed
    ahead = 1 if workers == 1 else AHEAD_PER_WORKER * workers
    under_way: deque[tuple[Task, Future[Result]]] = deque()

    def _finish() -> Result:
        nonlocal spare
        task, future = under_way[0]
        try:
            result = future.result()
        except BrokenExecutor:
            try:
                again: Future[Result] = spare.submit(work, task)
                result = again.result()
            except BrokenExecutor:
                spare.drop()
                spare = Workers(1)
                result = lost(task)
        under_way.popleft()
        return result

    try:
        for task in tasks:
            if len(under_way) >= ahead:
                yield _finish()
            try:
                future = pool.submit(work, task)
            except BrokenExecutor:
                pool.shutdown()
                pool = Workers(workers)
                future = pool.submit(work, task)
            under_way.append((task, future))
        while under_way:
            yield _finish()
    finally:
        if under_way and isinstance(pool, Workers):
            pool.drop()
        pool.shutdown()
        spare.drop()


def _begin() -> None:
    """Set a worker up."""
    import cv2  # noqa: PLC0415  (the parent may never need it)

    signal.signal(signal.SIGINT, signal.SIG_IGN)
    threading.Thread(target=_end_with_parent, daemon=True).start()
    cv2.setNumThreads(1)


def _end_with_parent() -> None:
    parent = multiprocessing.parent_process()
    if parent is not None:
        parent.join()
        os._exit(1)


@contextmanager
def interrupts_held() -> Iterator[None]:
    """Let Ctrl-C wait until the block is done.

    Yields
    ------
    None
        Nothing.
    """
    if not hasattr(signal, "pthread_sigmask"):
        yield
        return
    mask = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, mask)


@contextmanager
def _quiet_birth() -> Iterator[None]:
    """Let workers be born with one thread per library, and with Ctrl-C blocked, since they inherit both."""
    before = {name: os.environ.get(name) for name in ONE_THREAD}
    os.environ.update(ONE_THREAD)
    try:
        with interrupts_held():
            yield
    finally:
        for name, value in before.items():
            if value is None:
                del os.environ[name]
            else:
                os.environ[name] = value
