"""Headings, text and tables that flow down a sheet, over as many pages as they need."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import lru_cache

from terrain2q.output.looks import INK
from terrain2q.output.pdf import Page, PdfWriter, text_width

MARGIN = 32.0
GREY = "#5f574f"
RULE = "#b9ae9f"
BAND = "#f3eee5"

SIZES = {"us": (612.0, 792.0), "si": (595.0, 842.0)}
"""Letter paper for feet, A4 for metres."""

_FOOT = 24.0
_HEAD = 30.0
_SIGN = 44.0


@lru_cache(maxsize=2048)
def fitted(text: str, width: float, size: float, face: str = "regular") -> str:
    """Return a text, shortened where it is wider than `width`.

    Examples
    --------
    >>> fitted("pasture", 60.0, 7.0), fitted("pasture, long grass", 40.0, 7.0)
    ('pasture', 'pasture,…')
    """
    if text_width(text, size, face) <= width:
        return text
    while text and text_width(text + "…", size, face) > width:
        text = text[:-1]
    return text.rstrip() + "…"


def wrapped(text: str, width: float, size: float, face: str = "regular") -> list[str]:
    """Return the lines of a text; a word wider than `width` is broken.

    Examples
    --------
    >>> wrapped("one two three", 40.0, 8.0)
    ['one two', 'three']
    >>> wrapped("unbreakable", 30.0, 8.0)
    ['unbrea', 'kable']
    """
    lines: list[str] = []
    line, filled, blank = "", 0.0, text_width(" ", size, face)
    for word in text.split():
        needed = text_width(word, size, face)
        if line and filled + blank + needed <= width:
            line, filled = f"{line} {word}", filled + blank + needed
            continue
        if line:
            lines.append(line)
        while needed > width:
            keep = len(word) - 1
            while keep > 1 and text_width(word[:keep], size, face) > width:
                keep -= 1
            if not keep:
                break
            lines.append(word[:keep])
            word = word[keep:]
            needed = text_width(word, size, face)
        line, filled = word, needed
    return [*lines, line] if line else lines


def figures(value: float, count: int = 4) -> str:
    """Return a number with `count` figures at least, written out; a dash where there is none.

    Examples
    --------
    >>> figures(812.345), figures(0.0023), figures(94213.4), figures(float("nan"))
    ('812.3', '0.002300', '94213', '–')
    """
    if not math.isfinite(value):
        return "–"
    if value == 0:
        return "0"
    after = count - 1 - math.floor(math.log10(abs(value)))
    return f"{value:.{max(after, 0)}f}"


def roughness_text(n: float) -> str:
    """Return Manning's n with three decimals, or with a fourth where it has one.

    Examples
    --------
    >>> roughness_text(0.07), roughness_text(0.0125), roughness_text(0.043219)
    ('0.070', '0.0125', '0.04322')
    """
    if abs(n - round(n, 4)) > 1e-9:
        return figures(n, 4)
    return f"{n:.4f}"[:-1] if f"{n:.4f}".endswith("0") else f"{n:.4f}"


@dataclass(frozen=True)
class TableColumn:
    """A column of a table: its two lines of heading, its width in points, and whether it holds text."""

    title: str
    unit: str
    width: float
    words: bool = False


class Sheet:
    """A sheet of one page or more, each with the same head and foot.

    Parameters
    ----------
    writer : PdfWriter
    size : (float, float)
        Of the paper, in points.
    heading, beside : str
        At the head of every page, left and right.
    foot : str
        The line at the foot of every page.
    anchor : str
        The name by which links find the sheet; none where empty.
    signed_first : bool
        Whether it is signed on its first page, where a long sheet has what it comes to, not on its last.
    """

    def __init__(
        self,
        writer: PdfWriter,
        size: tuple[float, float],
        heading: str,
        beside: str,
        foot: str,
        anchor: str = "",
        *,
        signed_first: bool = False,
    ) -> None:
        self._writer, self._size, self._signed_first = writer, size, signed_first
        self._heading, self._beside, self._foot = heading, beside, foot
        self.pages: list[Page] = []
        self.y = 0.0
        self._turn()
        if anchor:
            self.pages[0].anchor(anchor)
            self.pages[0].bookmark(heading, 1)

    # --- room ------------------------------------------------------------------------------------

    @property
    def page(self) -> Page:
        """The page being filled."""
        return self.pages[-1]

    @property
    def left(self) -> float:
        """Left edge of what is printed."""
        return MARGIN

    @property
    def width(self) -> float:
        """Width of what is printed."""
        return self._size[0] - 2 * MARGIN

    @property
    def room(self) -> float:
        """Height left on the page."""
        kept = _SIGN if self._signed_first and len(self.pages) == 1 else 0.0
        return self.y - MARGIN - _FOOT - kept

    def need(self, height: float) -> None:
        """Turn the page where less than `height` is left."""
        if self.room < height and self.room < self._size[1] - 2 * MARGIN - _FOOT - _HEAD - 1:
            self._turn()

    def space(self, height: float) -> None:
        """Leave some room."""
        self.y -= height

    def _turn(self) -> None:
        page = self._writer.page(*self._size)
        top = self._size[1] - MARGIN
        more = " (continued)" if self.pages else ""
        room = self.width - text_width(self._beside, 8) - 12
        page.text(
            MARGIN, top - 12, fitted(self._heading + more, room, 13, "bold"), 13, face="bold", colour=INK
        )
        page.text(MARGIN + self.width, top - 12, self._beside, 8, colour=GREY, align="right")
        page.line([(MARGIN, top - 19), (MARGIN + self.width, top - 19)], 1.0, INK)
        self.pages.append(page)
        self.y = top - _HEAD

    # --- words and tables ------------------------------------------------------------------------

    def title(self, text: str, beside: str = "", *, keep: float = 30.0) -> None:
        """Write a heading that has `keep` points of what follows on its page."""
        self.need(16 + keep)
        self.y -= 13
        self.page.text(
            self.left, self.y, fitted(text, self.width * 0.8, 9, "bold"), 9, face="bold", colour=INK
        )
        if beside:
            self.page.text(self.left + self.width, self.y, beside, 7.5, colour=GREY, align="right")
        self.y -= 4

    def lines(
        self, text: str, size: float = 7.3, *, face: str = "regular", colour: str = INK, indent: float = 0.0,
        hang: float = 0.0,
    ) -> None:  # fmt: skip
        """Write a text in as many lines as it needs; those after the first stand `hang` further in."""
        step = size * 1.38
        found = wrapped(text, self.width - indent - hang, size, face)
        for number, line in enumerate(found):
            self.need(step)
            self.y -= step
            self.page.text(
                self.left + indent + (hang if number else 0), self.y, line, size, face=face, colour=colour
            )

    def table(
        self,
        columns: Sequence[TableColumn],
        rows: Sequence[Sequence[str]],
        last: Sequence[str] | None = None,
        *,
        size: float = 6.8,
        on_row: Callable[[Page, int, float, float], None] | None = None,
    ) -> None:
        """Draw a table whose head is repeated on each page; `last` stands below a rule, in bold."""
        step = size * 1.55
        scale = self.width / sum(c.width for c in columns)
        edges = [self.left]
        for column in columns:
            edges.append(edges[-1] + column.width * scale)
        two = any(c.unit for c in columns)
        self._head(columns, edges, size, two)
        for number, row in enumerate(rows):
            if self.room < step:
                self._turn()
                self._head(columns, edges, size, two)
            self.y -= step
            if number % 2:
                self.page.box(self.left, self.y - 0.28 * step, self.width, step, BAND)
            self._row(columns, edges, row, size, "regular")
            if on_row is not None:
                on_row(self.page, number, self.y - 0.28 * step, step)
        if last is not None:
            self.need(step)
            self.y -= step
            self.page.line(
                [(self.left, self.y + 0.72 * step), (self.left + self.width, self.y + 0.72 * step)], 0.5, INK
            )
            self._row(columns, edges, last, size, "bold")
        self.y -= 0.5 * step

    def beside(
        self, columns: Sequence[TableColumn], rows: Sequence[Sequence[str]], *, size: float = 6.8,
        gap: float = 14.0,
    ) -> None:  # fmt: skip
        """Draw a long, narrow table in blocks beside one another, each read down before the next."""
        wide = sum(c.width for c in columns)
        blocks = max(1, int((self.width + gap) // (wide + gap)))
        step, head = size * 1.55, size * 2.6 + 4
        empty = [""] * len(columns)
        all_columns = list(columns)
        for _ in range(blocks - 1):
            all_columns += [TableColumn("", "", gap), *columns]
        at = 0
        while at < len(rows):
            self.need(head + 6 * step)
            fits = max(1, int((self.room - head - 2 * size) / step))
            count = min(math.ceil((len(rows) - at) / blocks), fits)
            lines = []
            for i in range(at, at + count):
                line: list[str] = []
                for j in range(i, i + blocks * count, count):
                    line += [*([""] if line else []), *(rows[j] if j < len(rows) else empty)]
                lines.append(line)
            self.table(all_columns, lines, size=size)
            at += blocks * count

    def _head(self, columns, edges, size: float, two: bool) -> None:
        step = size * 1.3
        height = step * (2 if two else 1) + 4
        self.need(height + 2 * size)
        for column, start, end in zip(columns, edges[:-1], edges[1:], strict=True):
            x, align = (start + 2, "left") if column.words else (end - 2, "right")
            for line, text in enumerate((column.title, column.unit)):
                self.page.text(
                    x,
                    self.y - step * (line + 1),
                    text,
                    size,
                    face="regular" if line else "bold",
                    colour=GREY if line else INK,
                    align=align,
                )
        self.y -= height
        self.page.line([(self.left, self.y + 1), (self.left + self.width, self.y + 1)], 0.5, INK)

    def _row(self, columns, edges, row: Sequence[str], size: float, face: str) -> None:
        for column, start, end, text in zip(columns, edges[:-1], edges[1:], row, strict=True):
            if not text:
                continue
            if column.words:
                text = fitted(text, end - start - 4, size, face)
                self.page.text(start + 2, self.y, text, size, face=face, colour=INK)
            else:
                self.page.text(end - 2, self.y, text, size, face=face, colour=INK, align="right")

    # --- the end ---------------------------------------------------------------------------------

    def sign(self) -> None:
        """Leave room for who made and who checked the sheet, at the foot of its last page, or its first."""
        if self._signed_first:
            page = self.pages[0]
        else:
            self.need(_SIGN)
            page = self.page
        bottom = MARGIN + _FOOT - 4
        parts = (("Made by", 0.38), ("Checked by", 0.38), ("Date", 0.24))
        x = self.left
        for name, share in parts:
            width = self.width * share
            page.box(x, bottom, width, 30, None, RULE)
            page.text(x + 4, bottom + 21, name, 6.8, colour=GREY)
            x += width

    def finish(self, number: int, *, front: bool = False) -> int:
        """Write the pages, the first of them page `number` of the file; return the number of the next."""
        for i, page in enumerate(self.pages):
            page.line([(MARGIN, MARGIN + 12), (MARGIN + self.width, MARGIN + 12)], 0.4, RULE)
            page.text(MARGIN, MARGIN + 3, self._foot, 6.6, colour=GREY)
            place = f"page {number + i}"
            if len(self.pages) > 1:
                place = f"{i + 1} of {len(self.pages)}, {place}"
            page.text(MARGIN + self.width, MARGIN + 3, place, 6.6, colour=GREY, align="right")
            self._writer.add(page, front=front)
        return number + len(self.pages)
