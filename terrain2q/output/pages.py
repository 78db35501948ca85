"""What is made from an output folder: what a run writes last, and what `terrain2q report` makes anew."""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from terrain2q.output.folder import read_folder
from terrain2q.output.run_record import note_pages

FLAGGED, NONE = "flagged", "none"


def write_pages(folder: str | os.PathLike, asked: Mapping[str, Any] | None = None) -> list[Path]:
    """Write the pages and tables of an output folder from its layers and its record.

    Parameters
    ----------
    folder : path
        An output folder with ``results.gpkg``.
    asked : mapping, optional
        The keys of [output] that say which; where absent, the report, and the sheets that the folder's
        own run asked for (those that are flagged where it asked for none).

    Returns
    -------
    list of pathlib.Path
        The files written.

    Raises
    ------
    InputError
        The folder has no results that can be read.
    OutputError
        A file cannot be written.
    """
    if asked is not None and not asked.get("report", True) and not {
        asked.get("sheets", FLAGGED), asked.get("tables", NONE)
    } - {NONE}:  # fmt: skip
        return []  # nothing to read the layers for
    # the page and the sheets load much, which runs without them need not
    from terrain2q.output.report import write_report
    from terrain2q.output.sheets import write_sheets
    from terrain2q.output.tables import write_tables

    source = read_folder(folder)
    if asked is None:
        sheets = source.settings.get("output", {}).get("sheets", NONE)
        asked = {"report": True, "sheets": FLAGGED if sheets == NONE else sheets}
    written = []
    if asked.get("report", True):
        written.append(write_report(source))
    if (sheets := asked.get("sheets", FLAGGED)) != NONE:
        written.append(write_sheets(source, sheets))
    if (tables := asked.get("tables", NONE)) != NONE:
        written += write_tables(source, tables)
    note_pages(Path(folder), written)
    return written
