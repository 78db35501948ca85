"""The pages made from an output folder: what a run writes last, and what `terrain2q report` makes anew."""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from terrain2q.output.folder import read_folder
from terrain2q.output.report import write_report


def write_pages(folder: str | os.PathLike, asked: Mapping[str, Any] | None = None) -> list[Path]:
    """Write the pages of an output folder from its layers and its record.

    Parameters
    ----------
    folder : path
        An output folder with ``results.gpkg``.
    asked : mapping, optional
        The keys of [output] that say which pages; as the folder's own run asked, and the report in any
        case, where absent.

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
    source = read_folder(folder)
    if asked is None:
        asked = {**source.settings.get("output", {}), "report": True}
    written = []
    if asked.get("report", True):
        written.append(write_report(source))
    return written
