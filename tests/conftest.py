"""One thread per test process: the tests run in parallel, and sums do not depend on the number of threads."""

import importlib.util
import os

import pytest
from example_files import EXAMPLES

for _name in ("OMP_NUM_THREADS", "MKL_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
    os.environ.setdefault(_name, "1")


@pytest.fixture
def example(tmp_path, monkeypatch):
    """Import an example by name, away from its folder; what it writes lands in a temporary one."""
    monkeypatch.chdir(tmp_path)

    def load(name):
        spec = importlib.util.spec_from_file_location(f"example_{name}", EXAMPLES / f"{name}.py")
        module = importlib.util.module_from_spec(spec)
        spec.loader.exec_module(module)
        return module

    return load
