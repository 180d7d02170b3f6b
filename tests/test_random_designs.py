"""A sample of the random designs of `benchmarks/random_designs.py`: each gives a whole curve, or a named refusal."""

import importlib.util
from pathlib import Path

import pytest

SCRIPT = Path(__file__).parent / "benchmarks" / "random_designs.py"
NAMED = {"majority carriers exhausted", "not converged", "no sink for carriers"}


@pytest.fixture(scope="module")
def designs():
    spec = importlib.util.spec_from_file_location("random_designs", SCRIPT)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.mark.parametrize("batch", range(10))
def test_fifty_designs_give_a_curve(designs, batch):
    found = [designs.outcome((20_000 + 5 * batch + i, False)) for i in range(5)]
    assert {text for _, text in found} == {"curve"}, found


def test_hard_designs_give_a_curve_or_a_named_refusal(designs):
    found = [designs.outcome((30_000 + i, True))[1] for i in range(4)]
    assert set(found) <= NAMED | {"curve"}
