"""The colours and strokes of every picture, chosen so that a picture can be read in grey.

Water goes from pale to deep, so that the order of events can be told by lightness alone; what else
must be told apart also differs in its stroke, its hatching or its mark.
"""

from __future__ import annotations

INK = "#2b2622"
GROUND_EDGE = "#3d3127"
WALL = "#8c2d19"
# from pale to deep: the order can be told by lightness alone
WATERS = ("#cfe6e4", "#93c4cb", "#4f93ab", "#27617f", "#123a56")
WATER_LINES = ("-", (0, (6, 2)), (0, (2, 1.5)), (0, (7, 2, 1.5, 2)), (0, (1, 1)))
EARTHS = ("#e9dfcb", "#d9c9ac", "#c8b08c", "#b79a79", "#e3d3b8")
HATCHES = ("", "////", "....", "\\\\\\\\", "xxx", "----", "oo")

EXAGGERATIONS = (1, 1.5, 2, 2.5, 3, 4, 5, 6, 8, 10, 12, 15, 20, 25, 30, 40, 50, 60, 80, 100)
"""How many times the vertical scale of a section may be larger than the horizontal one."""


def water_tones(count: int) -> list[str]:
    """Return the tone of each of `count` events, from the lowest water to the highest.

    Examples
    --------
    >>> water_tones(3)
    ['#cfe6e4', '#4f93ab', '#123a56']
    """
    last = len(WATERS) - 1
    return [WATERS[round(i * last / max(count - 1, 1))] for i in range(count)]
