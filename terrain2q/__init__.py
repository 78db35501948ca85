"""How much water a stream carries, and how high it stands, from terrain.

Screening estimates; no substitute for a study by a licensed engineer. Local codes and the
floodplain authority decide.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from terrain2q.ground.terrain import Profile, Terrain
    from terrain2q.hydraulics.banks import Banks, find_banks
    from terrain2q.hydraulics.section import FlowPath, Section, Subarea
    from terrain2q.process import Results, run

__version__ = "0.1.0"

_HOME = {
    "Section": "terrain2q.hydraulics.section",
    "Subarea": "terrain2q.hydraulics.section",
    "FlowPath": "terrain2q.hydraulics.section",
    "Banks": "terrain2q.hydraulics.banks",
    "find_banks": "terrain2q.hydraulics.banks",
    "Terrain": "terrain2q.ground.terrain",
    "Profile": "terrain2q.ground.terrain",
    "Results": "terrain2q.process",
    "run": "terrain2q.process",
}

__all__ = [
    "Banks",
    "FlowPath",
    "Profile",
    "Results",
    "Section",
    "Subarea",
    "Terrain",
    "find_banks",
    "run",
]


def __getattr__(name: str):
    # Names are imported when first asked for, so that the command line answers at once.
    try:
        home = _HOME[name]
    except KeyError:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}") from None
    return getattr(importlib.import_module(home), name)


def __dir__() -> list[str]:
    return sorted([*globals(), *__all__])
