"""How the numbers of a crossing are worked out, written on its calculation sheet step by step.

The stage at the road comes from the approach section, which the sheet has in full; here stand the water over
the road, the required opening, the tailwater and the probability at the crest.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from statistics import NormalDist

import numpy as np

from terrain2q.output.sheet_layout import Sheet, TableColumn, figures, roughness_text
from terrain2q.units import UnitSystem

_PAIRS = 6
"""Points of the road in a line of the list."""

_SIZE, _STEP = 7.2, 8


@dataclass(frozen=True)
class CrossingSteps:
    """What is known of a crossing beside its row in the results, in the study's units.

    Attributes
    ----------
    rows : sequence of mapping
        Its rows of ``crossings``, one an event.
    steps : mapping of str to mapping
        By event, its rows of ``crossing_steps``.
    parts : mapping of str to sequence of mapping
        By event, its rows of ``opening_parts``.
    stations, road : ndarray, shape (n,)
        The road's profile.
    approach, tailwater : mapping of str to float
        By event, the stage of the two sections.
    """

    rows: Sequence[Mapping]
    steps: Mapping[str, Mapping]
    parts: Mapping[str, Sequence[Mapping]]
    stations: np.ndarray
    road: np.ndarray
    approach: Mapping[str, float]
    tailwater: Mapping[str, float]


def write_steps(sheet: Sheet, known: CrossingSteps, units: UnitSystem) -> None:
    """Write the steps of a crossing.

    Parameters
    ----------
    sheet : Sheet
    known : CrossingSteps
    units : UnitSystem
    """
    _over_the_road(sheet, known, units)
    _opening(sheet, known, units)
    _tailwater(sheet, known, units)
    _probability(sheet, known, units)


def wet_pieces(stations: np.ndarray, road: np.ndarray, stage: float) -> np.ndarray:
    """Return the pieces of a road under water, shape (n, 5): number, wet length, both heads, mean of H^1.5.

    The number is that of the piece's first point. Where one end is dry its head is 0, and the wet length is
    the part of the piece below the level.
    """
    head = stage - road
    found = []
    for i in range(len(road) - 1):
        one, other = head[i], head[i + 1]
        if not (np.isfinite(one) and np.isfinite(other)) or max(one, other) <= 0:
            continue
        length = stations[i + 1] - stations[i]
        low, high = sorted((one, other))
        if low < 0:
            length, low = length * high / (high - low), 0.0
        rise = high - low
        mean = 0.4 * (high**2.5 - low**2.5) / rise if rise > 1e-6 * high else (0.5 * (high + low)) ** 1.5
        found.append((i, length, low, high, mean))
    return np.array(found).reshape(-1, 5)


def _signed(text: str) -> str:
    """Return a text with the minus sign before numbers below zero; a hyphen in a name stays."""
    return re.sub(r"(?<![^\s(])-(?=\d)", "−", text)


def _over_the_road(sheet: Sheet, known: CrossingSteps, units: UnitSystem) -> None:
    length, flow = units.symbol("length"), units.symbol("flow")
    wet = [r for r in known.rows if math.isfinite(r["weir_discharge"]) and r["weir_discharge"] > 0]
    if not wet or not known.stations.size:
        return
    sheet.title("Water over the road", keep=70)
    coefficient = known.steps[wet[0]["event"]]["weir_coefficient"]
    sheet.lines(
        "H = stage at the road − road. Between two points of the road with heads a < b the mean of H^1.5 is "
        "2/5 · (b^2.5 − a^2.5)/(b − a), and q = C · L · mean. Where one end is dry, a = 0 and L is the wet "
        f"part of the piece. C = {coefficient:.3f} {units.symbol('weir_coefficient')}. The whole flow of the "
        "event stands against the road in this; what an opening carries off is not taken away. The road may "
        "lie below the crest where the ground on the way to it is higher.",
        _SIZE,
    )
    highest = -math.inf
    for row in wet:
        stage = float(row["stage"])
        highest = max(highest, stage)
        pieces = wet_pieces(known.stations, known.road, stage)
        flows = coefficient * pieces[:, 1] * pieces[:, 4]
        most = int(np.argmax(flows))
        i, run, low, high, mean = pieces[most]
        i = int(i)
        a, b = known.stations[i], known.stations[i + 1]
        deepest = float(np.nanmin(known.road))
        sheet.lines(
            _signed(
                f"{row['event']}: stage {stage:.3f}; {len(pieces)} pieces under water, Σ L = "
                f"{pieces[:, 1].sum():.2f} {length}; greatest depth {stage:.3f} − {deepest:.3f} = "
                f"{stage - deepest:.3f} {length}; Σ q = {figures(float(flows.sum()))} {flow}. The piece with "
                f"most, from {a:.2f} to {b:.2f}: a = {low:.3f}, b = {high:.3f}, L = {run:.3f}, mean = "
                f"{figures(float(mean))}, q = {figures(float(flows[most]))} {flow}."
            ),
            _SIZE,
            indent=_STEP,
            hang=_STEP,
        )
    under = known.road < highest
    beside = under.copy()
    beside[1:] |= under[:-1]
    beside[:-1] |= under[1:]
    places = np.flatnonzero(beside)
    sheet.lines(
        f"The road where it lies below {highest:.3f}, and the next point to each side: station, elevation "
        f"[{length}]; a semicolon ends a stretch.",
        _SIZE,
    )
    texts = [
        _signed(f"{known.stations[i]:.2f} {known.road[i]:.3f}")
        + (";" if i + 1 < beside.size and not beside[i + 1] and i != places[-1] else "")
        for i in places
    ]
    columns = [TableColumn("station road", "", 10, words=True) for _ in range(_PAIRS)]
    rows = [texts[i : i + _PAIRS] for i in range(0, len(texts), _PAIRS)]
    sheet.table(columns, [row + [""] * (_PAIRS - len(row)) for row in rows], size=6.4)


def _opening(sheet: Sheet, known: CrossingSteps, units: UnitSystem) -> None:
    length, area, flow = (units.symbol(q) for q in ("length", "area", "flow"))
    answered = [r for r in known.rows if known.parts.get(r["event"])]
    if not answered:
        return
    row = answered[0]
    step = known.steps[row["event"]]
    fall = row["slope"] * row["approach_distance"]
    wanted = row["crest"] + fall - step["allowed_stage"]
    sheet.title("Required opening", keep=90)
    sheet.lines(
        _signed(
            "Allowed stage at the approach section = crest − freeboard wanted + fall = "
            f"{row['crest']:.3f} − {wanted:.3f} + {fall:.3f} = {step['allowed_stage']:.3f} {length}. Two "
            "upright walls stand alike about the middle of the channel and are wetted up to this stage, each "
            "in the subarea it stands in; A and P are those of the section between them. The width is the "
            "least for which Σ K √S is no less than the flow; the sum is more than the flow only where a "
            "wall stands at a limit of subareas, at which K jumps."
        ),
        _SIZE,
    )
    columns = [
        TableColumn("event", "", 55, words=True),
        TableColumn("walls at", length, 85),
        TableColumn("width", length, 45),
        TableColumn("subarea", "", 40),
        TableColumn("n", "", 35),
        TableColumn("A", area, 50),
        TableColumn("P", length, 45),
        TableColumn("K", flow, 60),
        TableColumn("K √S", flow, 50),
    ]
    rows = []
    for row in answered:
        step = known.steps[row["event"]]
        for number, part in enumerate(known.parts[row["event"]]):
            walls = f"{step['opening_start']:.2f} – {step['opening_end']:.2f}"
            rows.append(
                [
                    row["event"] if not number else "",
                    walls if not number else "",
                    f"{row['required_opening']:.2f}" if not number else "",
                    str(int(part["subarea"])),
                    roughness_text(part["n"]),
                    *(
                        figures(float(part[n]), 5)
                        for n in ("flow_area", "wetted_perimeter", "conveyance", "discharge")
                    ),
                ]
            )
    sheet.table(columns, rows)
    shares = []
    for row in answered:
        there = known.steps[row["event"]]["opening_width"]
        if math.isfinite(there):
            wide = row["required_opening"]
            shares.append(f"{row['event']} {there:.2f} / {wide:.2f} = {row['opening_share']:.3f}")
    if shares:
        sheet.lines("Existing opening / required opening: " + "; ".join(shares) + ".", _SIZE)


def _tailwater(sheet: Sheet, known: CrossingSteps, units: UnitSystem) -> None:
    length = units.symbol("length")
    lines = []
    for row in known.rows:
        below, step = known.tailwater.get(row["event"]), known.steps.get(row["event"])
        if below is None or step is None or not math.isfinite(row["tailwater_stage"]):
            continue
        rise = row["slope"] * step["tailwater_distance"]
        lines.append(f"{row['event']} {below:.3f} + {rise:.3f} = {row['tailwater_stage']:.3f} {length}")
    if lines:
        distance = next(iter(known.steps.values()))["tailwater_distance"]
        sheet.title("Tailwater at the road", keep=40)
        sheet.lines(
            _signed(
                f"Stage of the section below the road + S × distance, {distance:.1f} {length}: "
                + "; ".join(lines)
                + ". It tells whether the water below stands above the crest too; nothing else depends on it."
            ),
            _SIZE,
        )


def _probability(sheet: Sheet, known: CrossingSteps, units: UnitSystem) -> None:
    row = known.rows[0]
    at_crest = float(row["crest_discharge"])
    if not math.isfinite(row.get("probability", math.nan)):
        return
    events = sorted(
        (
            (float(s["discharge"]), float(s["event_probability"]), event)
            for event, s in known.steps.items()
            if math.isfinite(s["event_probability"])
        )
    )
    normal = NormalDist()
    about = [(a, b) for a, b in pairwise(events) if a[0] <= at_crest <= b[0] and b[0] > a[0]]
    if not about:
        return
    (q1, p1, one), (q2, p2, other) = about[0]
    z1, z2 = -normal.inv_cdf(p1), -normal.inv_cdf(p2)
    share = math.log(at_crest / q1) / math.log(q2 / q1)
    z = z1 + share * (z2 - z1)
    flow = units.symbol("flow")
    sheet.title("Probability of the discharge at the crest", keep=40)
    sheet.lines(
        _signed(
            f"Between {one} ({figures(q1)} {flow}, {p1:g}) and {other} ({figures(q2)} {flow}, {p2:g}) the "
            "logarithm of discharge goes straight with the normal variate z of the probability: "
            f"share = ln({figures(at_crest, 5)}/{figures(q1)}) / ln({figures(q2)}/{figures(q1)}) = "
            f"{share:.4f}; "
            f"z = {z1:.4f} + {share:.4f} · ({z2:.4f} − {z1:.4f}) = {z:.4f}; probability "
            f"{normal.cdf(-z):.4f} a year."
        ),
        _SIZE,
    )
