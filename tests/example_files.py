"""What the tests of the examples share: where examples are, what they must leave, numbers from what they print."""

from __future__ import annotations

from pathlib import Path

EXAMPLES = Path(__file__).resolve().parents[1] / "examples"


def assert_written(*names):
    """Files of these names in the folder `results`, tables of 100 bytes or more, pictures and fields of 1000."""
    found = {p.name: p.stat().st_size for p in Path("results").iterdir()}
    for name in names:
        least = 100 if name.endswith(".csv") else 1000
        assert found.get(name, 0) > least, f"{name} not among {found}"


def number_after(text, words):
    """The number that follows these words in the printed text."""
    return float(text.split(words, 1)[1].split()[0].strip(",;%"))
