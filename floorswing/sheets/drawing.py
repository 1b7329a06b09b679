"""The sheets as a PDF. The only module that knows the PDF library; its y axis points up, ours down."""

from __future__ import annotations

import io
from collections.abc import Sequence
from typing import Any

from reportlab.lib.colors import Color, black, white
from reportlab.lib.styles import ParagraphStyle
from reportlab.lib.units import mm
from reportlab.pdfgen.canvas import Canvas
from reportlab.platypus import Paragraph, Table, TableStyle

from floorswing.sheets.advice import ADVICE, BAR_MM, SHORT_BAR_MM, side_table
from floorswing.sheets.layout import LABEL_MM, Paper, Placed
from floorswing.sheets.outline import outlines
from vision.markers import printed_modules

GREY = Color(0.45, 0.45, 0.45)
BAR_THICK_MM = 3.0
BODY = ParagraphStyle("body", fontName="Helvetica", fontSize=10.5, leading=14, leftIndent=9, bulletIndent=0)
HEAD = ParagraphStyle("head", fontName="Helvetica-Bold", fontSize=12.5, leading=16, spaceBefore=6)


class Sheet:
    """A page being drawn, in mm from the top left of the paper."""

    def __init__(self, canvas: Any, paper: Paper) -> None:
        self._canvas = canvas
        self.paper = paper

    def y(self, top_mm: float) -> float:
        """Return the PDF's own y of a height counted from the top; the only flip."""
        return float((self.paper.height_mm - top_mm) * mm)

    def text(self, left_mm: float, base_mm: float, words: str, size: float, *, bold: bool = False) -> None:
        """Write a line of text with its base line at `base_mm`."""
        self._canvas.setFont("Helvetica-Bold" if bold else "Helvetica", size)
        self._canvas.setFillColor(black)
        self._canvas.drawString(left_mm * mm, self.y(base_mm), words)

    def text_to(self, right_mm: float, base_mm: float, words: str, size: float) -> None:
        """Write a line of text that ends at `right_mm`."""
        self._canvas.setFont("Helvetica", size)
        self._canvas.setFillColor(black)
        self._canvas.drawRightString(right_mm * mm, self.y(base_mm), words)

    def box(
        self, left_mm: float, top_mm: float, width_mm: float, height_mm: float, *, colour: Color = black
    ) -> None:
        """Fill a rectangle."""
        self._canvas.setFillColor(colour)
        self._canvas.rect(
            left_mm * mm, self.y(top_mm + height_mm), width_mm * mm, height_mm * mm, stroke=0, fill=1
        )

    def cutting_line(self, left_mm: float, top_mm: float, width_mm: float, height_mm: float) -> None:
        """Draw the dashed rectangle to cut along."""
        self._canvas.saveState()
        self._canvas.setStrokeColor(GREY)
        self._canvas.setLineWidth(0.2 * mm)
        self._canvas.setDash(2 * mm, 1.5 * mm)
        self._canvas.rect(
            left_mm * mm, self.y(top_mm + height_mm), width_mm * mm, height_mm * mm, stroke=1, fill=0
        )
        self._canvas.restoreState()

    def polygons(self, loops_mm: Sequence[Sequence[tuple[float, float]]]) -> None:
        """Fill the loops black as one path, holes left white."""
        path = self._canvas.beginPath()
        for loop in loops_mm:
            path.moveTo(loop[0][0] * mm, self.y(loop[0][1]))
            for x_mm, y_mm in loop[1:]:
                path.lineTo(x_mm * mm, self.y(y_mm))
            path.close()
        self._canvas.setFillColor(black)
        self._canvas.drawPath(path, stroke=0, fill=1, fillMode=0)

    def flow(self, piece: Any, left_mm: float, top_mm: float, width_mm: float) -> float:
        """Draw a paragraph or table and return its height."""
        _, height = piece.wrapOn(self._canvas, width_mm * mm, self.paper.height_mm * mm)
        piece.drawOn(self._canvas, left_mm * mm, self.y(top_mm) - height)
        return float(height / mm)

    def end(self) -> None:
        """Finish the page."""
        self._canvas.showPage()


def sheets_pdf(pages: Sequence[tuple[str, Sequence[Placed]]], paper: Paper, dictionary: str) -> bytes:
    """Return the PDF: a sheet of advice, then the pages of pieces with their titles.

    Parameters
    ----------
    pages : sequence of (str, sequence of Placed)
        Title and pieces of each page.
    paper : Paper
        What to print on.
    dictionary : str
        Name of an OpenCV predefined dictionary without the ``DICT_`` prefix.
    """
    buffer = io.BytesIO()
    canvas = Canvas(buffer, pagesize=(paper.width_mm * mm, paper.height_mm * mm), invariant=1)
    canvas.setTitle("Floorswing sheets")
    canvas.setSubject(f"Markers and floor cards in true scale, {dictionary}, {paper.name}")
    canvas.setViewerPreference("PrintScaling", "None")
    sides_mm = sorted({placed.piece.side_mm for _, page in pages for placed in page})
    sheet = Sheet(canvas, paper)
    _advice_page(sheet, sides_mm)
    for title, page in pages:
        _frame(sheet, title)
        for placed in page:
            _piece(sheet, placed, dictionary)
        sheet.end()
    canvas.save()
    return buffer.getvalue()


def _frame(sheet: Sheet, title: str) -> None:
    """Draw what every sheet has: title, how to print, and the two bars."""
    paper = sheet.paper
    right_mm = paper.width_mm - paper.side_mm
    sheet.text(paper.side_mm, 12.0, title, 13, bold=True)
    sheet.text_to(right_mm, 12.0, f"{paper.name}, print at 100 %", 9)
    _bars(sheet)


def _bars(sheet: Sheet) -> None:
    paper = sheet.paper
    top_mm = paper.height_mm - 14.0
    sheet.box(paper.side_mm, top_mm, BAR_MM, BAR_THICK_MM)
    _bar_scale(sheet, paper.side_mm, top_mm, BAR_MM, across=True)
    sheet.text(paper.side_mm, top_mm - 1.5, f"{BAR_MM:g} mm from end to end: check with a ruler", 8)
    left_mm = paper.width_mm - 10.0
    bottom_mm = paper.height_mm - 14.0 + BAR_THICK_MM
    sheet.box(left_mm, bottom_mm - SHORT_BAR_MM, BAR_THICK_MM, SHORT_BAR_MM)
    _bar_scale(sheet, left_mm, bottom_mm - SHORT_BAR_MM, SHORT_BAR_MM, across=False)
    sheet.text_to(left_mm - 1.5, bottom_mm, f"{SHORT_BAR_MM:g} mm", 8)


def _bar_scale(sheet: Sheet, left_mm: float, top_mm: float, length_mm: float, *, across: bool) -> None:
    """Mark every ten millimetres inside a bar by a thin white notch."""
    for at_mm in range(10, int(length_mm), 10):
        if across:
            sheet.box(left_mm + at_mm - 0.1, top_mm, 0.2, BAR_THICK_MM / 2, colour=white)
        else:
            sheet.box(left_mm, top_mm + at_mm - 0.1, BAR_THICK_MM / 2, 0.2, colour=white)


def _piece(sheet: Sheet, placed: Placed, dictionary: str) -> None:
    piece = placed.piece
    sheet.cutting_line(placed.left_mm, placed.top_mm, piece.width_mm, piece.height_mm)
    _label(sheet, placed, dictionary)
    left_mm, top_mm = placed.code_mm
    module_mm = piece.side_mm / piece.n_modules
    loops = outlines(printed_modules(dictionary, piece.marker_id))
    sheet.polygons([[(left_mm + x * module_mm, top_mm + y * module_mm) for x, y in loop] for loop in loops])


def _label(sheet: Sheet, placed: Placed, dictionary: str) -> None:
    piece, left_mm = placed.piece, placed.left_mm + 2.5
    words = f"{piece.title} {piece.marker_id}" if not piece.has_arrow else piece.title
    small = f"id {piece.marker_id}, {piece.side_mm:g} mm" if piece.has_arrow else f"{piece.side_mm:g} mm"
    sheet.text(left_mm, placed.top_mm + 5.2, words, 10, bold=True)
    sheet.text(left_mm, placed.top_mm + 9.0, small, 7)
    if piece.has_arrow:
        has_room = piece.width_mm > 45.0
        from_left_mm = piece.width_mm / 2 if has_room else piece.width_mm - 5.0
        _arrow(sheet, placed.left_mm + from_left_mm, placed.top_mm + 1.5)
        if has_room:
            sheet.text_to(placed.left_mm + piece.width_mm - 2.5, placed.top_mm + 5.2, "front of robot", 7)
            sheet.text_to(placed.left_mm + piece.width_mm - 2.5, placed.top_mm + 9.0, dictionary, 6)
    else:
        sheet.text_to(placed.left_mm + piece.width_mm - 2.5, placed.top_mm + 9.0, dictionary, 6)


def _arrow(sheet: Sheet, middle_mm: float, top_mm: float) -> None:
    """Draw an arrow that points up the sheet, within the label strip."""
    height_mm = LABEL_MM - 3.0
    sheet.polygons(
        [
            [
                (middle_mm, top_mm),
                (middle_mm + 3.0, top_mm + 4.0),
                (middle_mm + 1.0, top_mm + 4.0),
                (middle_mm + 1.0, top_mm + height_mm),
                (middle_mm - 1.0, top_mm + height_mm),
                (middle_mm - 1.0, top_mm + 4.0),
                (middle_mm - 3.0, top_mm + 4.0),
            ]
        ]
    )


def _advice_page(sheet: Sheet, sides_mm: Sequence[float]) -> None:
    paper = sheet.paper
    _frame(sheet, "Floorswing: before you film")
    width_mm = paper.width_mm - 2 * paper.side_mm - 4.0
    top_mm = paper.head_mm + 1.0
    for heading, lines in ADVICE:
        top_mm += sheet.flow(Paragraph(heading, HEAD), paper.side_mm, top_mm, width_mm) + 1.2
        for line in lines:
            paragraph = Paragraph(line, BODY, bulletText="\u2022")
            top_mm += sheet.flow(paragraph, paper.side_mm, top_mm, width_mm) + 1.2
        top_mm += 2.0
        if heading == ADVICE[0][0]:
            top_mm += sheet.flow(_side_table(sides_mm), paper.side_mm + 3.0, top_mm, width_mm) + 3.0
    sheet.end()


def _side_table(sides_mm: Sequence[float]) -> Table:
    """Return the table of sides to enter, laid on its side: few rows, one column a measured length."""
    columns = side_table(sides_mm)
    rows = [list(row) for row in zip(*columns, strict=True)]
    table = Table(rows, rowHeights=12, hAlign="LEFT")
    table.setStyle(
        TableStyle(
            [
                ("FONT", (0, 0), (-1, -1), "Helvetica", 8),
                ("FONT", (0, 0), (-1, 0), "Helvetica-Bold", 8),
                ("ALIGN", (1, 0), (-1, -1), "RIGHT"),
                ("LINEBELOW", (0, 0), (-1, 0), 0.5, black),
                ("TOPPADDING", (0, 0), (-1, -1), 0),
                ("BOTTOMPADDING", (0, 0), (-1, -1), 1),
                ("LEFTPADDING", (0, 0), (-1, -1), 3),
                ("RIGHTPADDING", (0, 0), (-1, -1), 3),
            ]
        )
    )
    return table
