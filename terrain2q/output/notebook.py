"""How results, sections and ratings show themselves in a notebook: small pieces of HTML."""

from __future__ import annotations

import base64
import io
from collections.abc import Callable
from html import escape
from typing import TYPE_CHECKING, Any

import matplotlib as mpl
import pandas as pd
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from terrain2q.columns import CAUTION, column_title
from terrain2q.errors import FAILED
from terrain2q.output.plots import plot_rating, plot_section

if TYPE_CHECKING:
    from terrain2q.hydraulics.rating import Rating
    from terrain2q.hydraulics.section import Section

_ROWS = 12


def section_html(section: Section) -> str:
    """Return the picture of a section and its subareas with their n."""
    name = section.section_id or "without a name"
    unit = section.system.symbol("length")
    picture = _picture(
        lambda ax: plot_section(section, ax=ax), (9.0, 3.6), f"Section {name}: the ground and its subareas"
    )
    rows = [
        [str(i), s.zone, s.label, f"{s.n:.3f}" if isinstance(s.n, float | int) else str(s.n),
         f"{s.start:.1f}", f"{s.end:.1f}"]
        for i, s in enumerate(section.subareas, 1)
    ]  # fmt: skip
    head = ["subarea", "zone", "label", "n", f"from [{unit}]", f"to [{unit}]"]
    return f"{picture}{_table(head, rows, words=3)}"


def rating_html(rating: Rating) -> str:
    """Return the picture of a rating, and the rating as a table."""
    plain = pd.DataFrame(rating)
    if len(plain) < 2 or not {"stage", "discharge"} <= set(plain.columns):
        return plain._repr_html_()
    picture = _picture(lambda ax: plot_rating(rating, ax=ax), (5.6, 3.6), "Rating: stage against discharge")
    return f"{picture}{plain._repr_html_()}"


def results_html(results: Any) -> str:
    """Return what came out of a study: stages by event, findings and the caution."""
    stages = results.layers["design_stages"]
    sections = results.layers["sections"]
    counts = ", ".join(f"{n} {severity}" for severity, n in results.finding_counts().items())
    parts = [
        f"<p><strong>{escape(results.name or 'Study')}</strong>: {len(sections)} sections, "
        f"{results.failed_sections} without a full answer. Findings: {counts}.</p>"
    ]
    if len(stages):
        events = list(dict.fromkeys(stages["event"]))
        rows = {(r.section_id, r.event): r for r in stages.itertuples()}
        ids = list(dict.fromkeys(stages["section_id"]))
        body = []
        for name in ids[:_ROWS]:
            mine = [rows.get((name, event)) for event in events]
            known = [r is not None and r.status != FAILED for r in mine]
            found = {r.status for r in mine if r is not None}
            worst = next((s for s in ("failed", "doubtful", "ok") if s in found), "")
            cells = [f"{r.stage:.2f}" if ok else "–" for r, ok in zip(mine, known, strict=True)]
            body.append([name, worst, *cells])
        title = column_title("stage", results.units)
        parts.append(_table(["section", "status", *(f"{title}, {event}" for event in events)], body, words=2))
        if len(ids) > _ROWS:
            parts.append(f"<p>and {len(ids) - _ROWS} more sections in <code>design_stages</code></p>")
    parts.append(
        "<p>Layers: " + ", ".join(f"<code>{escape(n)}</code> ({len(t)})" for n, t in results.layers.items())
        + ". <code>explore()</code> shows the map.</p>"
    )  # fmt: skip
    parts.append(f"<p><em>{escape(CAUTION)}</em></p>")
    return "".join(parts)


def _table(head: list[str], rows: list[list[str]], words: int) -> str:
    """Return a table whose first `words` columns are text, the others numbers."""

    def cells(tag: str, values: list[str]) -> str:
        return "".join(
            f'<{tag} style="text-align:{"left" if i < words else "right"}">{escape(value)}</{tag}>'
            for i, value in enumerate(values)
        )

    body = "".join(f"<tr>{cells('td', row)}</tr>" for row in rows)
    return f"<table><thead><tr>{cells('th', head)}</tr></thead><tbody>{body}</tbody></table>"


def _picture(draw: Callable[[Any], Any], size: tuple[float, float], words: str) -> str:
    """Return a drawing as an image that stands in the text; no figure of the notebook is touched."""
    figure = Figure(figsize=size, layout="constrained")
    FigureCanvasAgg(figure)
    draw(figure.subplots())
    memory = io.BytesIO()
    with mpl.rc_context({"svg.fonttype": "none"}):
        figure.savefig(memory, format="svg")
    data = base64.b64encode(memory.getvalue()).decode()
    source = f"data:image/svg+xml;base64,{data}"
    return f'<img alt="{escape(words, quote=True)}" style="max-width:100%" src="{source}">'
