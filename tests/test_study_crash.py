"""A short version of `benchmarks/crash.py`: kills, Ctrl-C and a file that may not grow lose no finished point."""

import importlib.util
import sys
from pathlib import Path

import pytest

SCRIPT = Path(__file__).parent / "benchmarks" / "crash.py"
pytestmark = pytest.mark.skipif(not sys.platform.startswith("linux"), reason="looks for processes in /proc")


@pytest.fixture
def bench(tmp_path):
    spec = importlib.util.spec_from_file_location("crash", SCRIPT)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module, module.Bench(tmp_path, points=120)


def test_kills_and_interrupts(bench):
    crash, folder = bench
    kinds = ["interrupt", "coordinator", "worker"]
    assert crash.kills(folder, kinds, seed=1)["kills"] == 3


def test_a_file_that_may_not_grow(bench):
    crash, folder = bench
    assert crash.full_disk(folder, None) > 0
