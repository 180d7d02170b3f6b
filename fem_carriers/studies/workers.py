"""Independent jobs on several processes; a process that dies costs only the job it was working on."""

from __future__ import annotations

import os
import pickle
import signal
import sys
import threading
import time
import types
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from ..errors import Complaints

if TYPE_CHECKING:
    from multiprocessing.connection import Connection
    from multiprocessing.context import SpawnProcess

Jobs = Iterable[tuple[int, Any]]
Done = Callable[[int, Any], None]
Payloads = deque[tuple[int, bytes]]
THREAD_LIMITS = ("OMP_NUM_THREADS", "MKL_NUM_THREADS", "OPENBLAS_NUM_THREADS")
MOST_DEATHS = 3
"""A job that so many processes died on is set aside."""
PACKET_S = 0.05
"""Short jobs are sent several at a time, of about so long together; every result comes back alone, at once."""
LARGEST_PACKET = 1000
KILLED = "the process that computed this point died three times (out of memory, or killed)"


class SpreadError(Exception):
    """The jobs cannot be sent to other processes; the text says why."""


def available_cores() -> int:
    """Cores this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def check_processes(what: str, processes: object) -> None:
    """Refuse anything but a whole number of processes, or None."""
    problems = Complaints(what)
    good = processes is None or (isinstance(processes, int) and not isinstance(processes, bool) and processes >= 1)
    problems.unless(good, f"processes = {processes!r}", "a whole number of at least 1, or None for all cores")
    problems.raise_if_any()


def run_spread(
    function: Callable[..., Any], shared: Any, jobs: Jobs, processes: int, done: Done, died: Done,
    count_death: Done = lambda index, times: None,
) -> None:  # fmt: skip
    """Call ``function(shared, job)`` for every job on several processes with one BLAS thread each.

    Processes are started afresh ("spawn"), so that threads of a numerical library never meet a fork. One that dies is
    replaced, and the job it was working on is repeated.

    Parameters
    ----------
    function : callable
        Importable by name.
    shared : object
        Sent once to every process.
    jobs : iterable of (index, job)
    processes : int
    done : callable
        Called here with (index, result) as results arrive.
    died : callable
        Called here with (index, reason) if processes died on this job three times.
    count_death : callable
        Called here with (index, 1) after every death.

    Raises
    ------
    SpreadError
        Before any job was done.
    """
    head = packed(function, shared)
    waiting = deque((index, packed(job)) for index, job in jobs)
    if not waiting:
        return
    hidden = not any(b"__main__" in payload for payload in (head, *(p for _, p in waiting)))
    crew = _Crew(head, hidden, waiting, done, died, count_death)
    with crew.started(min(processes, len(waiting))):
        crew.work()


def packed(*parts: Any) -> bytes:
    """Parts as bytes for another process.

    Raises
    ------
    SpreadError
        What cannot be sent, such as a lambda.
    """
    try:
        return pickle.dumps(parts)
    except Exception as error:  # pickle raises whatever the object's own code does
        raise SpreadError(f"a part of the input cannot be sent to other processes ({error})") from error


def packet_size(seconds_per_job: float, waiting: int, processes: int, packet_s: float = PACKET_S) -> int:
    """How many jobs to send at a time: about `packet_s` of work, and a fair share of what is left."""
    wanted = packet_s / seconds_per_job if seconds_per_job > 0 else LARGEST_PACKET
    return max(1, min(int(wanted), LARGEST_PACKET, waiting // (2 * processes)))


@dataclass
class _Worker:
    """A process, this end of its pipe, and what it was sent and has not answered, in order."""

    process: SpawnProcess
    pipe: Connection
    pending: Payloads = field(default_factory=deque)


@dataclass
class _Crew:
    """The processes and what is left to do."""

    head: bytes
    hidden: bool
    waiting: Payloads
    done: Done
    died: Done
    count_death: Done
    workers: list[_Worker] = field(default_factory=list)
    deaths: dict[int, int] = field(default_factory=dict)
    seconds_per_job: float = 1.0

    @contextmanager
    def started(self, processes: int) -> Iterator[None]:
        """Processes that have unpacked what they need; ended at once when the block is left by an exception."""
        try:
            self.workers += [self._start() for _ in range(processes)]  # all at once, then greeted in turn
            self.workers[:] = [self._greeted(worker) for worker in self.workers]
            yield
        except BaseException:
            for worker in self.workers:
                worker.process.terminate()
            raise
        finally:
            for worker in self.workers:
                worker.pipe.close()  # a process that reads the end of its pipe leaves
            for worker in self.workers:
                worker.process.join(5)
                with suppress(OSError, ValueError):
                    worker.process.kill()

    def _start(self) -> _Worker:
        from multiprocessing import get_context

        context = get_context("spawn")
        here, there = context.Pipe()
        process = context.Process(target=_serve, args=(there, self.head), daemon=True)
        with starting(self.hidden):
            process.start()
        there.close()
        return _Worker(process, here)

    def work(self) -> None:
        """Until every job is done or set aside."""
        from multiprocessing.connection import wait

        while self.waiting or any(worker.pending for worker in self.workers):
            self._feed()
            pipes = {worker.pipe: worker for worker in self.workers if worker.pending}
            for pipe in wait(list(pipes)):
                self._hear(pipes[pipe])  # type: ignore[index]

    def _feed(self) -> None:
        """Jobs for every idle process. One that is busy gets none, so neither end ever waits to be read."""
        for worker in self.workers:
            if self.waiting and not worker.pending:
                count = packet_size(self.seconds_per_job, len(self.waiting), len(self.workers))
                packet = [self.waiting.popleft() for _ in range(count)]
                worker.pending.extend(packet)
                with suppress(OSError):  # dead; its pipe will tell
                    worker.pipe.send([payload for _, payload in packet])

    def _hear(self, worker: _Worker) -> None:
        try:
            seconds, result, error = worker.pipe.recv()
        except (EOFError, OSError):
            self._replace(worker)
            return
        if error is not None:
            raise error
        self.seconds_per_job += 0.2 * (seconds - self.seconds_per_job)
        self.done(worker.pending.popleft()[0], result)

    def _replace(self, worker: _Worker) -> None:
        """A new process in place of a dead one; the job it was working on counts a death, the others wait again."""
        culprit = worker.pending.popleft()
        self.waiting.extendleft(reversed(worker.pending))
        self.deaths[culprit[0]] = self.deaths.get(culprit[0], 0) + 1
        self.count_death(culprit[0], 1)
        if self.deaths[culprit[0]] >= MOST_DEATHS:
            self.died(culprit[0], KILLED)
        else:
            self.waiting.appendleft(culprit)
        worker.pipe.close()
        worker.process.join(1)
        self.workers.remove(worker)
        if self.waiting:
            self.workers.append(self._greeted(self._start()))

    def _greeted(self, worker: _Worker, tries: int = MOST_DEATHS) -> _Worker:
        """Have a new process unpack a job, so that this does not fail later for all jobs."""
        try:
            worker.pipe.send([self.waiting[0][1]])
            refused = worker.pipe.recv()
        except (EOFError, OSError) as error:
            if tries > 1:  # killed while it started
                return self._greeted(self._start(), tries - 1)
            advice = "keep the call under `if __name__ == '__main__':`"
            raise SpreadError(f"other processes cannot be started here; in a script, {advice}") from error
        if refused:
            raise SpreadError(f"a part of the input is not importable in other processes ({refused})")
        return worker


@contextmanager
def starting(hidden: bool) -> Iterator[None]:
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


def _serve(pipe: Connection, head: bytes) -> None:
    """A process: answers packets of jobs until the pipe ends."""
    _begin()
    with suppress(EOFError, OSError):
        trial = pipe.recv()[0]
        try:
            function, shared = pickle.loads(head)
            pickle.loads(trial)
        except Exception as error:
            pipe.send(f"{type(error).__name__}: {error}")
            return
        pipe.send("")
        while True:
            for payload in pipe.recv():
                pipe.send(_answer(function, shared, payload))


def _answer(function: Callable[..., Any], shared: Any, payload: bytes) -> tuple[float, Any, Exception | None]:
    begun = time.perf_counter()
    try:
        result, error = function(shared, *pickle.loads(payload)), None
    except Exception as raised:
        result, error = None, RuntimeError(f"{type(raised).__name__}: {raised}")
    return time.perf_counter() - begun, result, error


def _begin() -> None:
    """In a new process: Ctrl-C is the parent's business, one thread is enough, and life ends with the parent's."""
    from multiprocessing import parent_process

    from threadpoolctl import threadpool_limits

    signal.signal(signal.SIGINT, signal.SIG_IGN)
    threadpool_limits(1)
    threading.Thread(target=_end_with, args=(parent_process(),), daemon=True).start()


def _end_with(parent: Any) -> None:
    parent.join()
    os._exit(1)
