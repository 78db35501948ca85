"""How the numbers of a crossing are worked out, written on its calculation sheet step by step.

The stage at the road comes from the approach section, which the sheet has in full; here stand the probability
at the crest, the water over the road, the required opening and the tailwater.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from statistics import NormalDist

import numpy as np

from terrain2q.hydraulics.divided import composite_n
from terrain2q.output.calculation import Stretch
from terrain2q.output.looks import WATERS
from terrain2q.output.sheet_drawings import Water, draw_section, stroke
from terrain2q.output.sheet_layout import Sheet, TableColumn, figures, fitted, roughness_text
from terrain2q.units import UnitSystem

_SIZE, _STEP, _AFTER = 7.2, 8, 4

_ONE_N = ("horton", "pavlovskii")


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
    zones : mapping of int to str
        Zone of each subarea of the approach section.
    composite : str
        The study's rule for several n in the channel.
    tones : mapping of str to (str, int)
        By event, the colour of its water and its place in order.
    """

    rows: Sequence[Mapping]
    steps: Mapping[str, Mapping]
    parts: Mapping[str, Sequence[Mapping]]
    stations: np.ndarray
    road: np.ndarray
    approach: Mapping[str, float]
    tailwater: Mapping[str, float]
    zones: Mapping[int, str]
    composite: str = "divide"
    tones: Mapping[str, tuple[str, int]] = field(default_factory=dict)


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


def wet_stretches(stations: np.ndarray, road: np.ndarray, stage: float) -> list[Stretch]:
    """Return the stretches of a road that lie under water."""
    found: list[list[float]] = []
    for i, length, low, *_ in wet_pieces(stations, road, stage):
        i = int(i)
        start, end = stations[i], stations[i + 1]
        if low == 0.0:  # one end is dry, or just awash
            start, end = (start, start + length) if road[i] < road[i + 1] else (end - length, end)
        if found and abs(found[-1][1] - start) <= 1e-9 * max(1.0, abs(start)):
            found[-1][1] = end
        else:
            found.append([start, end])
    return [Stretch(float(start), float(end), stage) for start, end in found]


def _weir(known: CrossingSteps) -> list[Mapping]:
    """Return the rows of the events whose water is over the road."""
    return [r for r in known.rows if math.isfinite(r["weir_discharge"]) and r["weir_discharge"] > 0]


def write_road(sheet: Sheet, known: CrossingSteps, units: UnitSystem) -> None:
    """Write the water over the road: a picture, the road point by point, and the flow piece by piece."""
    length, flow = units.symbol("length"), units.symbol("flow")
    wet = _weir(known)
    if not known.stations.size:
        return
    if not wet:
        sheet.title("Water over the road", keep=12)
        sheet.lines("None: no event is over the crest; width, depth and flow on the road are 0.", _SIZE)
        sheet.space(_AFTER)
        return
    sheet.title("Water over the road", keep=210)
    _road_picture(sheet, known, wet, length)
    coefficient = known.steps[wet[0]["event"]]["weir_coefficient"]
    sheet.lines(
        "Depth on the road H = stage at the road − road. Between two points of the road that are L apart, "
        "with depths a < b, the mean of H^1.5 is 2/5 · (b^2.5 − a^2.5)/(b − a), or H^1.5 where a = b, and "
        f"the piece carries q = C · L · mean, C = {coefficient:.3f} {units.symbol('weir_coefficient')}. "
        "Where one end is dry, a is taken as 0 and L as the wet part, L · b/(b − a) with the a below 0. The "
        "level is one along the road, and is that of the whole event: neither what an opening carries off "
        "nor the velocity of approach nor the tailwater is reckoned with, and nothing is iterated. The road "
        "may lie below the crest where water has higher ground to pass on its way there.",
        _SIZE,
    )
    flows_of = []
    for row in wet:
        stage = float(row["stage"])
        pieces = wet_pieces(known.stations, known.road, stage)
        flows = coefficient * pieces[:, 1] * pieces[:, 4]
        flows_of.append({int(i): q for i, q in zip(pieces[:, 0], flows, strict=True)})
        most = int(np.argmax(flows))
        i, run, low, high, mean = pieces[most]
        a, b = known.stations[int(i)], known.stations[int(i) + 1]
        deepest = float(np.nanmin(known.road))
        sheet.lines(
            _signed(
                f"{row['event']}: stage {stage:.3f}; {len(pieces)} pieces under water, width Σ L = "
                f"{pieces[:, 1].sum():.2f} {length}; greatest depth {stage:.3f} − {deepest:.3f} = "
                f"{stage - deepest:.3f} {length}; flow Σ q = {figures(float(flows.sum()))} {flow}. The piece "
                f"with most, from {a:.2f} to {b:.2f}: a = {low:.3f}, b = {high:.3f}, L = {run:.3f}, mean = "
                f"{figures(float(mean))}, q = {coefficient:.3f} × {run:.3f} × {figures(float(mean))} = "
                f"{figures(float(flows[most]))} {flow}."
            ),
            _SIZE,
            indent=_STEP,
            hang=_STEP,
        )
    highest = max(float(row["stage"]) for row in wet)
    under = known.road < highest
    beside = under.copy()
    beside[1:] |= under[:-1]
    beside[:-1] |= under[1:]
    sheet.lines(
        f"The road where it lies below {highest:.3f}, and the next point to each side. Each q is that of the "
        "piece from its point to the next one down; – where all of it is dry.",
        _SIZE,
    )
    sheet.space(_AFTER)
    columns = [TableColumn("station", length, 34), TableColumn("road", length, 34)]
    columns += [TableColumn(fitted(f"q {r['event']}", 48, 6.4, "bold"), flow, 40) for r in wet]
    rows = [
        [
            _signed(f"{known.stations[i]:.2f}"),
            f"{known.road[i]:.3f}".replace("-", "−").replace("nan", "–"),
            *(figures(float(flows.get(int(i), math.nan))) for flows in flows_of),
        ]
        for i in np.flatnonzero(beside)
    ]
    sheet.beside(columns, rows, size=6.4)


def _road_picture(sheet: Sheet, known: CrossingSteps, wet: Sequence[Mapping], unit: str) -> None:
    there = np.isfinite(known.road)
    x, z = known.stations[there], known.road[there]
    profile = np.column_stack([x, np.zeros_like(x), z, x])
    waters = []
    for row in sorted(wet, key=lambda r: r["stage"]):
        tone, order = known.tones.get(row["event"], (WATERS[2], 0))
        stage = float(row["stage"])
        waters.append(Water(row["event"], stage, tuple(wet_stretches(x, z, stage)), 0.0, tone, stroke(order)))
    marks = {"crest": float(wet[0]["crest"])}
    label = f"Along the road from the stream [{unit}], positive to the right looking downstream"
    used = draw_section(
        sheet.page, sheet.left, sheet.y, sheet.width, 135.0, profile, (), waters, unit, marks, label
    )  # fmt: skip
    sheet.space(used + 2)


def write_opening(sheet: Sheet, known: CrossingSteps, units: UnitSystem) -> None:
    """Write the required opening: its walls, and what stands between them by subarea."""
    length, area, flow = (units.symbol(q) for q in ("length", "area", "flow"))
    asked = [r for r in known.rows if r["event"] in known.steps]
    if not asked:
        return
    answered = [r for r in asked if known.parts.get(r["event"])]
    row = asked[0]
    step = known.steps[row["event"]]
    fall = row["slope"] * row["approach_distance"]
    wanted = row["crest"] + fall - step["allowed_stage"]
    sheet.title("Required opening", keep=90 if answered else 40)
    sheet.lines(
        _signed(
            "Allowed stage at the approach section = crest − freeboard wanted + fall = "
            f"{row['crest']:.3f} − {wanted:.3f} + {fall:.3f} = {step['allowed_stage']:.3f} {length}."
        ),
        _SIZE,
    )
    for row in asked:
        step = known.steps[row["event"]]
        if row not in answered and math.isfinite(step["opening_most"]):
            sheet.lines(
                f"{row['event']}: no opening passes {figures(float(row['discharge']))} {flow} at this stage; "
                f"the most that one passes is {figures(float(step['opening_most']))}.",
                _SIZE,
                indent=_STEP,
            )
    if not answered:
        sheet.space(_AFTER)
        return
    middle = 0.5 * (
        known.steps[answered[0]["event"]]["opening_start"] + known.steps[answered[0]["event"]]["opening_end"]
    )
    sheet.lines(
        f"Two upright walls stand alike about the middle of the channel, station {middle:.2f}, until one is "
        "at the section’s end; each is wetted up to the allowed stage and counts as perimeter of the subarea "
        "it stands in. A and P are of the section between them. Widths are looked through from the "
        "narrowest: between points of the ground and limits of subareas K follows one formula, in which the "
        "least width is solved for that gives Σ K √S no less than the flow. In the last column stands what "
        "passes with a thousandth less width.",
        _SIZE,
    )
    sheet.space(_AFTER)
    columns = [
        TableColumn("event", "", 52, words=True),
        TableColumn("walls at", length, 82),
        TableColumn("width", length, 42),
        TableColumn("subarea", "", 38),
        TableColumn("n", "", 36),
        TableColumn("A", area, 48),
        TableColumn("P", length, 46),
        TableColumn("K", flow, 52),
        TableColumn("K √S", flow, 48),
        TableColumn("Σ K √S", flow, 48),
        TableColumn("narrower", flow, 48),
    ]
    rows = []
    for row in answered:
        step, parts = known.steps[row["event"]], known.parts[row["event"]]
        shared = _sharing(known, parts)
        total = math.fsum(float(p["discharge"]) for p in parts)
        for number, part in enumerate(parts):
            first = not number
            walls = _signed(f"{step['opening_start']:.2f} – {step['opening_end']:.2f}")
            rows.append(
                [
                    row["event"] if first else "",
                    walls if first else "",
                    f"{row['required_opening']:.2f}" if first else "",
                    str(int(part["subarea"])),
                    roughness_text(part["n"]) + ("†" if part in shared else ""),
                    *(
                        figures(float(part[n]), 5)
                        for n in ("flow_area", "wetted_perimeter", "conveyance", "discharge")
                    ),
                    figures(total, 5) if first else "",
                    figures(float(step["opening_narrower"]), 5) if first else "",
                ]
            )
    sheet.table(columns, rows)
    for row in answered:
        parts, step = known.parts[row["event"]], known.steps[row["event"]]
        shared = _sharing(known, parts)
        if shared:
            n, a, p, k = (np.array([float(q[c]) for q in shared]) for c in
                          ("n", "flow_area", "wetted_perimeter", "conveyance"))  # fmt: skip
            one = float(composite_n(p, a, n, known.composite))
            numbers = ", ".join(str(int(q["subarea"])) for q in shared)
            sheet.lines(
                f"† {row['event']}: subareas {numbers} under one composite n ({known.composite}): n = "
                f"{figures(one)}, A = {figures(float(a.sum()), 5)}, P = {figures(float(p.sum()), 5)}, K = "
                f"{figures(float(k.sum()), 5)}; each carries its share by area.",
                6.8,
                hang=10,
            )
        total = math.fsum(float(q["discharge"]) for q in parts)
        if total > 1.002 * row["discharge"]:
            sheet.lines(
                f"{row['event']}: more than the {figures(float(row['discharge']))} {flow} of the event, as "
                "the walls stand at limits of subareas: a hair further in they are perimeter of the subarea "
                "between them and lessen its K, a hair further out they are not. So a thousandth less width "
                f"passes {figures(float(step['opening_narrower']), 5)} {flow}, this one {figures(total, 5)}.",
                _SIZE,
                indent=_STEP,
                hang=_STEP,
            )
    shares = []
    for row in answered:
        there = known.steps[row["event"]]["opening_width"]
        if math.isfinite(there):
            wide = row["required_opening"]
            shares.append(f"{row['event']} {there:.2f} / {wide:.2f} = {row['opening_share']:.3f}")
    if shares:
        sheet.lines("Existing opening / required opening: " + "; ".join(shares) + ".", _SIZE)
    sheet.space(_AFTER)


def _sharing(known: CrossingSteps, parts: Sequence[Mapping]) -> list[Mapping]:
    """Return the parts of an opening that act under one composite n."""
    if known.composite not in _ONE_N:
        return []
    found = [p for p in parts if known.zones.get(int(p["subarea"])) == "channel"]
    return found if len(found) > 1 else []


def write_tailwater(sheet: Sheet, known: CrossingSteps, units: UnitSystem) -> bool:
    """Write how the stage below the road is carried up to it; return whether there is a tailwater section."""
    length = units.symbol("length")
    lines = []
    for row in known.rows:
        below, step = known.tailwater.get(row["event"]), known.steps.get(row["event"])
        if below is None or step is None or not math.isfinite(row["tailwater_stage"]):
            continue
        rise = row["slope"] * step["tailwater_distance"]
        there, crest = float(row["tailwater_stage"]), float(row["crest"])
        lines.append(
            f"{row['event']}: {below:.3f} + {rise:.3f} = {there:.3f} {length}, {abs(there - crest):.3f} "
            + ("above the crest" if there > crest else "below the crest")
            + ("; the flow over the road is an upper bound" if there > crest and row in _weir(known) else "")
        )
    if not lines:
        return False
    slope, distance = known.rows[0]["slope"], next(iter(known.steps.values()))["tailwater_distance"]
    sheet.title("Tailwater at the road", keep=60)
    sheet.lines(
        f"Stage at the tailwater section + S × distance to the road’s downstream edge, {figures(slope, 4)} × "
        f"{distance:.1f} = {slope * distance:.3f} {length}. It tells whether the water below the road stands "
        "above the crest too; no other number depends on it.",
        _SIZE,
    )
    for text in lines:
        sheet.lines(_signed(text), _SIZE, indent=_STEP, hang=_STEP)
    sheet.space(_AFTER)
    return True


def write_probability(sheet: Sheet, known: CrossingSteps, units: UnitSystem) -> None:
    """Write how the probability of the discharge at the crest is found between two events."""
    row, flow = known.rows[0], units.symbol("flow")
    at_crest = float(row["crest_discharge"])
    events = sorted(
        (
            (float(s["discharge"]), float(s["event_probability"]), event)
            for event, s in known.steps.items()
            if math.isfinite(s["event_probability"])
        )
    )
    if not events:
        return
    sheet.title("Probability of the discharge at the crest", keep=40)
    if not math.isfinite(row.get("probability", math.nan)):
        low, high = events[0][0], events[-1][0]
        if low <= at_crest <= high:
            text = "None: the events do not grow less likely step by step with more discharge."
        else:
            text = (
                f"None: {figures(at_crest)} lies beyond the events, {figures(low)} to {figures(high)} "
                f"{flow}; nothing is extrapolated."
            )
        sheet.lines(text, _SIZE)
        sheet.space(_AFTER)
        return
    normal = NormalDist()
    (q1, p1, one), (q2, p2, other) = next((a, b) for a, b in pairwise(events) if a[0] <= at_crest <= b[0])
    z1, z2 = -normal.inv_cdf(p1), -normal.inv_cdf(p2)
    share = math.log(at_crest / q1) / math.log(q2 / q1)
    z = z1 + share * (z2 - z1)
    sheet.lines(
        _signed(
            f"Between {one} ({figures(q1)} {flow}, {p1:g}) and {other} ({figures(q2)} {flow}, {p2:g}) the "
            "logarithm of discharge goes straight with z, the standard normal variate that is exceeded with "
            f"the probability: share = ln({figures(at_crest, 5)}/{figures(q1)}) / "
            f"ln({figures(q2)}/{figures(q1)}) = {share:.4f}; "
            f"z = {z1:.4f} + {share:.4f} · ({z2:.4f} − {z1:.4f}) = {z:.4f}; probability "
            f"{normal.cdf(-z):.4f} in any year."
        ),
        _SIZE,
    )
    sheet.space(_AFTER)
