"""The PDF writer: another reader opens its files, reads the text out, follows links and bookmarks."""

from __future__ import annotations

import io
import tracemalloc

import pypdf
import pytest

from terrain2q.output.looks import HATCHES
from terrain2q.output.pdf import PdfWriter, text_width


def written(draw, pages=1, **options) -> bytes:
    file = io.BytesIO()
    writer = PdfWriter(file, title="Töst", producer="a test", **options)
    for number in range(pages):
        page = writer.page(300, 200)
        draw(page, number)
        writer.add(page)
    writer.close()
    return file.getvalue()


def read(data: bytes) -> pypdf.PdfReader:
    return pypdf.PdfReader(io.BytesIO(data), strict=True)


@pytest.mark.parametrize(
    "text", ["Q = ΣK · √S = 12.5 ft³/s", "α ≤ 2, Łódź, Ærø, Ω", "a (b) \\ <c> & d", "−0.70 † [1]", "Ж и Ю"]
)
@pytest.mark.parametrize("face", ["regular", "bold"])
def test_text_is_read_out_as_it_was_written(text, face):
    data = written(lambda page, _: page.text(20, 20, text, 8, face=face))
    assert read(data).pages[0].extract_text() == text


def test_a_letter_the_face_does_not_have_is_shown_as_missing():
    data = written(lambda page, _: page.text(20, 20, "a洪b", 8))
    assert read(data).pages[0].extract_text() == "a\ufffdb"


def test_widths_are_those_of_the_face():
    data = written(lambda page, _: page.text(20, 20, "Wide 1.25", 10))
    font = read(data).pages[0]["/Resources"]["/Font"]["/F1"]
    inner = font["/DescendantFonts"][0].get_object()
    widths = dict(zip(inner["/W"][::2], (w[0] for w in inner["/W"][1::2]), strict=True))
    assert len(widths) == len(set("Wide 1.25"))
    # as drawn: the sum of the glyphs' widths
    assert text_width("Wide 1.25", 10) == pytest.approx(
        sum(sorted(widths.values())) / 100, abs=0.05 * len("Wide 1.25")
    )


def test_alignment_moves_the_text_by_its_width():
    places = {}

    def draw(page, _):
        for align in ("left", "centre", "center", "right"):
            page.text(150, 20, align, 10, align="center" if align == "centre" else align)

    def place(text, _, matrix, *rest):
        if text.strip():
            places[text.strip()] = matrix[4]

    read(written(draw)).pages[0].extract_text(visitor_text=lambda t, cm, tm, *r: place(t, cm, tm, *r))
    assert places["left"] == 150
    assert places["right"] == pytest.approx(150 - text_width("right", 10), abs=0.01)
    assert places["center"] == pytest.approx(150 - text_width("center", 10) / 2, abs=0.01)


def test_bookmarks_stand_below_each_other():
    names = [("Index", 0), ("Sections", 0), ("A (1)", 1), ("Bühl", 1), ("Crossings", 0), ("C", 1)]

    def draw(page, number):
        page.bookmark(*names[number])

    reader = read(written(draw, len(names)))
    found = []

    def walk(items, level):
        for item in items:
            if isinstance(item, list):
                walk(item, level + 1)
            else:
                found.append((item.title, level, reader.get_destination_page_number(item)))

    walk(reader.outline, 0)
    assert found == [(title, level, i) for i, (title, level) in enumerate(names)]


def test_a_page_in_front_is_read_first():
    file = io.BytesIO()
    writer = PdfWriter(file, title="x", producer="x")
    for text, front in (("second", False), ("third", False), ("first", True)):
        page = writer.page(300, 200)
        page.text(10, 10, text)
        page.bookmark(text)
        writer.add(page, front=front)
    writer.close()
    reader = read(file.getvalue())
    assert [page.extract_text() for page in reader.pages] == ["first", "second", "third"]
    assert [item.title for item in reader.outline] == ["first", "second", "third"]


def test_links_lead_to_their_anchors():
    def draw(page, number):
        page.anchor(f"a{number}")
        page.link(10, 10, 50, 12, f"a{(number + 1) % 3}")

    reader = read(written(draw, 3))
    for number, page in enumerate(reader.pages):
        name = page["/Annots"][0].get_object()["/Dest"]
        target = reader.named_destinations[name].page.get_object()
        assert reader.get_page_number(target) == (number + 1) % 3


def test_every_hatch_of_the_pictures_can_be_drawn():
    def draw(page, _):
        for i, hatch in enumerate(HATCHES):
            page.area([(i * 20, 0), (i * 20 + 15, 0), (i * 20, 50)], "#e9dfcb", hatch, edge="#000000")

    page = read(written(draw)).pages[0]
    assert len(page["/Resources"]["/Pattern"]) == len([h for h in HATCHES if h])


def test_what_it_says_about_itself():
    reader = read(written(lambda page, _: None, created="2026-01-02T03:04:05+00:00"))
    assert reader.metadata.title == "Töst"
    assert reader.metadata.producer == "a test"
    assert reader.metadata.creation_date.isoformat() == "2026-01-02T03:04:05+00:00"
    assert reader.trailer["/Root"]["/Lang"] == "en"


def test_same_drawing_gives_the_same_bytes():
    def draw(page, number):
        page.text(10, 10, f"page {number}")

    assert written(draw, 3) == written(draw, 3)


class _Nowhere(io.RawIOBase):
    def write(self, data):
        return len(data)


def test_memory_does_not_grow_with_pages():
    """A page here holds 60 kB of drawing; of one that was written its place and a bookmark are kept."""

    def peak(pages):
        tracemalloc.start()
        writer = PdfWriter(_Nowhere(), title="x", producer="x")
        for number in range(pages):
            page = writer.page(300, 200)
            page.line([(i % 300, (i * i + number) % 200) for i in range(5000)])
            page.text(10, 10, f"page {number}")
            page.bookmark(f"page {number}")
            writer.add(page)
        held = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        return held

    peak(3)
    few, many = peak(10), peak(60)
    assert (many - few) / 50 < 2_000
