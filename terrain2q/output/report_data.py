"""What the report page shows, worked out from the layers: plain values, ready for JSON and for a template.

Numbers are rounded here, once, to the decimals they are shown with, so that the page shows what the
layers hold. Lines are thinned to what a screen can tell apart, and more so the more sections there are.
"""

from __future__ import annotations

import json
import math
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd
import shapely

from terrain2q.columns import CAUTION, COLUMNS
from terrain2q.errors import CATALOGUE, FAILED, SEVERITIES, worst_first
from terrain2q.output.folder import OutputFolder
from terrain2q.output.looks import EARTHS, EXAGGERATIONS, GROUND_EDGE, INK, WALL, WATERS, water_tones
from terrain2q.output.report_map import make_map

STAGE_COLUMNS = (
    "discharge", "stage", "stage_low", "stage_high", "depth", "critical_stage", "flow_area", "top_width",
    "hydraulic_radius", "mean_velocity", "froude", "alpha", "channel_share", "slope",
)  # fmt: skip
"""Columns of `design_stages` that a section's panel shows."""

SUBAREA_NUMBERS = (
    "stage", "flow_area", "wetted_perimeter", "conveyance", "mean_velocity", "discharge", "share",
)  # fmt: skip
"""Columns of `subarea_flows` that a section's panel shows."""

SECTION_TABLE = (
    "section_id", "stream", "stream_distance", "discharge", "stage", "depth", "mean_velocity", "froude",
    "status", "findings",
)  # fmt: skip

CROSSING_TABLE = (
    "rank", "crossing_id", "road", "stream", "verdict", "first_event_over", "discharge", "stage", "crest",
    "freeboard", "crest_discharge", "required_opening", "status",
)  # fmt: skip

_LEVELS = frozenset(
    {"stage", "stage_low", "stage_high", "depth", "critical_stage", "lowest_ground", "crest", "freeboard"}
)
_SECTION_LAYERS = frozenset(
    {"cut_lines", "sections", "subareas", "ratings", "design_stages", "subarea_flows", "required_widths",
     "flood_extent", "low_not_joined"}
)  # fmt: skip
_SHOWN_OF_A_CODE = 200


def report_data(source: OutputFolder) -> dict[str, Any]:
    """Return all that the page shows.

    Returns
    -------
    dict
        ``page`` is for the template; ``embedded`` goes into the page as JSON, for its script.
    """
    sections, streams_order = _sections(source)
    findings = _findings(source)
    drawn_map = make_map(source)
    return {
        "page": {
            "title": source.name or "terrain2q study",
            "caution": CAUTION,
            "asked": _asked(source),
            "came_out": _came_out(source),
            "worst": worst_first(findings)[:10],
            "findings": _by_code(findings),
            "finding_counts": _counts(findings),
            "inputs": _inputs(source),
            "roughness": _roughness(source),
            "facts": _facts(source),
            "versions": source.record.get("versions", {}),
            "settings": settings_text(source.settings),
            "notes": [*drawn_map.pop("notes"), *_notes(source)],
            "hillshade": drawn_map.pop("hillshade"),
            "map_summary": _map_summary(source, drawn_map),
            "has_crossings": bool(len(source.layers.get("crossings", ()))),
            "inks": {"ink": INK, "ground": GROUND_EDGE, "wall": WALL, "deep": WATERS[4], "water": WATERS[3]},
        },
        "embedded": {
            "units": {q: source.units.symbol(q) for q in ("length", "area", "flow", "velocity")},
            "events": [{"name": n, "tone": t} for n, t in zip(source.events, _tones(source), strict=True)],
            "fields": _fields(source, STAGE_COLUMNS, "design_stages"),
            "subarea_fields": _fields(source, SUBAREA_NUMBERS, "subarea_flows"),
            "map": drawn_map,
            "sections": sections,
            "streams": streams_order,
            "tables": {
                "sections": _columns(source, SECTION_TABLE, ("sections", "design_stages")),
                "crossings": _columns(source, CROSSING_TABLE, ("crossings",)),
            },
            "crossings": _crossings(source),
            "looks": {"earths": EARTHS, "exaggerations": EXAGGERATIONS, "waters": WATERS},
        },
    }


# --------------------------------------------------------------------------------------------------
# Numbers as they are shown


def decimals_for(name: str, values: Iterable[float], *, slivers: bool = False) -> int:
    """Return with how many decimals a column is shown: three figures of its least value, or fewer.

    Levels of water and ground have two, whatever their size. With `slivers`, the middle value counts
    and not the least: of a sliver of a subarea a reader needs no three figures.

    Examples
    --------
    >>> decimals_for("discharge", [24.5, 2600.0]), decimals_for("slope", [0.0023])
    (1, 5)
    """
    if name in _LEVELS:
        return 2
    column = COLUMNS.get(name)
    if column is not None and column.dtype is int:
        return 0
    if name in ("froude", "alpha", "beta", "channel_share", "share"):
        return 2
    if name == "n":
        return 3 if all(abs(v - round(v, 3)) < 1e-6 for v in values) else 4
    if name in ("start_station", "end_station", "stream_distance", "length", "top_width"):
        return 1
    sizes = np.abs(np.asarray(list(values), dtype=float))
    sizes = sizes[np.isfinite(sizes) & (sizes > 0)]
    if not sizes.size:
        return 0
    most = 6 if name == "slope" else 3
    least = np.median(sizes) if slivers else sizes.min()
    return int(np.clip(2 - math.floor(math.log10(least)), 0, most))


def _number(value: Any, decimals: int) -> float | int | None:
    if value is None or not math.isfinite(value):
        return None
    rounded = round(float(value), decimals)
    return int(rounded) if decimals == 0 else rounded


def shown(value: Any, decimals: int) -> str:
    """Return a number as the page shows it; a dash where there is none."""
    number = _number(value, decimals)
    return "–" if number is None else f"{number:.{decimals}f}"


def _fields(source: OutputFolder, names: Sequence[str], layer: str) -> list[dict]:
    table = source.layers.get(layer)
    if table is None:
        return []
    return [
        {
            "name": name,
            "title": COLUMNS[name].title,
            "unit": _unit(source, name),
            "decimals": decimals_for(name, table[name], slivers=layer == "subarea_flows"),
        }
        for name in names
        if name in table
    ]


def _unit(source: OutputFolder, name: str) -> str:
    unit = source.units.symbol(COLUMNS[name].quantity)
    return "" if unit == "1" else unit


def _columns(source: OutputFolder, names: Sequence[str], layers: Sequence[str]) -> list[dict]:
    columns = []
    for name in names:
        table = next((source.layers[n] for n in reversed(layers) if name in source.layers.get(n, ())), None)
        if table is not None:
            number = COLUMNS[name].dtype is not str
            unit = _unit(source, name)
            columns.append({
                "name": name,
                "title": COLUMNS[name].title + (f" [{unit}]" if unit else ""),
                "decimals": decimals_for(name, table[name]) if number else None,
            })  # fmt: skip
    return columns


# --------------------------------------------------------------------------------------------------
# Sections


def _sections(source: OutputFolder) -> tuple[list[dict], list[str]]:
    layers = source.layers
    events = source.events
    by_section = {name: _groups(layers.get(name)) for name in ("subareas", "ratings", "design_stages")}
    flows = _groups(layers.get("subarea_flows"))
    fields = _fields(source, STAGE_COLUMNS, "design_stages")
    parts = _fields(source, SUBAREA_NUMBERS, "subarea_flows")
    table = layers["sections"]
    distance_decimals = decimals_for("stream_distance", table["stream_distance"])
    slope_decimals = decimals_for("slope", table["slope"])
    roughness_decimals = decimals_for("n", layers["subareas"]["n"])
    thin = 0.4 * max(1.0, math.sqrt(len(table) / 50.0))
    out = []
    for row in table.to_dict("records"):
        name = row["section_id"]
        profile = _profile(row.get("geometry"))
        answers = {r["event"]: r for r in by_section["design_stages"].get(name, ())}
        section = {
            "id": name,
            "stream": row["stream"],
            "distance": _number(row["stream_distance"], distance_decimals),
            "lowest": _number(row["lowest_ground"], 2),
            "slope": shown(row["slope"], slope_decimals),
            "slope_source": row["slope_source"],
            "length": _number(row["length"], 1),
            "findings": int(row["findings"]),
            "status": _worst_status(answers.values()),
            "profile": _thinned(profile, thin),
            "subareas": _subareas(by_section["subareas"].get(name, ()), roughness_decimals),
            "rating": _rating(by_section["ratings"].get(name, ()), answers.values()),
            "events": [_answer(answers.get(event), fields, profile, row) for event in events],
        }
        mine: dict[str, list] = {}
        for part in flows.get(name, ()):
            numbers = [_number(part[f["name"]], f["decimals"]) for f in parts]
            mine.setdefault(part["event"], []).append([int(part["subarea"]), *numbers])
        for event, answer in zip(events, section["events"], strict=True):
            answer["parts"] = mine.get(event, [])
        out.append(section)
    streams = [s for s in dict.fromkeys(table["stream"]) if s]
    return out, streams


def _groups(table: pd.DataFrame | None) -> dict[str, list[dict]]:
    grouped: dict[str, list[dict]] = {}
    if table is not None:
        for row in table.to_dict("records"):
            grouped.setdefault(row["section_id"], []).append(row)
    return grouped


def _worst_status(answers: Iterable[Mapping]) -> str:
    found = {a["status"] for a in answers}
    return next((s for s in ("failed", "doubtful", "ok") if s in found), "")


def _profile(geometry: Any) -> np.ndarray:
    """Return x, y, z, m of the points of a section that have an elevation, shape (n, 4)."""
    if geometry is None:
        return np.zeros((0, 4))
    points = shapely.get_coordinates(geometry, include_z=True, include_m=True)
    return points[np.isfinite(points[:, 2]) & np.isfinite(points[:, 3])]


def _thinned(profile: np.ndarray, tolerance: float) -> list[float]:
    """Return station and elevation in turn, without what a picture 640 by 200 points would not show."""
    if len(profile) < 2:
        return []
    station, z = profile[:, 3], profile[:, 2]
    across, up = 640.0 / max(np.ptp(station), 1e-9), 200.0 / max(np.ptp(z), 1e-9)
    line = shapely.LineString(np.column_stack([station * across, z * up])).simplify(
        tolerance, preserve_topology=False
    )
    kept = shapely.get_coordinates(line) / [across, up]
    kept[[0, -1]] = [[station[0], z[0]], [station[-1], z[-1]]]
    return np.round(kept, 2).ravel().tolist()


def _subareas(rows: Sequence[Mapping], decimals: int) -> list[list]:
    looks: dict[tuple, int] = {}
    out = []
    for row in rows:
        # the same look for the same ground, as in the pictures made for print
        look = looks.setdefault((row["land_class"], row["n"], row["zone"]), len(looks))
        out.append([
            _number(row["start_station"], 1), _number(row["end_station"], 1), row["zone"], row["land_class"],
            _number(row["n"], decimals), row["n_source"], look,
        ])  # fmt: skip
    return out


def _rating(rows: Sequence[Mapping], answers: Iterable[Mapping]) -> list[float]:
    """Return discharge and stage in turn, up to a little above what the events need."""
    if not rows:
        return []
    discharge = np.array([r["discharge"] for r in rows], dtype=float)
    stage = np.array([r["stage"] for r in rows], dtype=float)
    asked = [a["discharge"] for a in answers if np.isfinite(a["discharge"])]
    last = discharge.size
    if asked:
        last = min(int(np.searchsorted(discharge, 1.5 * max(asked))) + 1, last)
    pairs = zip(discharge[:last], stage[:last], strict=True)
    return [number for q, level in pairs for number in (float(f"{q:.4g}"), round(float(level), 2))]


def _answer(row: Mapping | None, fields: Sequence[Mapping], profile: np.ndarray, section: Mapping) -> dict:
    if row is None:
        return {"status": FAILED, "numbers": [None] * len(fields), "water": []}
    return {
        "status": row["status"],
        "numbers": [_number(row[f["name"]], f["decimals"]) for f in fields],
        "water": _water(row, profile, section["lowest_ground"]),
    }


def _water(row: Mapping, profile: np.ndarray, lowest: float) -> list[list[float]]:
    """Return start station, end station and stage of each stretch of water.

    The layer holds the wetted parts as lines and the channel's stage; behind a bank the water ends
    where it meets the ground, so that its stage is the ground's elevation there.
    """
    if row.get("geometry") is None or not len(profile) or not np.isfinite(row["stage"]):
        return []
    line = shapely.linestrings(profile[:, :2])
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(profile[:, :2], axis=0).T))])
    station, z = profile[:, 3], profile[:, 2]
    out = []
    for part in shapely.get_parts(row["geometry"]):
        points = shapely.get_coordinates(part)
        ends = shapely.line_locate_point(line, shapely.points(points[[0, -1]]))
        start, end = sorted(float(s) for s in np.interp(ends, along, station))
        stage = row["stage"]
        inside = z[(station >= start) & (station <= end)]
        holds_channel = inside.size and abs(inside.min() - lowest) < 1e-6 * max(1.0, abs(lowest))
        if not holds_channel:
            meets = [s for s in (start, end) if station[0] < s < station[-1]]
            if meets:
                stage = min(stage, float(np.interp(meets, station, z).max()))
        out.append([round(start, 2), round(end, 2), round(float(stage), 2)])
    return sorted(out)


def _flows(source: OutputFolder) -> pd.DataFrame:
    """Return event and discharge of each section and crossing, in the order of the study's events."""
    tables = [source.layers[name] for name in ("design_stages", "crossings") if name in source.layers]
    return pd.concat([table[["event", "discharge"]] for table in tables if len(table)])


def _tones(source: OutputFolder) -> list[str]:
    """Return the tone of each event: the more discharge, the deeper."""
    events = source.events
    if not events:
        return []
    flows = _flows(source)
    typical = {event: flows.loc[flows["event"] == event, "discharge"].median() for event in events}
    order = sorted(events, key=lambda e: (not np.isfinite(typical[e]), typical[e]))
    tones = dict(zip(order, water_tones(len(order)), strict=True))
    return [tones[event] for event in events]


# --------------------------------------------------------------------------------------------------
# Crossings


def _crossings(source: OutputFolder) -> list[dict]:
    """Return one entry a crossing, with the row of each event as it stands in the table."""
    table = source.layers.get("crossings")
    if table is None or not len(table):
        return []
    columns = _columns(source, CROSSING_TABLE, ("crossings",))
    events = source.events
    found: dict[str, dict] = {}
    for row in table.to_dict("records"):
        entry = found.setdefault(row["crossing_id"], {"id": row["crossing_id"], "rows": [None] * len(events)})
        if row["event"] in events:
            entry["rows"][events.index(row["event"])] = [
                row[c["name"]] if c["decimals"] is None else _number(row[c["name"]], c["decimals"])
                for c in columns
            ]
    return list(found.values())


# --------------------------------------------------------------------------------------------------
# Findings


class _FoundRow:
    """One row of the layer of findings."""

    def __init__(self, row: Mapping, sections: frozenset[str]) -> None:
        self.code, self.severity = row["code"], row["severity"]
        self.layer, self.feature_id = row["layer"], row["feature_id"]
        self.message, self.remedy = row["message"], row["remedy"]
        known = self.layer in _SECTION_LAYERS and self.feature_id in sections
        self.section = self.feature_id if known else ""
        self.place = " ".join(part for part in (self.layer, self.feature_id) if part)


def _findings(source: OutputFolder) -> list[_FoundRow]:
    table = source.layers.get("findings")
    if table is None:
        return []
    sections = frozenset(source.layers["sections"]["section_id"])
    return [_FoundRow(row, sections) for row in table.to_dict("records")]


def _counts(findings: Sequence[_FoundRow]) -> dict[str, int]:
    counted = Counter(f.severity for f in findings)
    return {severity: counted[severity] for severity in SEVERITIES}


def _by_code(findings: Sequence[_FoundRow]) -> list[dict]:
    """Return findings of each code and remedy together, the worst first."""
    groups: dict[tuple[int, str, str], list[_FoundRow]] = {}
    for finding in findings:
        key = (SEVERITIES.index(finding.severity), finding.code, finding.remedy)
        groups.setdefault(key, []).append(finding)
    return [
        {
            "code": code,
            "severity": SEVERITIES[severity],
            "title": CATALOGUE[code].title if code in CATALOGUE else code,
            "remedy": remedy,
            "count": len(group),
            "shown": group[:_SHOWN_OF_A_CODE],
            "left": max(len(group) - _SHOWN_OF_A_CODE, 0),
        }
        for (severity, code, remedy), group in sorted(groups.items(), key=lambda item: item[0])
    ]


# --------------------------------------------------------------------------------------------------
# The words around


def _asked(source: OutputFolder) -> list[str]:
    """Return in sentences what the study asks for."""
    layers = source.layers
    count = len(layers["sections"])
    unit = source.units.symbol("flow")
    what = "sections, ratings and stages by Manning’s equation, normal depth."
    lines = [f"{_count(count, 'cut line')}: {what}"]
    if not count and "crossings" in layers:
        lines = [f"No cut lines of its own; up- and downstream of each crossing {what}"]
    stages = layers.get("design_stages")
    if source.events:
        flows = _flows(source).groupby("event", sort=False)["discharge"].agg(["min", "max"])
        texts = []
        for event, low, high in flows.itertuples():
            if not np.isfinite(low):
                texts.append(f"{event} (no discharge)")
                continue
            decimals = decimals_for("discharge", [low])
            span = shown(low, decimals) + ("" if low == high else f" to {shown(high, decimals)}")
            texts.append(f"{event} ({span} {unit})")
        lines.append("Design flows: " + "; ".join(texts) + ".")
    else:
        lines.append("No design flows: ratings only.")
    more = [
        word
        for layer, word in (
            ("crossings", "road crossings judged"),
            ("flood_extent", "flood extent and depth mapped"),
            ("required_widths", "widths required of a bench"),
        )
        if layer in layers
    ]
    if stages is not None and "stage_low" in stages:
        more.append("uncertainty of the stages")
    if more:
        lines.append("Also asked for: " + ", ".join(more) + ".")
    return lines


def _count(number: int, word: str) -> str:
    return f"{number} {word}{'' if number == 1 else 's'}"


def _came_out(source: OutputFolder) -> list[str]:
    """Return in sentences what the study gives."""
    layers = source.layers
    stages = layers.get("design_stages")
    lines = []
    if stages is not None and len(stages):
        status = stages.groupby("section_id", sort=False)["status"].agg(set)
        counts = Counter(next(s for s in ("failed", "doubtful", "ok") if s in found) for found in status)
        lines.append(
            f"{counts['ok']} of {_count(len(status), 'section')} answered at every event without doubt, "
            f"{counts['doubtful']} doubtful at one event at least, {counts['failed']} without a full answer."
        )
        depths = stages.groupby("event", sort=False)["depth"].agg(["min", "max"])
        unit = source.units.symbol("length")
        texts = [
            f"{event} {shown(low, 1)} to {shown(high, 1)} {unit}"
            for event, low, high in depths.itertuples()
            if np.isfinite(low)
        ]
        if texts:
            lines.append("Depth above the lowest ground: " + "; ".join(texts) + ".")
    elif len(layers["sections"]) or "crossings" not in layers:
        lines.append(f"{layers['ratings']['section_id'].nunique()} sections with a rating.")
    extent = layers.get("flood_extent")
    if extent is not None and len(extent):
        unit = source.units.symbol("area")
        texts = [f"{r.event} {_large(r.area)} {unit}" for r in extent.itertuples() if np.isfinite(r.area)]
        lines.append("Area under water: " + "; ".join(texts) + ".")
    crossings = layers.get("crossings")
    if crossings is not None and len(crossings):
        for event, group in crossings.groupby("event", sort=False):
            counted = ", ".join(f"{n} {verdict or 'without verdict'}" for verdict, n in
                                group["verdict"].value_counts().items())  # fmt: skip
            lines.append(f"Crossings at {event}: {counted}.")
    return lines


def _large(number: float) -> str:
    """Return a number of four figures, thousands apart."""
    return f"{float(f'{number:.4g}'):,.0f}".replace(",", "\u202f")


def _inputs(source: OutputFolder) -> list[dict]:
    out: dict[str, dict] = {}
    for entry in source.record.get("inputs", ()):
        one = out.setdefault(
            entry["path"],
            {"keys": [], "path": entry["path"], "bytes": entry["bytes"], "sha256": entry["sha256"]},
        )
        one["keys"].append(entry["key"])
    return list(out.values())


def _roughness(source: OutputFolder) -> list[dict]:
    """Return each n used, its source, and on how much of the sections."""
    table = source.layers.get("subareas")
    if table is None or not len(table):
        return []
    width = table["end_station"] - table["start_station"]
    total = width.sum()
    decimals = decimals_for("n", table["n"])
    grouped = (
        table.assign(width=width)
        .groupby(["land_class", "n", "n_source"], sort=False)
        .agg(width=("width", "sum"), count=("section_id", "nunique"))
        .reset_index()
        .sort_values("width", ascending=False)
    )
    return [
        {
            "land_class": r.land_class,
            "n": shown(r.n, decimals),
            "source": r.n_source,
            "sections": int(r.count),
            "share": f"{100 * r.width / total:.0f} %",
        }
        for r in grouped.itertuples(name="Used", index=False)
    ]


def _facts(source: OutputFolder) -> list[tuple[str, str]]:
    record = source.record
    units = {q: source.units.symbol(q) for q in ("length", "area", "flow", "velocity")}
    crs = source.crs
    authority = crs.to_authority()
    named = crs.name + (f" ({':'.join(authority)})" if authority else "")
    facts = [("Coordinate reference system", named)]
    facts.append(("Units", f"{source.units.name}: {', '.join(units.values())}; Manning’s n in s/m^(1/3)"))
    if record.get("finished"):
        facts.append(("Run finished", record["finished"].replace("T", " ").replace("+00:00", " UTC")))
    if record.get("seconds") is not None:
        facts.append(("Took", f"{record['seconds']:.1f} s"))
    if record.get("platform"):
        facts.append(("Machine", record["platform"]))
    for entry in record.get("outputs", ()):
        facts.append(
            (f"SHA-256 of {entry['path'].replace(chr(92), '/').rsplit('/', 1)[-1]}", entry["sha256"])
        )
    return facts


def _notes(source: OutputFolder) -> list[str]:
    if not source.record:
        return ["run.json is not in the folder, so that inputs and settings cannot be shown."]
    if source.folder is not None and not source.is_of_record:
        return [
            "results.gpkg has changed since the run that run.json speaks of; numbers here are the file’s."
        ]
    return []


def _map_summary(source: OutputFolder, drawn: Mapping) -> str:
    words = [_count(len(drawn["lines"]), "cut line")]
    if drawn["streams"]:
        words.append(_count(len(drawn["streams"]), "stream"))
    if drawn["crossings"]:
        words.append(_count(len(drawn["crossings"]), "crossing"))
    if drawn["extents"]:
        words.append("flood extent")
    return ", ".join(words)


def settings_text(settings: Mapping) -> str:
    """Return settings as the text of a study file.

    Examples
    --------
    >>> print(settings_text({"slope": {"value": 0.002}, "flows": {"events": {"10-year": 40.0}}}))
    [slope]
    value = 0.002
    <BLANKLINE>
    [flows]
    events = { "10-year" = 40.0 }
    """
    blocks = []
    for name, table in settings.items():
        lines = [f"[{name}]", *(f"{key} = {_toml(value)}" for key, value in table.items())]
        blocks.append("\n".join(lines))
    return "\n\n".join(blocks)


def _toml(value: Any) -> str:
    if isinstance(value, Mapping):
        return "{ " + ", ".join(f"{_toml(str(k))} = {_toml(v)}" for k, v in value.items()) + " }"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_toml(v) for v in value) + "]"
    return json.dumps(value, ensure_ascii=False)
