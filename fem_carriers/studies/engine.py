"""Compute the points of a plan that a store does not hold yet, on this machine or on a cluster."""

from __future__ import annotations

import time
from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

from ..errors import SweepInterrupted
from .cluster import run_on_cluster
from .field_files import field_folder, keep_fields
from .identity import versions
from .plan import Outcome, Plan, Subject, compute_point
from .point import Point
from .progress import points_bar
from .store import Store, StoreError
from .workers import KILLED, MOST_DEATHS, SpreadError, available_cores, run_spread


@dataclass(frozen=True)
class Workers:
    """Where points are computed.

    Parameters
    ----------
    processes : int, optional
        On this machine; default is one per core.
    scheduler : str, optional
        Address of a Dask scheduler, used instead.
    """

    processes: int | None = None
    scheduler: str | None = None

    def run(self, subject: Subject, jobs: list[tuple[int, Any]], done: Any, died: Any, count_death: Any) -> None:
        """Compute all jobs."""
        if self.scheduler:
            run_on_cluster(compute_point, subject, jobs, self.scheduler, done, died)
        else:
            run_spread(compute_point, subject, jobs, self.processes or available_cores(), done, died, count_death)

    def __str__(self) -> str:
        return self.scheduler or f"{self.processes or available_cores()} local"


def run_plan(
    plan: Plan, subject: Subject, store: Store, workers: Workers | None = None, *, retry: bool = False,
    progress: bool = True, lines: bool = False,
) -> int:  # fmt: skip
    """Compute what is missing, keeping every point as it arrives.

    Parameters
    ----------
    plan : Plan
    subject : Subject
    store : Store
        Open for writing.
    workers : Workers, optional
    retry : bool
        Compute points again that failed or were set aside.
    progress, lines : bool
        As for `points_bar`.

    Returns
    -------
    int
        Points computed now.

    Raises
    ------
    StoreError
        The disk is full; finished points are kept.
    SweepInterrupted
        Ctrl-C; holds the table of finished points.
    """
    workers = workers or Workers()
    store.set_plan(plan.keys, plan.names, plan.values)
    if retry:
        store.forget_failures(plan.keys)
    run = _Run(plan, store, subject.fields)
    missing = run.missing()
    begun, clock = datetime.now(UTC), time.monotonic()
    try:
        with points_bar(run.unique, progress, "points", run.unique - len(missing), lines) as advance:
            run.advance = advance
            _compute(workers, subject, [(i, plan.job(i)) for i in missing], run)
    except KeyboardInterrupt:
        raise SweepInterrupted(store.table(), len(plan)) from None
    finally:
        if run.computed:
            seconds = round(time.monotonic() - clock, 3)
            _record(store, begun.isoformat(timespec="seconds"), seconds, run.computed, str(workers))
    return run.computed


def _record(store: Store, begun: str, seconds: float, computed: int, workers: str) -> None:
    record = {"started": begun, "run_time_s": seconds, "points": computed, "workers": workers, "versions": versions()}
    with suppress(StoreError):  # a full disk, which is being told already
        store.record_run(record)


def _compute(workers: Workers, subject: Subject, jobs: list[tuple[int, Any]], run: _Run) -> None:
    try:
        workers.run(subject, jobs, run.done, run.died, run.count_death)
    except SpreadError as reason:
        run.advance(f"the run stays in one process: {reason}")
        from threadpoolctl import threadpool_limits

        with threadpool_limits(1):
            for index, job in jobs:
                if index not in run.settled:
                    run.done(index, compute_point(subject, job))


class _Run:
    """Takes what comes back and puts it into the store."""

    def __init__(self, plan: Plan, store: Store, fields: bool) -> None:
        self.plan, self.store, self.fields = plan, store, fields
        self.computed, self.unique = 0, 0
        self.settled: set[int] = set()
        self.advance: Callable[[str], None] = lambda message: None

    def missing(self) -> list[int]:
        """Numbers of the points to compute; of equal ones the first. Sets aside those that killed enough processes."""
        finished, deaths = self.store.finished(self.fields), self.store.deaths()
        first: dict[str, int] = {}
        for index, key in enumerate(self.plan.keys):
            first.setdefault(key, index)
        self.unique = len(first)
        wanted = [(key, index) for key, index in first.items() if key not in finished]
        for key, index in wanted:
            if deaths.get(key, 0) >= MOST_DEATHS:
                self.died(index, KILLED)
        return [index for _, index in wanted if index not in self.settled]

    def done(self, index: int, outcome: Outcome) -> None:
        """Keep a result."""
        if outcome.stop:
            raise StoreError(outcome.stop)
        fields = keep_fields(field_folder(self.store.path), outcome.files) if outcome.files else ""
        self.store.keep(self.plan.keys[index], outcome.point, outcome.seconds, fields)
        self._count(index)

    def died(self, index: int, why: str) -> None:
        """Set a point aside."""
        self.store.keep(self.plan.keys[index], Point(failure=f"set aside: {why}"))
        self._count(index)

    def count_death(self, index: int, times: int) -> None:
        """Count a death, also for later runs."""
        self.store.count_death(self.plan.keys[index])

    def _count(self, index: int) -> None:
        self.computed += 1
        self.settled.add(index)
        self.advance("")
