"""The built-in tables of Manning's n, as CSV text that a study can name or a user can start from.

Each has the columns of a land-cover table (``class,n,n_low,n_high``), a description, and a source on
every row.
"""

from __future__ import annotations

import csv
import difflib
from pathlib import Path
from types import MappingProxyType

from terrain2q.errors import InputError

_ABOUT = MappingProxyType({
    "chow1959": "Chow (1959), Table 5-6: natural channels, flood plains, excavated channels",
    "nlcd-flood-depth": "NLCD codes, mapped by us from Chow (1959) for water at flood depth",
    "worldcover-flood-depth": "ESA WorldCover codes, mapped by us from Chow (1959) for water at flood depth",
    "kalyanapu2009": "NLCD codes, Kalyanapu et al. (2009): shallow overland flow, too rough for flood depth",
})  # fmt: skip


def table_names() -> list[str]:
    """Return the names of the built-in tables.

    Examples
    --------
    >>> "chow1959" in table_names()
    True
    """
    return list(_ABOUT)


def describe(name: str) -> str:
    """Return what a built-in table holds, in one line.

    Raises
    ------
    InputError
        ``table-unknown``.
    """
    return _ABOUT[_known(name)]


def table_path(name: str) -> Path:
    """Return the CSV file of a built-in table.

    Raises
    ------
    InputError
        ``table-unknown``, with the nearest name.
    """
    return Path(__file__).parent / "tables" / f"{_known(name)}.csv"


def table_text(name: str) -> str:
    """Return a built-in table as CSV text with a header.

    Raises
    ------
    InputError
        ``table-unknown``, with the nearest name.

    Examples
    --------
    >>> table_text("chow1959").splitlines()[0]
    'class,n,n_low,n_high,description,source'
    """
    return table_path(name).read_text(encoding="utf-8")


def table_rows(name: str) -> list[dict[str, str | float | None]]:
    """Return the rows of a built-in table: numbers as numbers, None where nothing stands.

    Raises
    ------
    InputError
        ``table-unknown``, with the nearest name.
    """
    numbers = ("n", "n_low", "n_high")
    return [
        {key: (float(value) if value else None) if key in numbers else value for key, value in row.items()}
        for row in csv.DictReader(table_text(name).splitlines())
    ]


def _known(name: str) -> str:
    if name in _ABOUT:
        return name
    near = difflib.get_close_matches(str(name).lower(), _ABOUT, n=1, cutoff=0.4)
    nearest = f"the nearest is {near[0]}; " if near else ""
    raise InputError(
        "table-unknown",
        f"there is no built-in table {name!r}",
        where="roughness tables",
        fix=f"{nearest}there are {', '.join(_ABOUT)}",
    )
