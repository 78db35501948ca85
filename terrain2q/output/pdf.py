"""A PDF file written page by page: text that can be read out and searched, lines, areas, bookmarks, links.

Each page goes to the file as soon as it is done, so that memory does not grow with the number of pages;
what is kept of a page is its place. Text is set in DejaVu Sans, which comes with matplotlib, and of
which only the letters used go into the file. Standard: ISO 32000-1 (PDF 1.7).
"""

from __future__ import annotations

import io
import zlib
from collections.abc import Iterable, Sequence
from functools import lru_cache
from pathlib import Path
from typing import Any, BinaryIO

import matplotlib as mpl
from fontTools import subset
from fontTools.ttLib import TTFont

_FACES = {"regular": ("DejaVuSans.ttf", "F1"), "bold": ("DejaVuSans-Bold.ttf", "F2")}
_UNKNOWN = "\ufffd"
_CACHED = 2_000
"""Texts kept as glyphs, as many stand on page after page."""


@lru_cache
def _face(name: str) -> tuple[dict[int, int], list[int], int]:
    """Return glyph numbers by code point, widths by glyph number, and units in one em."""
    with TTFont(_face_path(name), lazy=True) as font:
        numbers = {code: font.getGlyphID(glyph) for code, glyph in font.getBestCmap().items()}
        widths = [font["hmtx"][glyph][0] for glyph in font.getGlyphOrder()]
        return numbers, widths, font["head"].unitsPerEm


def _face_path(name: str) -> Path:
    return Path(mpl.get_data_path(), "fonts", "ttf", _FACES[name][0])


def text_width(text: str, size: float, face: str = "regular") -> float:
    """Return the width of a text in points.

    Examples
    --------
    >>> round(text_width("10 ft", 10.0), 1)
    23.3
    """
    return sum(map(_advances(face).__getitem__, text)) * size


class _Advances(dict[str, float]):
    """Widths of letters in ems, looked up once each."""

    def __init__(self, face: str) -> None:
        super().__init__()
        self._face = face

    def __missing__(self, letter: str) -> float:
        numbers, widths, em = _face(self._face)
        self[letter] = found = widths[numbers.get(ord(letter), numbers[ord(_UNKNOWN)])] / em
        return found


@lru_cache
def _advances(face: str) -> _Advances:
    return _Advances(face)


class Page:
    """A page being drawn: points of 1/72 inch from the lower left corner.

    Parameters
    ----------
    writer : PdfWriter
    width, height : float
    """

    def __init__(self, writer: PdfWriter, width: float, height: float) -> None:
        self._writer, self.width, self.height = writer, width, height
        self._parts: list[str] = []
        self.links: list[tuple[tuple[float, float, float, float], str]] = []
        self.anchors: list[tuple[str, float]] = []
        self.bookmarks: list[tuple[str, int, float]] = []

    def text(
        self,
        x: float,
        y: float,
        text: str,
        size: float = 7.5,
        *,
        face: str = "regular",
        colour: str = "#000000",
        align: str = "left",
        turned: bool = False,
    ) -> None:
        """Write one line of text; `align` says what `x` is: its left, its right or its centre.

        Turned text runs upward.
        """
        if not text:
            return
        if align != "left":
            width = text_width(text, size, face) * (1.0 if align == "right" else 0.5)
            x, y = (x, y - width) if turned else (x - width, y)
        place = f"0 1 -1 0 {x:.2f} {y:.2f}" if turned else f"1 0 0 1 {x:.2f} {y:.2f}"
        glyphs = self._writer.glyphs(face, text)
        self._parts.append(
            f"BT {_colour(colour)} rg /{_FACES[face][1]} {size:.2f} Tf {place} Tm <{glyphs}> Tj ET"
        )

    def line(
        self,
        points: Iterable[Sequence[float]],
        width: float = 0.6,
        colour: str = "#000000",
        dash: Sequence = (),
    ) -> None:
        """Draw a line through points."""
        pattern = " ".join(f"{d:g}" for d in dash)
        self._parts.append(f"{_colour(colour)} RG {width:.2f} w [{pattern}] 0 d {_path(points)} S")

    def area(
        self, points: Iterable[Sequence[float]], fill: str | None, hatch: str = "", edge: str | None = None,
        width: float = 0.5,
    ) -> None:  # fmt: skip
        """Fill the area within points with a colour, under a hatch of the kinds that pictures have."""
        path = _path(points)
        if fill:
            self._parts.append(f"{_colour(fill)} rg {path} f")
        if hatch:
            self._parts.append(f"/Pattern cs /{self._writer.pattern(hatch)} scn {path} f")
        if edge:
            self._parts.append(f"{_colour(edge)} RG {width:.2f} w [] 0 d {path} s")

    def box(
        self,
        x: float,
        y: float,
        width: float,
        height: float,
        fill: str | None = None,
        edge: str | None = None,
        line: float = 0.5,
    ) -> None:
        """Draw a rectangle from its lower left corner."""
        self.area(
            [(x, y), (x + width, y), (x + width, y + height), (x, y + height)], fill, edge=edge, width=line
        )

    def clip(self, x: float, y: float, width: float, height: float) -> None:
        """Draw only within a rectangle from here on, until :meth:`unclip`."""
        self._parts.append(f"q {x:.2f} {y:.2f} {width:.2f} {height:.2f} re W n")

    def unclip(self) -> None:
        """Draw everywhere again."""
        self._parts.append("Q")

    def link(self, x: float, y: float, width: float, height: float, anchor: str) -> None:
        """Let a rectangle lead to an anchor."""
        self.links.append(((x, y, x + width, y + height), anchor))

    def anchor(self, name: str, y: float | None = None) -> None:
        """Give this page, from `y` down, a name that links lead to."""
        self.anchors.append((name, self.height if y is None else y))

    def bookmark(self, title: str, level: int = 0) -> None:
        """Let the file's outline lead to this page; level 1 stands below the level 0 before it."""
        self.bookmarks.append((title, level, self.height))

    def content(self) -> bytes:
        """Return the page's drawing."""
        return "\n".join(self._parts).encode("ascii")


class PdfWriter:
    """Write pages into an open file, one by one; :meth:`close` makes it a whole PDF.

    Parameters
    ----------
    file : binary file
        Open for writing.
    title, producer : str
    created : str
        Time of the contents in ISO 8601, so that the same contents give the same bytes; none where empty.
    """

    def __init__(self, file: BinaryIO, *, title: str, producer: str, created: str = "") -> None:
        self._file = file
        self._places: list[int] = [0]
        self._pages: tuple[list[int], list[int]] = ([], [])
        self._anchors: dict[str, tuple[int, float]] = {}
        self._bookmarks: tuple[list[tuple], list[tuple]] = ([], [])
        self._used: dict[str, dict[int, int]] = {name: {} for name in _FACES}
        self._known: dict[tuple[str, str], str] = {}
        self._patterns: dict[str, str] = {}
        self._info = {"Title": title, "Producer": producer}, created
        self._at = 0
        self._write(b"%PDF-1.7\n%\xe2\xe3\xcf\xd3\n")
        self._tree, self._resources = self._reserve(), self._reserve()

    # --- pages -----------------------------------------------------------------------------------

    def page(self, width: float, height: float) -> Page:
        """Return a new page; it is in the file once it was given to :meth:`add`."""
        return Page(self, width, height)

    def add(self, page: Page, *, front: bool = False) -> None:
        """Write a page; `front` puts it before all that are not."""
        content = self._stream("", page.content())
        number = self._reserve()
        notes = "".join(
            f"<</Type/Annot/Subtype/Link/Border[0 0 0]/Rect[{' '.join(f'{v:.2f}' for v in box)}]"
            f"/Dest {_text(anchor)}>>"
            for box, anchor in page.links
        )
        self._object(
            number,
            f"<</Type/Page/Parent {self._tree} 0 R/MediaBox[0 0 {page.width:g} {page.height:g}]"
            f"/Resources {self._resources} 0 R/Contents {content} 0 R"
            + (f"/Annots[{notes}]" if notes else "") + ">>",
        )  # fmt: skip
        self._pages[0 if front else 1].append(number)
        for name, y in page.anchors:
            self._anchors[name] = number, y
        for title, level, y in page.bookmarks:
            self._bookmarks[0 if front else 1].append((title, level, number, y))

    def close(self) -> None:
        """Write what the pages share and the table of contents of the file; the file stays open."""
        pages = [*self._pages[0], *self._pages[1]]
        kids = " ".join(f"{n} 0 R" for n in pages)
        self._object(self._tree, f"<</Type/Pages/Count {len(pages)}/Kids[{kids}]>>")
        fonts = "".join(f"/{_FACES[name][1]} {self._font(name)} 0 R" for name in _FACES)
        patterns = "".join(
            f"/{name} {self._pattern(hatch)} 0 R" for hatch, name in self._patterns.items()
        )  # fmt: skip
        self._object(self._resources, f"<</Font<<{fonts}>>/Pattern<<{patterns}>>>>")
        names = "".join(
            f"{_text(name)}[{page} 0 R/XYZ null {y:.2f} null]"
            for name, (page, y) in sorted(self._anchors.items(), key=lambda item: _text(item[0]))
        )
        outline = self._outline([*self._bookmarks[0], *self._bookmarks[1]])
        catalogue = self._reserve()
        self._object(
            catalogue,
            f"<</Type/Catalog/Pages {self._tree} 0 R/Lang(en)/ViewerPreferences<</DisplayDocTitle true>>"
            f"/Names<</Dests<</Names[{names}]>>>>"
            + (f"/Outlines {outline} 0 R/PageMode/UseOutlines" if outline else "") + ">>",
        )  # fmt: skip
        words, created = self._info
        about = "".join(f"/{key} {_text(value)}" for key, value in words.items())
        digits = "".join(c for c in created[:19] if c.isdigit())
        if len(digits) == 14:
            about += f"/CreationDate(D:{digits}Z)"
        info = self._reserve()
        self._object(info, f"<<{about}>>")
        start = self._at
        self._write(f"xref\n0 {len(self._places)}\n0000000000 65535 f \n".encode())
        for place in self._places[1:]:
            self._write(f"{place:010d} 00000 n \n".encode())
        self._write(
            f"trailer\n<</Size {len(self._places)}/Root {catalogue} 0 R/Info {info} 0 R>>\n"
            f"startxref\n{start}\n%%EOF\n".encode()
        )

    # --- what pages ask for ----------------------------------------------------------------------

    def glyphs(self, face: str, text: str) -> str:
        """Return the glyphs of a text, four hexadecimal digits each, and remember that they are used."""
        known = self._known.get((face, text))
        if known is not None:
            return known
        numbers = _face(face)[0]
        used, out = self._used[face], []
        for letter in text:
            code = ord(letter)
            if code not in numbers:
                code = ord(_UNKNOWN)
            glyph = numbers[code]
            used.setdefault(glyph, code)
            out.append(f"{glyph:04x}")
        if len(self._known) > _CACHED:
            self._known.clear()
        known = self._known[face, text] = "".join(out)
        return known

    def pattern(self, hatch: str) -> str:
        """Return the name of a hatch."""
        return self._patterns.setdefault(hatch, f"P{len(self._patterns)}")

    # --- objects ---------------------------------------------------------------------------------

    def _write(self, data: bytes) -> None:
        self._file.write(data)
        self._at += len(data)

    def _reserve(self) -> int:
        self._places.append(0)
        return len(self._places) - 1

    def _object(self, number: int, text: str) -> None:
        self._places[number] = self._at
        self._write(f"{number} 0 obj\n{text}\nendobj\n".encode("ascii"))

    def _stream(self, words: str, data: bytes) -> int:
        number = self._reserve()
        packed = zlib.compress(data)
        self._places[number] = self._at
        self._write(
            f"{number} 0 obj\n<<{words}/Filter/FlateDecode/Length {len(packed)}>>\nstream\n".encode("ascii")
        )
        self._write(packed)
        self._write(b"\nendstream\nendobj\n")
        return number

    def _outline(self, bookmarks: list[tuple]) -> int | None:
        if not bookmarks:
            return None
        root = self._reserve()
        numbers = [self._reserve() for _ in bookmarks]
        tops = [i for i, (_, level, *_) in enumerate(bookmarks) if level == 0 or i == 0]
        ends = [*tops[1:], len(bookmarks)]
        below = {top: list(range(top + 1, end)) for top, end in zip(tops, ends, strict=True)}

        def family(members: list[int], parent: int) -> None:
            for place, i in enumerate(members):
                title, _, page, y = bookmarks[i]
                words = [f"/Title {_text(title)}/Parent {parent} 0 R/Dest[{page} 0 R/XYZ null {y:.2f} null]"]
                if place:
                    words.append(f"/Prev {numbers[members[place - 1]]} 0 R")
                if place + 1 < len(members):
                    words.append(f"/Next {numbers[members[place + 1]]} 0 R")
                children = below.get(i) if parent == root else None
                if children:
                    first, last = numbers[children[0]], numbers[children[-1]]
                    words.append(f"/First {first} 0 R/Last {last} 0 R/Count {len(children)}")
                    family(children, numbers[i])
                self._object(numbers[i], f"<<{''.join(words)}>>")

        family(tops, root)
        self._object(
            root,
            f"<</Type/Outlines/First {numbers[tops[0]]} 0 R/Last {numbers[tops[-1]]} 0 R"
            f"/Count {len(bookmarks)}>>",
        )
        return root

    def _font(self, name: str) -> int:
        """Write a face with the letters that were used, and how they are read out."""
        used = self._used[name] or {_face(name)[0][32]: 32}
        options = subset.Options(
            retain_gids=True, notdef_outline=True, hinting=False, layout_features=[], recalc_timestamp=False,
            name_IDs=[1, 2, 6], glyph_names=False, drop_tables=["GSUB", "GPOS", "GDEF", "kern", "FFTM"],
        )  # fmt: skip
        with subset.load_font(_face_path(name), options) as font:
            chooser = subset.Subsetter(options)
            chooser.populate(gids=sorted(used))
            chooser.subset(font)
            memory = io.BytesIO()
            font.save(memory, reorderTables=False)
            em, hhea, head = font["head"].unitsPerEm, font["hhea"], font["head"]
            box = " ".join(f"{v * 1000 / em:.0f}" for v in (head.xMin, head.yMin, head.xMax, head.yMax))
            ascent, descent = (v * 1000 / em for v in (hhea.ascent, hhea.descent))
        data = memory.getvalue()
        file = self._stream(f"/Length1 {len(data)}", data)
        # six letters before the name say that this is a part of the face
        base = f"TRNSEC+{_FACES[name][0].removesuffix('.ttf')}"
        described = self._reserve()
        self._object(
            described,
            f"<</Type/FontDescriptor/FontName/{base}/Flags 32/ItalicAngle 0/FontBBox[{box}]"
            f"/Ascent {ascent:.0f}/Descent {descent:.0f}/CapHeight 729/StemV 80/FontFile2 {file} 0 R>>",
        )
        widths = _face(name)[1]
        listed = "".join(f"{g}[{widths[g] * 1000 / em:.0f}]" for g in sorted(used))
        inner = self._reserve()
        self._object(
            inner,
            f"<</Type/Font/Subtype/CIDFontType2/BaseFont/{base}/CIDToGIDMap/Identity"
            "/CIDSystemInfo<</Registry(Adobe)/Ordering(Identity)/Supplement 0>>"
            f"/FontDescriptor {described} 0 R/DW 600/W[{listed}]>>",
        )
        read_out = self._stream("", _cmap(used))
        outer = self._reserve()
        self._object(
            outer,
            f"<</Type/Font/Subtype/Type0/BaseFont/{base}/Encoding/Identity-H"
            f"/DescendantFonts[{inner} 0 R]/ToUnicode {read_out} 0 R>>",
        )
        return outer

    def _pattern(self, hatch: str) -> int:
        size, strokes = _HATCHES[hatch]
        drawing = f"{_colour(_HATCH_INK)} RG 0.4 w {strokes}"
        return self._stream(
            f"/Type/Pattern/PatternType 1/PaintType 1/TilingType 2/BBox[0 0 {size} {size}]"
            f"/XStep {size}/YStep {size}/Resources<<>>",
            drawing.encode("ascii"),
        )


_HATCH_INK = "#a08f76"

# Size of a tile and what is drawn in it, by the hatches of the pictures. Strokes reach over the edge so
# that they join from tile to tile.
_HATCHES = {
    "////": (6, "-1 -1 m 7 7 l S -1 5 m 1 7 l S 5 -1 m 7 1 l S"),
    "\\\\\\\\": (6, "-1 7 m 7 -1 l S -1 1 m 1 -1 l S 5 7 m 7 5 l S"),
    "....": (5, "1 J 1 w 2.5 2.5 m 2.5 2.5 l S"),
    "xxx": (6, "-1 -1 m 7 7 l S -1 7 m 7 -1 l S"),
    "----": (4, "0 2 m 4 2 l S"),
    "oo": (7, "3.5 2 m 5 3.5 l 3.5 5 l 2 3.5 l s"),
}


@lru_cache
def _colour(code: str) -> str:
    return " ".join(f"{int(code[i : i + 2], 16) / 255:.3f}" for i in (1, 3, 5))


def _path(points: Iterable[Sequence[float]]) -> str:
    places = [f"{x:.2f} {y:.2f}" for x, y in points]
    return f"{places[0]} m " + " ".join(f"{p} l" for p in places[1:])


def _text(text: Any) -> str:
    """Return a text as PDF writes it outside of pages."""
    return f"<feff{str(text).encode('utf-16-be').hex()}>"


def _cmap(used: dict[int, int]) -> bytes:
    """Return the table that says which letter each glyph is."""
    pairs = [f"<{g:04x}> <{chr(code).encode('utf-16-be').hex()}>" for g, code in sorted(used.items())]
    blocks = [pairs[i : i + 100] for i in range(0, len(pairs), 100)]
    body = "\n".join(f"{len(b)} beginbfchar\n" + "\n".join(b) + "\nendbfchar" for b in blocks)
    return (
        "/CIDInit /ProcSet findresource begin 12 dict begin begincmap "
        "/CIDSystemInfo <</Registry (Adobe) /Ordering (UCS) /Supplement 0>> def "
        "/CMapName /Adobe-Identity-UCS def /CMapType 2 def "
        f"1 begincodespacerange <0000> <ffff> endcodespacerange\n{body}\n"
        "endcmap CMapName currentdict /CMap defineresource pop end end"
    ).encode("ascii")
