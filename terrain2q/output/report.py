"""The report page: one HTML file that opens from disk with no network.

What it shows is worked out by :mod:`terrain2q.output.report_data`; here it is put into the template of
``page/`` with its style and its script, all within the one file.
"""

from __future__ import annotations

import html
import json
import os
from functools import lru_cache
from pathlib import Path
from typing import Any

import jinja2
from markupsafe import Markup

from terrain2q.output.folder import OutputFolder, read_folder
from terrain2q.output.report_data import report_data
from terrain2q.output.whole_file import not_writable, whole_file

REPORT_NAME = "report.html"

_PAGE = Path(__file__).with_name("page")


def write_report(source: OutputFolder | str | os.PathLike, path: str | os.PathLike | None = None) -> Path:
    """Write the report page of an output folder, whole or not at all.

    Parameters
    ----------
    source : OutputFolder or path
        The folder, or what was read from it.
    path : path, optional
        ``report.html`` in the folder where absent.

    Returns
    -------
    pathlib.Path
        The file written.

    Raises
    ------
    InputError
        The folder has no results (codes ``file-missing``, ``file-unreadable``).
    OutputError
        The file cannot be written (code ``output-not-writable``).
    """
    if not isinstance(source, OutputFolder):
        source = read_folder(source)
    if path is None:
        if source.folder is None:
            raise ValueError("results that are in no folder need a path")
        path = source.folder / REPORT_NAME
    path, text = Path(path), report_html(source)
    with whole_file(path) as temporary:
        try:
            temporary.write_text(text, encoding="utf-8", newline="\n")
        except OSError as error:
            raise not_writable(path, error) from error
    return path


def report_html(source: OutputFolder, *, whole: bool = True) -> str:
    """Return the report page as text.

    Parameters
    ----------
    source : OutputFolder
    whole : bool
        False gives the map, the section and its rating alone.
    """
    data = report_data(source)
    return _template().render(
        page=data["page"],
        whole=whole,
        css=_part("report.css"),
        script=_part("report.js"),
        embedded=_script_safe(data["embedded"]),
    )


class Explorer:
    """The map of the report, for a notebook: shows itself where it is the last thing in a cell.

    Parameters
    ----------
    source : OutputFolder
    height : int
        Of its place in the notebook, in pixels.
    """

    def __init__(self, source: OutputFolder, height: int = 760) -> None:
        self._source, self.height = source, height

    def __repr__(self) -> str:
        return f"<Explorer of {self._source.name or 'a study'}: show it in a notebook, or save(path)>"

    def html(self) -> str:
        """Return the page as text."""
        return report_html(self._source, whole=False)

    def save(self, path: str | os.PathLike) -> Path:
        """Write the page into a file of its own."""
        path = Path(path)
        with whole_file(path) as temporary:
            temporary.write_text(self.html(), encoding="utf-8", newline="\n")
        return path

    def _repr_html_(self) -> str:
        # a page of its own within the notebook, which its style and script cannot touch
        return (
            f'<iframe title="Map of the sections" srcdoc="{html.escape(self.html(), quote=True)}" '
            f'sandbox="allow-scripts" style="width:100%;height:{self.height}px;border:1px solid #d8cfc2">'
            "</iframe>"
        )


@lru_cache
def _template() -> jinja2.Template:
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(_PAGE),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    return environment.get_template("report.html.jinja")


def _part(name: str) -> Markup:
    return Markup((_PAGE / name).read_text(encoding="utf-8"))


def _script_safe(value: Any) -> Markup:
    """Return JSON that no text in it can end the script it stands in."""
    text = json.dumps(value, ensure_ascii=False, allow_nan=False, separators=(",", ":"))
    return Markup(text.replace("<", "\\u003c"))
