"""A report: one page that holds the question, the cell, the results with their bars, figures, limits and provenance."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..files.atomic import target, write_atomically
from ..studies.study_file import Study
from .report_page import page, paragraph, section, text
from .report_provenance import provenance_section
from .report_sections import answer, best_section, cell_section, results_section, trust_section

if TYPE_CHECKING:
    import pandas as pd

    from ..cell.unit_cell import UnitCell

__all__ = ["write_report"]


def write_report(
    study: str | Path | Study | pd.DataFrame,
    path: str | Path | None = None,
    *,
    cell: UnitCell | None = None,
    title: str = "",
    question: str = "",
    outcome: Any = None,
    details: bool = True,
) -> Path:
    """Write a report as one HTML file that needs nothing else: pictures are inside, there is no script.

    Parameters
    ----------
    study : study file, Study, or table
        A study that has been run; or the table of a sweep.
    path : str or Path, optional
        File ending in .html; default is beside the study file.
    cell : UnitCell, optional
        With a table: the cell that was varied, for its drawing.
    title, question : str
        With a table; a study file has its own.
    outcome : Best, Optimum or Tolerance, optional
        With a table: what was found.
    details : bool
        Solve the best point once more, for its current-voltage curve, losses and fields.

    Returns
    -------
    Path

    Raises
    ------
    InputError
        Mistakes of the study file, a study that has not been run, or no results in it.
    """
    from .report_findings import findings_of_study, findings_of_table

    if hasattr(study, "columns"):
        found = findings_of_table(study, cell, title, question, outcome)  # type: ignore[arg-type]
        out = target("report", "report.html" if path is None else path, (".html",))
    else:
        found = findings_of_study(study)
        assert found.study is not None
        out = target("report", found.study.path.with_suffix(".html") if path is None else path, (".html",))
    best = found.at_best() if details else None
    head = f'<p class="when">{text(found.when)}</p>\n<h1>{text(found.title)}</h1>'
    parts = [
        head,
        paragraph(found.question, "question") if found.question else "",
        answer(found),
        cell_section(found),
        results_section(found),
        best_section(found, best),
        section("How far to trust it", *trust_section(found)),
        section("Provenance", *provenance_section(found, out)),
    ]
    whole = page(found.title, parts)
    return write_atomically(out, lambda p: p.write_text(whole, encoding="utf-8"))
