"""Pieces of a page: escaped text, tables, figures, and the page around them. No script, nothing from elsewhere."""

from __future__ import annotations

import base64
import io
from collections.abc import Sequence
from html import escape
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.figure import Figure

POLICY = "default-src 'none'; img-src data:; style-src 'unsafe-inline'"
"""Browsers then refuse scripts and every request, whatever a study file says."""
STYLE = """
:root { color-scheme: light; }
body { font: 16px/1.5 system-ui, -apple-system, "Segoe UI", "DejaVu Sans", sans-serif; color: #222; background: #fff;
       max-width: 58rem; margin: 0 auto; padding: 1.5rem 1.25rem 4rem; }
h1 { font-size: 1.8rem; line-height: 1.2; margin: 0.5rem 0 0.25rem; }
h2 { font-size: 1.25rem; margin: 2.4rem 0 0.6rem; padding-top: 0.6rem; border-top: 1px solid #ccc; }
h3 { font-size: 1.02rem; margin: 1.4rem 0 0.4rem; }
p, ul { margin: 0.5rem 0; max-width: 46rem; }
.when { color: #666; font-size: 0.9rem; margin: 0; }
.question { font-size: 1.1rem; }
.answer { background: #eef5fa; border-left: 4px solid #0072b2; padding: 0.6rem 1rem; margin: 1rem 0;
          white-space: pre-wrap; }
.warning { background: #fdf3e3; border-left: 4px solid #e69f00; padding: 0.4rem 1rem; margin: 0.8rem 0; }
figure { margin: 1rem 0; }
figure img { max-width: 100%; height: auto; display: block; }
figcaption { font-size: 0.9rem; color: #555; max-width: 46rem; }
.wide { overflow-x: auto; }
table { border-collapse: collapse; font-size: 0.88rem; font-variant-numeric: tabular-nums; margin: 0.6rem 0; }
caption { text-align: left; white-space: nowrap; font-size: 0.9rem; color: #555; padding-bottom: 0.3rem; }
th, td { padding: 0.22rem 0.7rem; text-align: right; vertical-align: top; border-bottom: 1px solid #e3e3e3; }
th { font-weight: 600; vertical-align: top; }
thead th { border-bottom: 2px solid #999; vertical-align: bottom; }
th small { font-weight: 400; color: #555; display: block; }
td { white-space: nowrap; }
td.text, th.text { text-align: left; white-space: normal; overflow-wrap: break-word; min-width: 9rem; }
tr.best td { background: #eef5fa; font-weight: 600; }
pre { background: #f6f5f1; padding: 0.7rem 1rem; font: 0.82rem/1.4 ui-monospace, "DejaVu Sans Mono", monospace;
      white-space: pre-wrap; overflow-wrap: anywhere; }
code { font: 0.88em ui-monospace, "DejaVu Sans Mono", monospace; overflow-wrap: anywhere; }
@media print {
  @page { margin: 16mm 15mm; }
  body { font-size: 10.5pt; max-width: none; padding: 0; }
  h2 { break-after: avoid; margin-top: 1.4rem; } h3, caption { break-after: avoid; }
  figure, tr, .answer { break-inside: avoid; }
  figure img { max-height: 15cm; width: auto; }
  table { font-size: 8.5pt; } th, td { padding: 0.12rem 0.4rem; } thead { display: table-header-group; }
  .wide { overflow: visible; }
  .answer, .warning, pre, tr.best td { print-color-adjust: exact; -webkit-print-color-adjust: exact; }
}
"""
DPI = 160
NOTHING = "—"
"""Stands for a number that is not there."""


def text(value: Any) -> str:
    """Anything as escaped text."""
    return escape(str(value), quote=True)


def paragraph(value: Any, kind: str = "") -> str:
    """A paragraph, or a box of a kind ("answer", "warning")."""
    tag = "div" if kind in ("answer", "warning") else "p"
    return f'<{tag} class="{kind}">{text(value)}</{tag}>' if kind else f"<p>{text(value)}</p>"


def listed(items: Sequence[Any]) -> str:
    """A list; empty without items."""
    return "<ul>" + "".join(f"<li>{text(i)}</li>" for i in items) + "</ul>" if items else ""


def section(title: str, *parts: str) -> str:
    """A section, if it holds anything."""
    body = "\n".join(p for p in parts if p)
    return f"<section>\n<h2>{text(title)}</h2>\n{body}\n</section>" if body else ""


def table_of(table: pd.DataFrame, caption: str = "", best: int | None = None) -> str:
    """A table; a heading may have its unit in brackets at the end; row number `best` is set off."""
    from pandas.api.types import is_numeric_dtype

    kinds = ["" if is_numeric_dtype(table[c]) or _numbers(table[c]) else ' class="text"' for c in table]
    heads = "".join(f'<th scope="col"{k}>{_heading(str(c))}</th>' for c, k in zip(table, kinds, strict=True))
    rows = []
    for number, values in enumerate(table.itertuples(index=False)):
        cells = "".join(f"<td{k}>{text(_shown(v))}</td>" for v, k in zip(values, kinds, strict=True))
        rows.append(f'<tr class="best">{cells}</tr>' if number == best else f"<tr>{cells}</tr>")
    above = f"<caption>{text(caption)}</caption>" if caption else ""
    body = "\n".join(rows)
    return f'<div class="wide"><table>{above}<thead><tr>{heads}</tr></thead>\n<tbody>\n{body}\n</tbody></table></div>'


def facts(rows: Sequence[tuple[str, Any]]) -> str:
    """Names and values, one below the other."""
    lines = "\n".join(
        f'<tr><th scope="row" class="text">{text(n)}</th><td class="text">{text(v)}</td></tr>' for n, v in rows
    )
    return f'<div class="wide"><table><tbody>\n{lines}\n</tbody></table></div>' if rows else ""


def figure(drawn: Figure | bytes, alternative: str, caption: str = "") -> str:
    """A picture within the page, with a text for those who do not see it.

    Parameters
    ----------
    drawn : matplotlib.figure.Figure, or bytes
        Bytes of a PNG file.
    alternative, caption : str
    """
    if not isinstance(drawn, bytes):
        buffer = io.BytesIO()
        drawn.savefig(buffer, format="png", dpi=DPI, metadata={"Software": None})
        picture, width = buffer.getvalue(), round(96 * drawn.get_figwidth())
    else:
        picture, width = drawn, 760
    data = base64.b64encode(picture).decode("ascii")
    below = f"<figcaption>{text(caption)}</figcaption>" if caption else ""
    return f'<figure><img src="data:image/png;base64,{data}" width="{width}" alt="{text(alternative)}">{below}</figure>'


def page(title: str, parts: Sequence[str]) -> str:
    """The whole page."""
    body = "\n".join(p for p in parts if p)
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f'<meta http-equiv="Content-Security-Policy" content="{POLICY}">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f'<link rel="icon" href="data:,">\n<title>{text(title)}</title>\n<style>{STYLE}</style>\n</head>\n'
        f"<body>\n<main>\n{body}\n</main>\n</body>\n</html>\n"
    )


def _heading(name: str) -> str:
    words, _, unit = name.partition(" (")
    return f"{text(words)}<small>{text(unit.removesuffix(')'))}</small>" if unit else text(name)


def _shown(value: Any) -> str:
    if isinstance(value, float):
        return NOTHING if value != value else f"{value:.5g}"
    return str(value)


def _numbers(column: Any) -> bool:
    """Whether texts are numbers, perhaps with bars, to be set to the right."""
    return all(isinstance(v, str) and (" ± " in v or v == NOTHING or _is_number(v)) for v in column)


def _is_number(word: str) -> bool:
    try:
        float(word)
    except ValueError:
        return False
    return True
