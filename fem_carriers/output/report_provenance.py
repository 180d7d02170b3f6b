"""What made the numbers of a report, and how to make them again."""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..studies.progress import duration
from ..units import split_name
from .report_findings import Findings, software
from .report_page import facts, paragraph, text

if TYPE_CHECKING:
    import pandas as pd

MOST_RUNS = 4
"""Of more, only the last one is named."""


def provenance_section(found: Findings, out: Path) -> list[str]:
    """What made these numbers, and how to make them again."""
    rows: list[tuple[str, Any]] = [*_ledger_rows(found.table), *software().items()]
    if found.study is None:
        return [facts(rows)]
    study = found.study
    digest = hashlib.sha256(study.text.encode()).hexdigest()
    rows = [("study file", study.path.name), ("its SHA-256", digest), ("results in", study.store_path.name),
            ("points", len(found.table)), ("computing time", f"{duration(found.times_s)} on one core"),
            *_seeds(study), *rows]  # fmt: skip
    runs = [(f"run {i}", _run_text(run)) for i, run in enumerate(found.runs, 1)]
    if len(runs) > MOST_RUNS:
        took = duration(sum(float(run.get("run_time_s", 0.0)) for run in found.runs))
        rest = f"{found.runs[0]['started']} to {found.runs[-1]['started']}, {took} in all"
        runs = [(f"{len(runs)} rounds of computing", rest), *runs[-1:]]
    stale = _stale(found)
    command = f"fem-carriers run {study.path.name} && fem-carriers report {study.path.name} {out.name}"
    return [
        facts(rows + runs), paragraph(stale, "warning") if stale else "", "<h3>To repeat it</h3>",
        f"<pre>{text(command)}</pre>", "<h3>Study file</h3>", f"<pre>{text(study.text)}</pre>",
    ]  # fmt: skip


def _ledger_rows(table: pd.DataFrame) -> list[tuple[str, str]]:
    rows = []
    for name, meaning in (("ledger_residual", "largest residual of the carrier ledger"),
                        ("misclosure_mW_per_cm2", "largest misclosure of the power budget")):  # fmt: skip
        if name in table and table[name].notna().any():
            rows.append((meaning, f"{table[name].abs().max():.1e} {split_name(name)[1] or '(relative)'}"))
    return rows


def _seeds(study: Any) -> list[tuple[str, Any]]:
    if study.scatter is not None:
        return [("seed of the samples", study.scatter.scatter.seed)]
    found = [line.strip() for line in study.text.splitlines() if line.strip().startswith("seed")]
    return [("seed of the samples", found[0].partition("=")[2].split("#")[0].strip())] if found else []


def _run_text(run: Any) -> str:
    took = duration(float(run.get("run_time_s", 0.0)))
    return f"{run.get('started', '')}: {run.get('points', 0)} points in {took}, workers: {run.get('workers', '')}"


def _stale(found: Findings) -> str:
    """A warning if the numbers come from other versions than the details."""
    from ..studies.identity import versions

    last = found.runs[-1].get("versions") if found.runs else None
    if last is None or last == versions():
        return ""
    return "The points were computed with other versions than those named here; run the study again to renew them."
