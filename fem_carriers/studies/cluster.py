"""Independent jobs on the machines of a Dask cluster, through the address of its scheduler."""

from __future__ import annotations

import logging
import pickle
import threading
import time
from collections import deque
from collections.abc import Iterator
from concurrent.futures import CancelledError
from contextlib import contextmanager
from functools import cache
from typing import Any

from ..errors import Complaints, FemCarriersError
from .identity import versions
from .workers import KILLED, Done, Jobs, Payloads, packed, packet_size

PACKET_S = 0.2
"""Short jobs are sent several at a time, of about so long together; their results come back together."""
AHEAD = 2
"""Packets per thread of the cluster that are under way at a time."""
COUNT_EVERY_S = 2.0
CONNECT_S = 10
_one_at_a_time = threading.Lock()


class ClusterError(FemCarriersError):
    """The cluster was lost, or cannot do the work; finished points are kept."""


def run_on_cluster(function: Any, shared: Any, jobs: Jobs, address: str, done: Done, died: Done) -> None:
    """Call ``function(shared, job)`` for every job on a Dask cluster.

    Its workers need the same versions of this package and of those that compute, and one thread each
    (``dask worker ADDRESS --nthreads 1 --nworkers N``). A job is given up when workers keep dying on it: the scheduler
    gives up on a packet after its `allowed-failures`; its jobs are then tried one by one, with nothing beside them.

    Parameters
    ----------
    function, shared, jobs, done, died
        As for `run_spread`.
    address : str
        E.g. ``"tcp://192.168.0.7:8786"``.

    Raises
    ------
    InputError
        Dask is not installed, no scheduler answers at the address, or versions differ.
    ClusterError
        The connection was lost.
    SpreadError
        A part of the input cannot be sent.
    """
    head = packed(function, shared)
    waiting = deque((index, packed(job)) for index, job in jobs)
    with _client(address) as client:
        _check_versions(client, address)
        hub = _Hub(client, head, done)
        with _losses_told(address):
            for suspect in hub.work(waiting, several=True):
                for index, _ in hub.work(deque([suspect]), several=False):
                    died(index, KILLED)


@contextmanager
def _losses_told(address: str) -> Iterator[None]:
    """A lost connection as an error in words, without the library's own log."""
    log = logging.getLogger("distributed")
    before = log.level
    log.setLevel(logging.CRITICAL)
    try:
        yield
    except FemCarriersError:
        raise
    except (CancelledError, OSError, TimeoutError) as error:
        text = f"the scheduler at {address} was lost ({type(error).__name__}); finished points are kept, run again"
        raise ClusterError(text) from error
    finally:
        log.setLevel(before)


def _client(address: str) -> Any:
    problems = Complaints("scheduler")
    try:
        from distributed import Client
    except ImportError:
        problems.add("a scheduler address", "the package `distributed`", "pip install 'fem-carriers[cluster]'")
        problems.raise_if_any()
    try:
        return Client(address, timeout=CONNECT_S, set_as_default=False)
    except (OSError, ValueError, TypeError) as error:
        text = " ".join(str(error).split())
        problems.add(f"{address!r} ({text})", "the address of a running scheduler", "start one with `dask scheduler`")
        problems.raise_if_any()


def _check_versions(client: Any, address: str) -> None:
    problems = Complaints(f"cluster at {address}")
    here = versions()
    try:
        found = client.run(versions)
    except Exception as error:  # whatever a worker raises that lacks the package
        problems.add(f"workers that cannot import fem_carriers ({error})", "the same versions on all machines")
        found = {}
    for worker, there in found.items():
        differing = [f"{name} {v}, here {here[name]}" for name, v in there.items() if v != here[name]]
        given = f"{worker} with {'; '.join(differing)}"
        problems.unless(not differing, given, "the same versions on all machines, since results depend on them")
    problems.raise_if_any()


class _Hub:
    """Packets under way on a cluster.

    Parameters
    ----------
    client : distributed.Client
    head : bytes
        Function and what it shares.
    done : callable
    """

    def __init__(self, client: Any, head: bytes, done: Done) -> None:
        self.client, self.done = client, done
        self.head = client.submit(bytes, head, pure=False)  # kept on the workers; remade if they die
        self.seconds_per_job = 1.0
        self.counted, self.threads = -COUNT_EVERY_S, 1

    def work(self, waiting: Payloads, several: bool) -> list[tuple[int, bytes]]:
        """Do all jobs; return those that workers kept dying on."""
        from distributed import as_completed

        under_way: dict[Any, list[tuple[int, bytes]]] = {}
        queue = as_completed([], loop=self.client.loop, raise_errors=False)
        suspects: list[tuple[int, bytes]] = []
        self._send(waiting, under_way, queue, several)
        for future in queue if under_way else ():
            packet = under_way.pop(future)
            left = self._take(future, packet)
            if len(left) > 1:
                waiting.extend(left)
                several = False
            else:
                suspects += left
            self._send(waiting, under_way, queue, several)
        return suspects

    def _send(self, waiting: Payloads, under_way: dict[Any, Any], queue: Any, several: bool) -> None:
        most = self._most_packets()
        while waiting and len(under_way) < most:
            size = packet_size(self.seconds_per_job, len(waiting), most, PACKET_S) if several else 1
            packet = [waiting.popleft() for _ in range(size)]
            future = self.client.submit(_packet, self.head, [p for _, p in packet], versions(), pure=False)
            under_way[future] = packet
            queue.add(future)

    def _most_packets(self) -> int:
        """As many as keep the cluster busy; workers may come and go."""
        if time.monotonic() - self.counted > COUNT_EVERY_S:
            self.counted = time.monotonic()
            self.threads = max(1, sum(self.client.nthreads().values()))
        return AHEAD * self.threads

    def _take(self, future: Any, packet: list[tuple[int, bytes]]) -> list[tuple[int, bytes]]:
        """Hand over the results; return the packet if workers kept dying on it."""
        from distributed import KilledWorker

        try:
            seconds, results = future.result()
        except KilledWorker:
            return packet
        self.seconds_per_job += 0.5 * (seconds / len(packet) - self.seconds_per_job)
        for (index, _), result in zip(packet, results, strict=True):
            self.done(index, result)
        future.release()
        return []


def _packet(head: bytes, payloads: list[bytes], expected: dict[str, str]) -> tuple[float, list[Any]]:
    """On a worker: the jobs of a packet one after another, on one thread."""
    if versions() != expected:
        raise RuntimeError(f"this worker has {versions()}, the run has {expected}")
    with _one_at_a_time:  # warnings are caught per process, not per thread
        _one_thread()
        begun = time.perf_counter()
        function, shared = _unpacked(head)
        results = [function(shared, *pickle.loads(payload)) for payload in payloads]
        return time.perf_counter() - begun, results


@cache
def _one_thread() -> Any:
    from threadpoolctl import threadpool_limits

    return threadpool_limits(1)


@cache
def _unpacked(head: bytes) -> Any:
    return pickle.loads(head)
