"""Kill sweeps at random moments: no finished point may be lost, and going on must give the same table. Linux only.

    python tests/benchmarks/crash.py [--kills 60] [--interrupts 20] [--seed N]

A sweep of points that take 30 ms each runs in a process of its own over a store. At random moments a worker or the
coordinator gets SIGKILL, or the whole group SIGINT (Ctrl-C). Before every kill the store is read: what it holds must be
there afterwards, number for number. Every completed computation is also written to a log by the point itself, so that
what a kill cost is counted: at most the points under way, one per process. The sweep is then started again until it is
complete; its table must equal that of an undisturbed run. At last the disk is full: a file system of 1 MB where one can
be mounted, and a limit on the size of files.
"""

import argparse
import os
import random
import resource
import signal
import sqlite3
import subprocess
import sys
import tempfile
import time
from collections import Counter
from contextlib import closing
from pathlib import Path

import pandas as pd

from fem_carriers.studies.study_run import read_results

PROCESSES, POINTS = 2, 250
SWEEP = """
import os, sys, time
import numpy as np
import fem_carriers as fc
from fem_carriers.studies.sweep import sweep
from crash_points import {compute}
base = fc.Base("p", doping_per_cm3=1e16, thickness_um=150, lifetime_us=100)
store, points, processes = sys.argv[1], int(sys.argv[2]), int(sys.argv[3])
try:
    table = sweep(fc.UnitCell(base, 400), {{"pitch_um": np.linspace(300, 600, points)}}, compute={compute},
                  store=store, processes=processes)
except fc.SweepInterrupted as stopped:
    print("interrupted", len(stopped.table))
    sys.exit(130)
except fc.FemCarriersError as error:
    print(error)
    sys.exit(4)
print("complete", len(table))
"""
COMPUTE = """
import math, os, time
def slow(cell):
    time.sleep(0.03)
    with open("done.log", "a") as log:
        log.write(f"{cell.pitch_um!r}\\n")
    return wide(cell)
def wide(cell):
    return {f"value_{i}_um": math.sqrt(cell.pitch_um + i) for i in range(40)}
"""


class Bench:
    """A folder with the script of a sweep.

    Parameters
    ----------
    folder : Path
    points : int
    """

    def __init__(self, folder: Path, points: int = POINTS) -> None:
        self.folder, self.points = folder, points
        (folder / "crash_points.py").write_text(COMPUTE)
        for compute in ("slow", "wide"):
            (folder / f"sweep_{compute}.py").write_text(SWEEP.format(compute=compute))

    def start(
        self, store: str, compute: str = "slow", points: int | None = None, largest_file: int = 0
    ) -> subprocess.Popen:
        """A sweep in a process group of its own."""

        def begin() -> None:
            signal.signal(signal.SIGINT, signal.SIG_DFL)  # a job in the background would ignore it
            if largest_file:
                resource.setrlimit(resource.RLIMIT_FSIZE, (largest_file, largest_file))

        command = [sys.executable, f"sweep_{compute}.py", store, str(points or self.points), str(PROCESSES)]
        paths = os.pathsep.join([str(self.folder), os.environ.get("PYTHONPATH", "")])
        return subprocess.Popen(
            command, cwd=self.folder, start_new_session=True, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
            env={**os.environ, "PYTHONPATH": paths}, preexec_fn=begin,
        )  # fmt: skip

    def complete(self, store: str, compute: str = "slow", points: int | None = None) -> None:
        """The sweep, undisturbed."""
        process = self.start(store, compute, points)
        out, err = process.communicate(timeout=300)
        assert (process.returncode, out.split()[0]) == (0, "complete"), (out, err)

    def table(self, store: str) -> pd.DataFrame:
        """What the store holds now; empty before it has a plan."""
        try:
            return read_results(self.folder / store)
        except Exception:  # not made yet
            return pd.DataFrame({"pitch_um": []})

    def computed(self) -> Counter:
        """How often the computation of every point was completed."""
        log = self.folder / "done.log"
        return Counter(log.read_text().split() if log.exists() else [])


def children(pid: int) -> list[int]:
    """Worker processes of a coordinator."""
    found = []
    for stat in Path("/proc").glob("[0-9]*/stat"):
        try:
            parent = int(stat.read_text().rpartition(")")[2].split()[1])
            if parent == pid and b"spawn_main" in (stat.parent / "cmdline").read_bytes():
                found.append(int(stat.parent.name))
        except (OSError, ValueError):  # gone meanwhile
            continue
    return found


def wait_for_rows(bench: Bench, store: str, more_than: int, process: subprocess.Popen) -> None:
    """Until the sweep has kept a new point, or is over."""
    while process.poll() is None and len(bench.table(store)) <= more_than:
        time.sleep(0.02)


def same_rows(before: pd.DataFrame, after: pd.DataFrame) -> bool:
    """Whether all rows of a table are in a later one, number for number."""
    kept = after[after["pitch_um"].isin(before["pitch_um"])].reset_index(drop=True)
    return len(before) == 0 or before.reset_index(drop=True).equals(kept[before.columns])


def disturb(bench: Bench, store: str, kind: str, draw: random.Random) -> bool:
    """Start the sweep, kill a worker or the coordinator or interrupt all; True if it was still running then."""
    known = len(bench.table(store))
    process = bench.start(store)
    wait_for_rows(bench, store, known, process)
    time.sleep(draw.uniform(0, 1.0))
    before = bench.table(store)
    running = process.poll() is None
    if running and kind == "worker":
        workers = children(process.pid)
        if workers:
            os.kill(draw.choice(workers), signal.SIGKILL)
        process.wait(timeout=120)
    elif running:
        (os.killpg if kind == "interrupt" else os.kill)(
            process.pid, signal.SIGINT if kind == "interrupt" else signal.SIGKILL
        )
        process.wait(timeout=20)
    out, err = process.communicate(timeout=120)
    after = bench.table(store)
    assert same_rows(before, after), f"rows lost by {kind}: {len(before)} before, {len(after)} after"
    if kind != "worker" and process.returncode == 0:
        return False  # it was over before the signal came
    if running and kind == "interrupt":
        assert process.returncode == 130, (process.returncode, out, err)
        assert out.split() == ["interrupted", str(len(after))], (out, err)
    if kind == "worker":
        assert out.startswith("complete"), (out, err)
    return running


def kills(bench: Bench, kinds: list[str], seed: int) -> dict[str, int]:
    """Disturb sweeps in the given ways; every store is completed and compared with an undisturbed one.

    Parameters
    ----------
    bench : Bench
    kinds : list of {"worker", "coordinator", "interrupt"}
    seed : int

    Returns
    -------
    dict of str to int
        Kills, stores completed, completed computations that had to be repeated.
    """
    draw = random.Random(seed)
    bench.complete("reference.sqlite")
    reference = bench.table("reference.sqlite")
    assert len(reference) == bench.points
    (bench.folder / "done.log").unlink()
    waiting, stores, repeated = list(kinds), 0, 0
    while waiting:
        stores += 1
        store = f"store-{stores}.sqlite"
        here = 0
        while waiting and len(bench.table(store)) < bench.points:
            if disturb(bench, store, waiting[-1], draw):
                waiting.pop()
                here += 1
        bench.complete(store)
        pd.testing.assert_frame_equal(bench.table(store), reference, check_exact=True)
        extra = sum(bench.computed().values()) - bench.points
        assert extra <= here * PROCESSES, f"{extra} completed points repeated after {here} kills"
        repeated += extra
        (bench.folder / "done.log").unlink()
        print(f"{len(kinds) - len(waiting)} of {len(kinds)} kills, {stores} stores", file=sys.stderr)
    return {"kills": len(kinds), "stores": stores, "repeated": repeated}


def full_disk(bench: Bench, mounted: Path | None) -> int:
    """Run into a full disk; make room, go on, and compare. Points kept before there was room.

    Parameters
    ----------
    bench : Bench
    mounted : Path or None
        A file system of 1 MB; without it the size of files is limited.
    """
    points = 4000
    store = str((mounted or bench.folder) / f"full-{mounted is not None}.sqlite")
    process = bench.start(store, "wide", points, largest_file=0 if mounted else 600_000)
    out, err = process.communicate(timeout=300)
    assert process.returncode == 4, (out, err)
    assert "no room" in out, out
    kept = bench.table(store)
    assert 0 < len(kept) < points
    if mounted:
        subprocess.run(["mount", "-o", "remount,size=64m", str(mounted)], check=True)
    bench.complete(store, "wide", points)
    whole = bench.table(store)
    assert same_rows(kept, whole)
    bench.complete("undisturbed.sqlite", "wide", points)
    pd.testing.assert_frame_equal(whole, bench.table("undisturbed.sqlite"), check_exact=True)
    with closing(sqlite3.connect(store)) as connection:
        assert connection.execute("PRAGMA integrity_check").fetchone() == ("ok",)
    return len(kept)


def small_disk(folder: Path) -> Path | None:
    """A file system of 1 MB, if one can be mounted here."""
    folder.mkdir()
    command = ["mount", "-t", "tmpfs", "-o", "size=1m", "tmpfs", str(folder)]
    return folder if subprocess.run(command, capture_output=True).returncode == 0 else None


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--kills", type=int, default=60)
    parser.add_argument("--interrupts", type=int, default=20)
    parser.add_argument("--seed", type=int, default=1)
    asked = parser.parse_args()
    kinds = ["worker", "coordinator"] * (asked.kills // 2) + ["interrupt"] * asked.interrupts
    random.Random(asked.seed).shuffle(kinds)
    with tempfile.TemporaryDirectory() as folder:
        bench = Bench(Path(folder))
        found = kills(bench, kinds, asked.seed)
        print(f"{found['kills']} kills over {found['stores']} stores: no point lost, all tables equal;")
        print(f"completed computations repeated, because they were killed before they were kept: {found['repeated']}")
        print(f"file size limited: stopped with {full_disk(bench, None)} points kept; completed after")
        disk = small_disk(Path(folder) / "disk")
        if disk is None:
            print("full disk: none could be mounted here")
            return
        try:
            print(f"full disk: stopped with {full_disk(bench, disk)} points kept; completed after")
        finally:
            subprocess.run(["umount", str(disk)], check=True)


if __name__ == "__main__":
    main()
