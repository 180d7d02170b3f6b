"""Independent jobs on several processes; a process that dies costs only the job it was working on."""

from __future__ import annotations

import os
import pickle
import signal
import sys
import types
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager, suppress
from typing import Any

Jobs = Sequence[tuple[int, Any]]
Done = Callable[[int, Any], None]
THREAD_LIMITS = ("OMP_NUM_THREADS", "MKL_NUM_THREADS", "OPENBLAS_NUM_THREADS")


class SpreadError(Exception):
    """The jobs cannot be sent to other processes; the text says why."""


def available_cores() -> int:
    """Cores this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def run_spread(function: Callable[..., Any], shared: Any, jobs: Jobs, processes: int, done: Done, died: Done) -> None:
    """Call ``function(shared, job)`` for every job on several processes with one BLAS thread each.

    Processes are started afresh ("spawn"), so that threads of a numerical library never meet a fork. A job whose
    process died is repeated alone, since it may have been the victim of a neighbour's death.

    Parameters
    ----------
    function : callable
        Importable by name.
    shared : object
        Sent with every job.
    jobs : sequence of (index, job)
    processes : int
    done : callable
        Called here with (index, result) as results arrive.
    died : callable
        Called here with (index, reason) if the process died on this job twice.

    Raises
    ------
    SpreadError
        Before any job was done.
    """
    waiting = deque((index, _packed(function, shared, job)) for index, job in jobs)
    hidden = not any(b"__main__" in payload for _, payload in waiting)
    first = True
    while waiting:
        for index, payload in _one_pool(waiting, processes, done, hidden, try_out=first):
            if _one_pool(deque([(index, payload)]), 1, done, hidden):
                died(index, "the process that computed this point died (out of memory, or killed)")
        first = False


def _packed(*parts: Any) -> bytes:
    try:
        return pickle.dumps(parts)
    except Exception as error:  # pickle raises whatever the object's own code does
        raise SpreadError(f"a part of the input cannot be sent to other processes ({error})") from error


def _one_pool(
    waiting: deque[tuple[int, bytes]], processes: int, done: Done, hidden: bool, try_out: bool = False
) -> list[tuple[int, bytes]]:
    """Work on the jobs until none is left or a process dies; return the jobs that were then in progress."""
    running: dict[Future[Any], tuple[int, bytes]] = {}
    with _pool(processes) as pool:
        if try_out:
            _try_out(pool, processes, waiting[0][1], hidden)
        while waiting or running:
            with _starting(hidden):
                fed = _feed(pool, waiting, running, processes)
            finished = wait(running, return_when=FIRST_COMPLETED).done
            if not fed or any(isinstance(future.exception(), BrokenProcessPool) for future in finished):
                return [job for future, job in running.items() if not _settled(future, job, done)]
            for future in finished:
                done(running.pop(future)[0], future.result())
    return []


def _feed(pool: ProcessPoolExecutor, waiting: deque[Any], running: dict[Any, Any], most: int) -> bool:
    """Submit jobs, no more than can be in progress, so that the victims of a death are known; False if it is dead."""
    while waiting and len(running) < most:
        try:
            running[pool.submit(_work, waiting[0][1])] = waiting[0]
        except BrokenProcessPool:
            return False
        waiting.popleft()
    return True


def _settled(future: Future[Any], job: tuple[int, bytes], done: Done) -> bool:
    """In a dead pool: hand over the result if this job got one."""
    try:
        result = future.result()
    except BrokenProcessPool:
        return False
    done(job[0], result)
    return True


def _try_out(pool: ProcessPoolExecutor, processes: int, payload: bytes, hidden: bool) -> None:
    """Start the processes and unpack a job there, so that neither fails later for all jobs."""
    try:
        with _starting(hidden):
            futures = [pool.submit(_unpack, payload) for _ in range(processes)]
        for future in futures:
            future.result()
    except BrokenProcessPool as error:
        advice = "keep the call under `if __name__ == '__main__':`"
        raise SpreadError(f"other processes cannot be started here; in a script, {advice}") from error
    except Exception as error:
        raise SpreadError(f"a part of the input is not importable in other processes ({error})") from error


@contextmanager
def _pool(processes: int) -> Iterator[ProcessPoolExecutor]:
    """A pool whose processes are ended at once when the block is left by an exception such as Ctrl-C."""
    from multiprocessing import get_context

    pool = ProcessPoolExecutor(processes, mp_context=get_context("spawn"), initializer=_begin)
    try:
        yield pool
    except BaseException:
        for process in list((pool._processes or {}).values()):
            with suppress(OSError, ValueError):
                process.terminate()
        pool.shutdown(wait=False, cancel_futures=True)
        raise
    pool.shutdown()


@contextmanager
def _starting(hidden: bool) -> Iterator[None]:
    """Start processes with one BLAS thread, and (if `hidden`) without running the user's script again.

    A spawned process imports the main script to find functions defined there; no job needs it if none refers to it.
    """
    before = {name: os.environ.get(name) for name in THREAD_LIMITS}
    main = sys.modules["__main__"]
    os.environ.update(dict.fromkeys(THREAD_LIMITS, "1"))
    if hidden:
        sys.modules["__main__"] = types.ModuleType("__main__")
    try:
        yield
    finally:
        sys.modules["__main__"] = main
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


def _begin() -> None:
    """In a new process: Ctrl-C is the parent's business, and one thread is enough."""
    from threadpoolctl import threadpool_limits

    signal.signal(signal.SIGINT, signal.SIG_IGN)
    threadpool_limits(1)


def _unpack(payload: bytes) -> bool:
    pickle.loads(payload)
    return True


def _work(payload: bytes) -> Any:
    function, shared, job = pickle.loads(payload)
    return function(shared, job)
