"""The sections of a report."""

from __future__ import annotations

import math
import tempfile
from collections import Counter
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..analysis.uncertainty import with_bar
from ..studies.best import Best
from ..studies.optimum import Optimum, place_text
from ..studies.point import guarded
from ..studies.tolerance import Tolerance
from ..units import split_name
from .cell_drawing import base_text, cell_parts, draw_cell, side_texts
from .labels import label, words
from .report_findings import AtBest, Findings
from .report_page import NOTHING, facts, figure, listed, paragraph, section, table_of

if TYPE_CHECKING:
    import pandas as pd

MOST_ROWS, MOST_SAMPLES = 60, 16
FIELD_SIZE = (1100, 640)
KEY_COLUMNS = ("jsc_mA_per_cm2", "voc_V", "fill_factor_percent", "efficiency_percent")
LIMITS = (
    "The base is quasi-neutral: space-charge regions are not resolved, and doped layers are thin sheets described by "
    "their sheet resistance and J0.",
    "The unit cell knows the width of the metal, not its length: losses along fingers and busbars are not in these "
    "numbers.",
    "Optics is one-dimensional in depth, and the cell has one temperature.",
    "Error bars cover the discretisation (and, for an optimum or a tolerance, the surrogate), not the model or its "
    "inputs.",
)
CAUTIONS = (
    "Numbers of a model do not replace a measurement: verify a layout on test cells before ordering screens or masks.",
    "Measurements on live cells and modules and the chemicals of cell processing can injure; follow the local codes "
    "and leave them to licensed or trained staff.",
)


def answer(found: Findings) -> str:
    """What was found, in words."""
    if found.outcome is not None:
        return paragraph(found.outcome, "answer")
    row = found.best_row
    if found.judged is None or row is None:
        return ""
    values = found.table.iloc[row]
    where = ", ".join(_valued(n, values[n]) for n in found.variables)
    best = with_bar(values[found.judged], values.get(f"error_bar_{found.judged}"))
    lead = "Largest value in the table: " if len(found.table) > 1 else ""
    unit = split_name(found.judged)[1]
    return paragraph(
        f"{lead}{words(found.judged)} {best} {unit}".rstrip() + (f" at {where}" if where else ""), "answer"
    )


def _valued(name: str, value: float) -> str:
    """A variable and its value: "front finger width 28 µm"."""
    return f"{words(name)} {value:.4g} {split_name(name)[1]}".rstrip()


def cell_section(found: Findings) -> str:
    """The drawing, with everything in words."""
    cell = found.best_cell
    if cell is None:
        return ""
    said = "; ".join([base_text(cell), *(f"{p.number}: {p.text}" for p in cell_parts(cell)), *side_texts(cell)])
    caption = "One period of the cell" + (" at the point shown in detail below." if found.variables else ".")
    return section("The cell", figure(draw_cell(cell), f"Drawing of the cell. {said}", caption))


def results_section(found: Findings) -> str:
    """Tables and figures over all points."""
    parts: list[str] = []
    if isinstance(found.outcome, Tolerance):
        parts += _tolerance_parts(found.outcome)
    elif isinstance(found.outcome, Optimum):
        parts += _optimum_parts(found.outcome)
    else:
        parts += _sweep_parts(found)
    return section("Results", *parts, _points_table(found))


def _optimum_parts(outcome: Optimum) -> list[str]:
    import pandas as pd

    from .search_plots import plot_optimum

    rows = [
        (label(n), place_text(at, outcome.location_bar[n]), *(f"{v:.4g}" for v in outcome.ranges[n]))
        for n, at in outcome.location.items()
    ]
    table = pd.DataFrame(rows, columns=["variable", "best", "as good from", "to"])
    caption = f"Best {label(outcome.quantity)}: {with_bar(outcome.value, outcome.value_bar, 4)}"
    bound = [f"Bound by {what}." for what in outcome.binding]
    drawn = plot_optimum(outcome)
    return [table_of(table, caption), listed(bound), figure(drawn, f"Surrogate and computed points. {outcome}")]


def _tolerance_parts(outcome: Tolerance) -> list[str]:
    import pandas as pd

    from .search_plots import plot_designs, plot_tolerance

    rows, q = outcome.percentiles, outcome.quantity
    bars = [with_bar(v, b, 4) for v, b in zip(rows[q], rows[f"error_bar_{q}"], strict=True)]
    table = pd.DataFrame({"percentile (%)": [f"{p:g}" for p in rows["percentile"]], label(q): bars})
    shares = outcome.shares
    by_input = pd.DataFrame(
        {
            "input": [label(n) for n in shares["input"]],
            "alone (% of the variance)": [f"{v:.1f}" for v in shares["alone_percent"]],
            "with others (% of the variance)": [f"{v:.1f}" for v in shares["total_percent"]],
        }
    )
    drawn = figure(plot_tolerance(outcome), f"Distribution and shares of the variance. {outcome}")
    parts = [table_of(table, "Share of cells that lie below"), table_of(by_input, "What makes the scatter"), drawn]
    if outcome.by_design is not None:
        said = f"Against {label(next(iter(outcome.design)))}: best at nominal inputs {outcome.best_nominal}; "
        said += f"best on average {outcome.best_on_average}."
        parts.append(figure(plot_designs(outcome), said, said))
    return parts


def _sweep_parts(found: Findings) -> list[str]:
    """A curve over one variable, a map over two."""
    from .maps import plot_map
    from .plots import plot_sweep

    table, names = found.table, found.variables
    if found.judged is None or table[found.judged].notna().sum() < 2:
        return []
    title = f"{label(found.judged)} against {' and '.join(label(n) for n in names)}."
    low, high = table[found.judged].min(), table[found.judged].max()
    said = f"{title} From {low:.4g} to {high:.4g}."
    drawn = None
    if len(names) == 1:
        drawn, _ = guarded(plot_sweep, table, names[0], y=found.judged)
        said += f" {found.outcome}." if isinstance(found.outcome, Best) else ""
    elif len(names) == 2:
        drawn, _ = guarded(plot_map, table, names[0], names[1], value=found.judged)
    return [figure(drawn, said, title)] if drawn is not None else []


def _points_table(found: Findings) -> str:
    """Variables and headline numbers of the points with their bars; of many the best ones."""
    import pandas as pd

    table = found.table.reset_index(drop=True)
    if len(table) == 1:
        return _one_point(table)
    wanted = [c for c in KEY_COLUMNS if c in table]
    wanted += [c for c in ([found.judged] if found.judged else []) if c not in wanted]
    if not wanted:
        wanted = [str(c) for c in table if str(c).startswith(("collected_", "collection_"))]
    if not wanted:
        wanted = [str(c) for c in table.select_dtypes("number") if c not in (*found.variables, "point", "time_s")][:6]
    caption = f"All {len(table)} points"
    best = found.best_row
    if isinstance(found.outcome, Tolerance):
        table, best = table.head(MOST_SAMPLES), None
        caption = f"The first {len(table)} of {len(found.table)} sampled points"
    elif len(table) > MOST_ROWS and found.judged:
        sign = isinstance(found.outcome, Optimum) and not found.outcome.maximized
        table = table.sort_values(found.judged, ascending=sign).head(MOST_ROWS)
        caption, best = f"The best {MOST_ROWS} of {len(found.table)} points", 0
    shown: dict[str, Any] = {label(n): [f"{v:.5g}" for v in table[n]] for n in found.variables}
    for name in wanted:
        nothing = [math.nan] * len(table)
        bars = list(table.get(f"error_bar_{name}", nothing))
        shown[label(name)] = [_number(v, b) for v, b in zip(table[name], bars, strict=True)]
    if "failure" in table and (table["failure"] != "").any():
        shown["failure"] = list(table["failure"])
    return table_of(pd.DataFrame(shown), caption, best)


def _one_point(table: pd.DataFrame) -> str:
    """All numbers of a single point, one below the other, and why there are none."""
    numbers = table.select_dtypes("number").iloc[0].dropna()
    rows = [
        (label(str(n)), _number(float(v), float(numbers.get(f"error_bar_{n}", math.nan))))
        for n, v in numbers.items()
        if n not in ("point", "time_s") and not str(n).startswith("error_bar_")
    ]
    failure = str(table["failure"].iloc[0]) if "failure" in table else ""
    return facts(rows) + (paragraph(failure, "warning") if failure else "")


def _number(value: float, bar: float) -> str:
    if math.isnan(value):
        return NOTHING
    return f"{value:.5g}" if math.isnan(bar) else with_bar(value, bar)


def best_section(found: Findings, best: AtBest | None) -> str:
    """Curve, losses and fields of the point shown in detail."""
    if best is None:
        return ""
    where = ", ".join(_valued(n, v) for n, v in best.values.items())
    kind = "nominal inputs" if isinstance(found.outcome, Tolerance) else "the best point"
    title = f"At {kind}" if best.values and len(found.table) > 1 else "In detail"
    parts = [paragraph(where)] if where else []
    if best.result is None:
        return section(title, *parts, paragraph(f"This point could not be solved: {best.failure}", "warning"))
    if hasattr(best.result, "maximum_power") and best.result.maximum_power is not None:
        parts += _curve_parts(best.result)
    if best.solution is not None:
        parts += _field_parts(best.solution)
    return section(title, *parts)


def _curve_parts(curve: Any) -> list[str]:
    from .power import plot_curve, plot_losses

    said = "; ".join(line.strip() for line in str(curve).splitlines())
    parts = [figure(plot_curve(curve), f"Current and power against voltage. {said}", "Current-voltage curve.")]
    losses = curve.maximum_power.solution.losses
    drawn, _ = guarded(plot_losses, losses)
    if drawn is not None:
        largest = sorted(((v, n) for (k, n), v in losses.rows.items() if k != "output"), reverse=True)[:6]
        named = ", ".join(f"{n} {v:.3g}" for v, n in largest)
        caption = f"Losses at maximum power; the budget closes to {abs(losses.misclosure_mW_per_cm2):.1g} mW/cm²."
        parts.append(figure(drawn, f"Losses in mW/cm², largest first: {named}.", caption))
    return parts


def _field_parts(solution: Any) -> list[str]:
    """A picture of the excess density."""
    from .window import view

    with tempfile.TemporaryDirectory() as folder:
        saved, point = guarded(view, solution, picture=Path(folder) / "field.png", size=FIELD_SIZE)
        if saved is None:
            return [paragraph(f"No picture of the fields: {point.failure}", "warning")]
        data = saved.read_bytes()
    density = solution.excess_density_per_cm3
    said = f"Excess carrier density over the modelled piece, {density.min():.2g} to {density.max():.2g} per cm³."
    return [figure(data, said, said)]


def trust_section(found: Findings) -> list[str]:
    """What the model leaves out, what it said itself, and what to mind."""
    table = found.table
    notes = Counter(n for note in table.get("note", []) for n in str(note).split("; ") if n)
    failures = Counter(str(f) for f in table.get("failure", []) if f)
    said = [f"{note} ({count} of {len(table)} points)" for note, count in notes.most_common(12)]
    failed = [f"{reason} ({count} of {len(table)} points)" for reason, count in failures.most_common(12)]
    bars = any(str(c).startswith("error_bar_") for c in table)
    parts = [] if bars else [paragraph("The numbers have no error bars: no target error was stated.", "warning")]
    if said:
        parts += ["<h3>Warnings of the model</h3>", listed(said)]
    if failed:
        parts += ["<h3>Points without a result</h3>", listed(failed)]
    return [*parts, "<h3>Limits of the model</h3>", listed(LIMITS), "<h3>Cautions</h3>", listed(CAUTIONS)]
