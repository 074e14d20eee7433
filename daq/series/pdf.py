"""The report as PDF, A4, DejaVu embedded. The same report gives the same bytes (reportlab's `invariant`)."""

from __future__ import annotations

import io
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any
from xml.sax.saxutils import escape

from daq.errors import MidspanError
from daq.series.blocks import Block, Facts, Grid, Lines, Picture, Report, Section, Tone

INK, GREY, LINE, VERMILION, ORANGE = "#222222", "#555555", "#D8D8D8", "#D55E00", "#E69F00"
MARGIN_PT = 42.0
FONT, BOLD = "DejaVuSans", "DejaVuSans-Bold"
FRAME_PT = 12.0  # reportlab's own padding of a page's frame


def pdf_of(report: Report, figures: Mapping[str, bytes]) -> bytes:
    """figures: PNG bytes by name."""
    try:
        from reportlab.lib.pagesizes import A4
        from reportlab.platypus import SimpleDocTemplate
    except ImportError as error:
        raise MidspanError("the report needs reportlab: install midspan with the extra 'report'") from error
    _fonts()
    out = io.BytesIO()
    document = SimpleDocTemplate(
        out, pagesize=A4, leftMargin=MARGIN_PT, rightMargin=MARGIN_PT, topMargin=54.0, bottomMargin=46.0,
        title=report.title, author="midspan", subject=", ".join(report.marks), creator="midspan", invariant=1,
    )  # fmt: skip
    paint = _Painter(float(document.width) - FRAME_PT, figures)
    foot = _page(report)
    document.build(
        list(paint.story(report)),
        onFirstPage=foot,
        onLaterPages=foot,
    )
    return out.getvalue()


def _fonts() -> None:
    """matplotlib brings the fonts; both are of the extra `report`."""
    import matplotlib
    from reportlab.pdfbase import pdfmetrics
    from reportlab.pdfbase.ttfonts import TTFont

    folder = Path(matplotlib.get_data_path()) / "fonts" / "ttf"
    for name in (FONT, BOLD):
        if name not in pdfmetrics.getRegisteredFontNames():
            pdfmetrics.registerFont(TTFont(name, str(folder / f"{name}.ttf")))


def _page(report: Report) -> Callable[[Any, Any], None]:
    """Head and foot of every page: what it is, its marks, its number."""

    def paint(canvas: Any, document: Any) -> None:
        width, height = document.pagesize
        canvas.saveState()
        canvas.setFont(FONT, 7.5)
        canvas.setFillColor(GREY)
        canvas.drawString(MARGIN_PT, 24.0, report.title)
        canvas.drawRightString(width - MARGIN_PT, 24.0, f"page {canvas.getPageNumber()}")
        x = width - MARGIN_PT
        canvas.setFont(BOLD, 9.0)
        for mark in reversed(report.marks):
            wide = canvas.stringWidth(mark, BOLD, 9.0) + 10.0
            canvas.setStrokeColor(VERMILION)
            canvas.setFillColor(VERMILION)
            canvas.setLineWidth(1.4)
            canvas.roundRect(x - wide, height - 38.0, wide, 15.0, 3.0)
            canvas.drawString(x - wide + 5.0, height - 33.7, mark)
            x -= wide + 6.0
        canvas.restoreState()

    return paint


class _Painter:
    """Blocks to reportlab's flowables."""

    def __init__(self, width_pt: float, figures: Mapping[str, bytes]) -> None:
        from reportlab.lib.styles import ParagraphStyle

        self._width = width_pt
        self._figures = figures
        plain = ParagraphStyle(
            "plain", fontName=FONT, fontSize=8.2, leading=11.0, textColor=INK, spaceAfter=3.0
        )
        self._plain = plain
        self._cell = ParagraphStyle("cell", parent=plain, fontSize=7.4, leading=9.2, spaceAfter=0.0)
        self._right = ParagraphStyle("right", parent=self._cell, alignment=2)
        self._heads = ParagraphStyle("heads", parent=self._cell, fontName=BOLD, fontSize=7.0, leading=8.6)
        self._heads_right = ParagraphStyle("heads right", parent=self._heads, alignment=2)
        self._name = ParagraphStyle("name", parent=self._cell, textColor=GREY)
        self._caption = ParagraphStyle("caption", parent=plain, fontSize=7.2, leading=9.0, textColor=GREY)
        self._title = ParagraphStyle("title", fontName=BOLD, fontSize=17.0, leading=21.0, textColor=INK)
        self._head = ParagraphStyle(
            "head",
            fontName=BOLD,
            fontSize=11.0,
            leading=14.0,
            textColor=INK,
            spaceBefore=10.0,
            spaceAfter=4.0,
        )
        tones = {Tone.CAUTION: ORANGE, Tone.LOUD: VERMILION}
        self._tones = {Tone.PLAIN: plain} | {
            tone: ParagraphStyle(
                tone.value, parent=plain, borderColor=colour, borderWidth=0.9, borderPadding=3.0, spaceBefore=3.0,
                spaceAfter=6.0, leftIndent=4.0, rightIndent=4.0, fontName=BOLD if tone is Tone.LOUD else FONT,
            )
            for tone, colour in tones.items()
        }  # fmt: skip

    def story(self, report: Report) -> Iterator[Any]:
        from reportlab.platypus import Paragraph

        yield Paragraph(escape(report.title), self._title)
        yield Paragraph(escape(report.subtitle), self._plain)
        for section in report.sections:
            yield from self._section(section)

    def _section(self, section: Section) -> Iterator[Any]:
        from reportlab.platypus import CondPageBreak, HRFlowable, KeepTogether, Paragraph

        head = [
            Paragraph(escape(section.title), self._head),
            HRFlowable(width="100%", thickness=1.0, color=INK, spaceBefore=0.0, spaceAfter=5.0),
        ]
        first, *rest = section.blocks
        if isinstance(first, Picture):  # a heading never stands alone at the foot of a page
            yield KeepTogether([*head, *self._picture(first)])
        else:
            yield CondPageBreak(90.0)
            yield from head
            yield from self._block(first)
        for block in rest:
            yield from self._block(block)

    def _block(self, block: Block) -> Iterator[Any]:
        from reportlab.platypus import KeepTogether, Paragraph

        match block:
            case Lines(lines, tone):
                yield from (Paragraph(escape(line), self._tones[tone]) for line in lines)
            case Facts(rows):
                yield self._facts(rows)
            case Grid():
                yield self._grid(block)
            case Picture():
                yield KeepTogether(list(self._picture(block)))

    def _facts(self, rows: tuple[tuple[str, str], ...]) -> Any:
        from reportlab.platypus import Paragraph, Table

        cells = [
            [Paragraph(escape(name), self._name), Paragraph(escape(text), self._cell)] for name, text in rows
        ]
        table = Table(cells, colWidths=[0.21 * self._width, 0.79 * self._width], spaceAfter=6.0)
        table.setStyle([*_PADDING, ("LINEBELOW", (0, 0), (-1, -1), 0.4, LINE)])
        return table

    def _grid(self, grid: Grid) -> Any:
        from reportlab.platypus import Paragraph, Table

        def line(row: tuple[str, ...], left: Any, right: Any) -> list[Any]:
            return [
                Paragraph(escape(cell), left if at in grid.text else right) for at, cell in enumerate(row)
            ]

        rows = [line(grid.columns, self._heads, self._heads_right)]
        rows += [line(row, self._cell, self._right) for row in grid.rows]
        whole = sum(grid.shares)
        table = Table(
            rows,
            colWidths=[self._width * share / whole for share in grid.shares],
            repeatRows=1,
            spaceAfter=7.0,
        )
        table.setStyle([
            *_PADDING,
            ("LINEBELOW", (0, 0), (-1, 0), 0.9, INK),
            ("LINEBELOW", (0, 1), (-1, -1), 0.4, LINE),
            ("VALIGN", (0, 0), (-1, 0), "BOTTOM"),
            *(("LEFTPADDING", (at, 0), (at, -1), 9.0) for at in grid.text if at),
        ])  # fmt: skip
        return table

    def _picture(self, picture: Picture) -> Iterator[Any]:
        from reportlab.lib.utils import ImageReader
        from reportlab.platypus import Image, Paragraph

        data = self._figures.get(picture.name)
        if data is None:
            return
        wide, high = ImageReader(io.BytesIO(data)).getSize()
        image = Image(io.BytesIO(data), width=self._width, height=self._width * high / wide)
        yield image
        yield Paragraph(escape(picture.caption), self._caption)


_PADDING = [
    ("LEFTPADDING", (0, 0), (-1, -1), 2.0),
    ("RIGHTPADDING", (0, 0), (-1, -1), 2.0),
    ("TOPPADDING", (0, 0), (-1, -1), 1.6),
    ("BOTTOMPADDING", (0, 0), (-1, -1), 1.8),
    ("VALIGN", (0, 0), (-1, -1), "TOP"),
]
