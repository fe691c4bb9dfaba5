"""The run sheet as one self-contained HTML page: prints in black and white, reads on a phone at night."""

from __future__ import annotations

import io
from html import escape
from typing import Any

from planner.sequence.finder import finder_figure
from planner.sequence.outlook import Outlook
from planner.sequence.sheet import INSTANT_HEAD, PASSAGE_HEAD, STEP_HEAD, Sheet, SheetRow, sheet_of
from planner.sequence.timeline import timeline_figure

_STYLE = """
:root { --paper: #fff; --ink: #000; --faint: #555; --line: #999; }
body { margin: 0 auto; max-width: 60rem; padding: 0.8rem; background: var(--paper); color: var(--ink);
  font: 15px/1.35 system-ui, sans-serif; }
h1 { font-size: 1.35rem; margin: 0.2rem 0; } h2 { font-size: 1rem; margin: 0.9rem 0 0.2rem; }
p, ul { margin: 0.2rem 0; } ul { padding-left: 1.1rem; } .faint { color: var(--faint); font-size: 0.85em; }
table { border-collapse: collapse; width: 100%; font-variant-numeric: tabular-nums; }
th { text-align: left; font-weight: normal; font-size: 0.8em; color: var(--faint); }
td, th { padding: 0.1rem 0.45rem 0.1rem 0; border-bottom: 1px solid var(--line); vertical-align: top; }
tr.strong td { font-weight: 700; } .wide { overflow-x: auto; }
.caution { border: 2px solid var(--ink); padding: 0.3rem 0.6rem; margin: 0.5rem 0; }
td:not(:last-child) { white-space: nowrap; }
.pictures svg { width: 100%; height: auto; display: block; }
.pictures div { margin: 0.6rem 0; background: #fff; overflow-x: auto; }
.night { float: right; font-size: 0.85em; padding: 0.3rem; } .night input { accent-color: #a02010; }
/* at night: dark red on black; nothing in the sheet is told by colour alone */
body:has(#night:checked) { --paper: #000; --ink: #e03020; --faint: #b02818; --line: #601008; }
html:has(#night:checked) { background: #000; }
body:has(#night:checked) .pictures div { background: #000; filter: none; }
body:has(#night:checked) .pictures svg { filter: url(#red); }
/* a picture that is shrunk to a phone cannot be read: it is pushed sideways instead */
@media (max-width: 40rem) { body { font-size: 14px; } .pictures svg { width: 40rem; }
  .steps th { display: none; } .steps tr { display: flex; flex-wrap: wrap; } .steps td { border: 0; }
  .steps td:last-child { flex: 1 1 100%; padding-left: 1.3rem; border-bottom: 1px solid var(--line); } }
@media print { html { font-size: 10px; } body { font-size: 9.4px; max-width: none; padding: 0; }
  .night { display: none; } h1 { font-size: 1.5rem; }
  .pictures { display: flex; gap: 3mm; align-items: flex-start; } .pictures div { flex: 1 1 45%; min-width: 0; }
  h2 { margin: 0.4rem 0 0.1rem; } details { display: none; } }
@page { size: A4; margin: 11mm; }
"""

# turns a picture over and leaves only red of it
_RED = (
    "<svg width='0' height='0' style='position:absolute'><filter id='red' color-interpolation-filters='sRGB'>"
    "<feColorMatrix values='-.28 -.58 -.1 0 .97  0 0 0 0 .03  0 0 0 0 .02  0 0 0 1 0'/></filter></svg>"
)


def sheet_html(outlook: Outlook) -> str:
    """Return the page."""
    sheet = sheet_of(outlook)
    pictures = "".join(
        f"<div>{_svg(figure)}</div>"
        for figure in (timeline_figure(outlook, 7.4, 3.9), finder_figure(outlook, width_in=7.4))
    )
    parts = [
        "<!doctype html><html lang='en'><head><meta charset='utf-8'>",
        "<meta name='viewport' content='width=device-width, initial-scale=1'>",
        f"<title>{escape(sheet.title)}</title><style>{_STYLE}</style></head><body>",
        "<label class='night'><input type='checkbox' id='night'> red light</label>",
        _RED,
        f"<h1>{escape(sheet.title)}</h1>",
        f"<p>{escape(sheet.subtitle)}. {'<br>'.join(escape(fact) for fact in sheet.facts)}</p>",
        _cautions(sheet),
        "<h2>When</h2>",
        _table(INSTANT_HEAD, sheet.instants),
        f"<div class='pictures'>{pictures}</div>",
        "<h2>To do</h2>",
        _table(STEP_HEAD, sheet.steps, "wide steps"),
        "<h2>Frames</h2>",
        _table(PASSAGE_HEAD, sheet.passages),
        _list("Calibration", sheet.calibration),
        _list("Found while planning", sheet.findings),
        f"<details><summary>What was assumed</summary><ul>{_items(sheet.assumptions)}</ul></details>",
        f"<p class='faint'>{escape(sheet.foot)}</p></body></html>",
    ]
    return "\n".join(parts)


def _cautions(sheet: Sheet) -> str:
    return f"<div class='caution'><b>Caution</b><ul>{_items(sheet.cautions)}</ul></div>"


def _items(texts: tuple[str, ...]) -> str:
    return "".join(f"<li>{escape(text)}</li>" for text in texts)


def _list(title: str, texts: tuple[str, ...]) -> str:
    return f"<h2>{title}</h2><ul>{_items(texts)}</ul>" if texts else ""


def _table(head: tuple[str, ...], rows: tuple[SheetRow, ...], kind: str = "wide") -> str:
    kept = [column for column in range(len(head)) if any(row.cells[column] for row in rows)]
    top = "".join(f"<th>{escape(head[column])}</th>" for column in kept)
    lines = "".join(
        f"<tr{' class=strong' if row.strong else ''}>"
        + "".join(f"<td>{escape(row.cells[column])}</td>" for column in kept)
        + "</tr>"
        for row in rows
    )
    return f"<div class='{kind}'><table><tr>{top}</tr>{lines}</table></div>" if rows else ""


def _svg(figure: Any) -> str:
    """Return a figure as inline SVG, the same bytes for the same plan."""
    import matplotlib

    text = io.StringIO()
    with matplotlib.rc_context({"svg.hashsalt": "syzygraph"}):
        figure.savefig(text, format="svg", metadata={"Date": None}, bbox_inches="tight")
    content = text.getvalue()
    return content[content.index("<svg") :]
