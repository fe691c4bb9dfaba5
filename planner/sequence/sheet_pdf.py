"""The run sheet as one A4 page of PDF, in black and white."""

from __future__ import annotations

import textwrap
from pathlib import Path
from typing import Any

from planner.sequence.finder import draw_finder
from planner.sequence.outlook import Outlook
from planner.sequence.sheet import INSTANT_HEAD, PASSAGE_HEAD, SheetRow, sheet_of
from planner.sequence.timeline import draw_timeline

_A4_IN = (8.27, 11.69)
_LINE = 0.0122  # height of a line, in page heights
_ONE_COLUMN = 14
_LARGE, _SMALL = 7.6, 6.2
_SHORT = (0, 1, 2, 3, 5)


def write_sheet_pdf(outlook: Outlook, path: Path) -> None:
    """Write the page; what does not fit is named on it and found in the HTML sheet."""
    from matplotlib.backends.backend_pdf import PdfPages

    with PdfPages(path, metadata={"Title": outlook.plan.title, "CreationDate": None}) as pdf:
        pdf.savefig(sheet_figure(outlook))


def sheet_figure(outlook: Outlook) -> Any:
    """Return the page as a matplotlib figure."""
    import matplotlib
    from matplotlib.figure import Figure

    sheet = sheet_of(outlook)
    figure = Figure(figsize=_A4_IN)
    page = _Page(figure)
    page.text(sheet.title, size=14, weight="bold")
    page.text(f"{sheet.subtitle}.  {sheet.facts[0]}", size=8)
    for fact in sheet.facts[1:]:
        page.text(fact, size=8)
    page.gap(0.4)
    page.table(INSTANT_HEAD, sheet.instants, (0.0, 0.2, 0.36, 0.53, 0.60, 0.66, 0.72, 0.78))
    page.gap(0.5)
    page.y -= 0.225
    with matplotlib.rc_context({"font.size": 7}):
        draw_timeline(figure.add_axes((0.10, page.y + 0.012, 0.85, 0.185)), outlook)
    page.y -= 0.040
    height = 0.225
    sensor = outlook.plan.rig.sensor
    width = min(0.5, height * _A4_IN[1] / _A4_IN[0] * sensor.width_px / sensor.height_px)
    top = page.y
    with matplotlib.rc_context({"font.size": 7}):
        finder = figure.add_axes((0.05, top - height, width, height))
        draw_finder(finder, outlook)
        finder.apply_aspect()
    right = _Page(figure, left=0.08 + width, width=0.87 - width)
    right.y = top
    right.text("To do", size=9, weight="bold")
    for row in sheet.steps:
        right.text(
            f"[  ] {row.cells[1]}  {row.cells[3]}",
            size=6.6,
            weight="bold" if row.strong else "normal",
            hang=5,
        )
    page.y = min(float(finder.get_position().y0) - 0.012, right.y)
    page.text("Caution", size=9, weight="bold")
    for caution in sheet.cautions:
        page.text(caution, size=6.4, hang=2, bullet="! ")
    for finding in sheet.findings:
        page.text(finding, size=6.4, hang=2, bullet="- ")
    for each in sheet.calibration:
        page.text(each, size=6.4, hang=2, bullet="+ ")
    page.gap(0.3)
    page.text("Frames", size=9, weight="bold")
    if len(sheet.passages) <= min(_ONE_COLUMN, page.rows_left(_LARGE) - 1):
        # what to guide on is in the steps and in the HTML sheet
        rows = tuple(SheetRow(row.cells[:8], row.strong) for row in sheet.passages)
        page.table(PASSAGE_HEAD[:8], rows, (0.0, 0.24, 0.42, 0.58, 0.65, 0.72, 0.88, 0.94))
    else:
        _two_columns(page, sheet.passages)
    page.foot(sheet.foot)
    return figure


def _two_columns(page: _Page, passages: tuple[SheetRow, ...]) -> None:
    """Write a long table of passages in two columns, as far as the page goes, without what is the same for all."""
    room = 2 * max(page.rows_left(_SMALL) - 2, 1)
    shown = passages[:room]
    rows = [SheetRow(tuple(row.cells[i] for i in _SHORT), row.strong) for row in shown]
    half = (len(rows) + 1) // 2
    top, lowest = page.y, page.y
    for left, part in ((page.left, rows[:half]), (page.left + 0.47, rows[half:])):
        column = _Page(page.figure, left=left, width=0.43)
        column.y = top
        column.table(tuple(PASSAGE_HEAD[i] for i in _SHORT), tuple(part), (0.0, 0.25, 0.49, 0.77, 0.89))
        lowest = min(lowest, column.y)
    page.y = lowest
    if len(passages) > len(shown):
        page.text(f"and {len(passages) - len(shown)} more, see the HTML sheet", size=7)


class _Page:
    """Writes down a page, from the top; `y` is where the next line goes, in page heights."""

    def __init__(self, figure: Any, left: float = 0.05, width: float = 0.90):
        self.figure, self.left, self.width = figure, left, width
        self.y = 0.975

    def gap(self, lines: float) -> None:
        self.y -= lines * _LINE

    def text(self, text: str, size: float, weight: str = "normal", hang: int = 0, bullet: str = "") -> None:
        """Write a paragraph, wrapped to the width; below the page nothing is written."""
        per_line = max(20, int(self.width * _A4_IN[0] * 72 / (size * (0.60 if weight == "bold" else 0.53))))
        for line in textwrap.wrap(bullet + text, per_line, subsequent_indent=" " * hang):
            step = size / 72 / _A4_IN[1] * 1.3
            if self.y - step < 0.03:
                return
            self.figure.text(self.left, self.y, line, fontsize=size, fontweight=weight, va="top")
            self.y -= step

    def table(self, head: tuple[str, ...], rows: tuple[SheetRow, ...], columns: tuple[float, ...]) -> None:
        """Write a table with columns at these parts of the width; long tables are set smaller."""
        size = _LARGE if len(rows) <= _ONE_COLUMN and self.width > 0.6 else _SMALL
        step = size / 72 / _A4_IN[1] * 1.32
        for text, column in zip(head, columns, strict=True):
            self.figure.text(
                self.left + column * self.width, self.y, text, fontsize=6.5, va="top", color="0.35"
            )
        self.y -= step
        for row in rows:
            for text, column in zip(row.cells, columns, strict=True):
                weight = "bold" if row.strong else "normal"
                self.figure.text(
                    self.left + column * self.width, self.y, text, fontsize=size, va="top", fontweight=weight
                )
            self.y -= step

    def rows_left(self, size: float) -> int:
        """Return how many rows of a table at this size have room above the foot."""
        return int((self.y - 0.034) / (size / 72 / _A4_IN[1] * 1.32))

    def foot(self, text: str) -> None:
        self.figure.text(self.left, 0.018, text, fontsize=6, color="0.35")
