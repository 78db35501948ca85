"""``calculation_sheets.pdf``: a sheet a section or crossing, to be followed with a calculator and signed.

Everything on a sheet comes from the layers and the record of an output folder, so that sheets can be made
long after the run. A sheet shows every event in full, that of most discharge first.
"""

from __future__ import annotations

import math
import os
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import pyproj
import shapely

from terrain2q.columns import CAUTION, COLUMNS
from terrain2q.errors import FAILED, InputError
from terrain2q.ground.layers import read_layer
from terrain2q.jobs.crossings import AT_CREST, DEFAULT_RANK
from terrain2q.output.calculation import Calculation, Part, area_below, calculate, stretches
from terrain2q.output.crossing_steps import (
    CrossingSteps,
    write_opening,
    write_probability,
    write_road,
    write_tailwater,
)
from terrain2q.output.folder import OutputFolder, read_folder
from terrain2q.output.geopackage import RESULT_NAME
from terrain2q.output.looks import INK, WATERS, water_tones
from terrain2q.output.pdf import PdfWriter, text_width
from terrain2q.output.run_record import sha256_of
from terrain2q.output.sheet_drawings import Plan, Water, draw_plan, draw_section, stroke
from terrain2q.output.sheet_layout import GREY, SIZES, Sheet, TableColumn, figures, fitted, roughness_text
from terrain2q.output.whole_file import not_writable, whole_file

SHEETS_NAME = "calculation_sheets.pdf"

FLAGGED, ALL, NONE = "flagged", "all", "none"
SHEET_CHOICES = (FLAGGED, ALL, NONE)
"""Which sections get a sheet: those with findings or crossings, every one, or none."""

_SUM_TOLERANCE = 0.005
"""Sums that differ from the design flow by less hold: three figures."""

_HIGH_ALPHA = 2.0
"""As for the finding alpha-high (Chow 1959, Table 2-1)."""

_HOLDS, _LOOK = "holds", "look here"

_WORKED = 12
"""Subareas worked out line by line below the table; the table has all."""

_SECTION_LAYERS = frozenset(
    {"cut_lines", "sections", "subareas", "ratings", "design_stages", "subarea_flows", "required_widths"}
)

_ROW, _UNBROKEN = 10.6, 14
"""Height of a row of a table in points, and rows of a table that stays on one page."""

_CROSSING_NUMBERS = (
    "tailwater_stage", "road_width_under_water", "largest_depth_on_road", "weir_discharge",
    "required_opening", "opening_share",
)  # fmt: skip

_SHORT = {"opening_share": "Share there is", "required_opening": "Required opening"}
"""Titles for narrow columns."""

_INDEX_FIRST, _INDEX_NEXT, _INDEX_SIZE = 30, 56, 7.0

_STAGES_WIDTH = 145.0
"""Room for the stages of a crossing in the index, in points."""


def write_sheets(
    source: OutputFolder | str | os.PathLike, which: str = FLAGGED, path: str | os.PathLike | None = None
) -> Path:
    """Write the calculation sheets of an output folder, whole or not at all.

    Parameters
    ----------
    source : OutputFolder or path
        The folder, or what was read from it.
    which : str
        ``flagged``: sections with findings, and crossings; ``all``: every section, and crossings.
    path : path, optional
        ``calculation_sheets.pdf`` in the folder where absent.

    Returns
    -------
    pathlib.Path
        The file written: an index, then one sheet after another. Where no section is flagged the index
        says so and stands alone.

    Raises
    ------
    InputError
        The folder has no results (codes ``file-missing``, ``file-unreadable``).
    OutputError
        The file cannot be written (code ``output-not-writable``).
    """
    if which not in (FLAGGED, ALL):
        raise ValueError(f"no sheets are called {which!r}")
    if not isinstance(source, OutputFolder):
        source = read_folder(source)
    if path is None:
        if source.folder is None:
            raise ValueError("results that are in no folder need a path")
        path = source.folder / SHEETS_NAME
    path = Path(path)
    with whole_file(path) as temporary:
        try:
            with temporary.open("wb") as file:
                _Sheets(source, which).write(file)
        except OSError as error:
            raise not_writable(path, error) from error
    return path


@dataclass
class _Entry:
    """A line of the index."""

    title: str
    about: str
    status: str
    stage: str
    findings: int
    anchor: str
    page: int = 0


@dataclass
class _Rows:
    """Rows of the layers by section."""

    by_layer: dict[str, dict[str, list[dict]]] = field(default_factory=dict)

    def take(self, layer: str, table, key: str = "section_id") -> None:
        grouped: dict[str, list[dict]] = {}
        if table is not None:
            for row in table.to_dict("records"):
                grouped.setdefault(row[key], []).append(row)
        self.by_layer[layer] = grouped

    def of(self, layer: str, name: str) -> list[dict]:
        return self.by_layer[layer].get(name, [])


class _Sheets:
    """All sheets of an output folder."""

    def __init__(self, source: OutputFolder, which: str, *, inside: bool = False) -> None:
        self.source, self.units = source, source.units
        self.inside = inside  # sections on the sheets of crossings
        layers = source.layers
        self.length, self.area, self.flow, self.velocity = (
            source.units.symbol(q) for q in ("length", "area", "flow", "velocity")
        )
        self.size = SIZES[source.units.name]
        self.rows = _Rows()
        for layer in ("subareas", "design_stages", "subarea_flows"):
            self.rows.take(layer, layers.get(layer))
        for layer in ("crossings", "crossing_steps", "opening_parts"):
            self.rows.take(layer, layers.get(layer), "crossing_id")
        self.roads = _roads(layers.get("road_profiles"))
        self.findings: dict[tuple[bool, str], list[dict]] = {}
        for row in () if "findings" not in layers else layers["findings"].to_dict("records"):
            known = row["layer"] in _SECTION_LAYERS
            self.findings.setdefault((known, row["feature_id"]), []).append(row)
        self.sections = {row["section_id"]: row for row in layers["sections"].to_dict("records")}
        self.crossings = list(self.rows.by_layer["crossings"])
        self.chosen = [
            name
            for name in self.sections
            if which == ALL or self.findings.get((True, name)) or name in self.rows.by_layer["crossings"]
        ]
        self.which = which
        self.composite = source.settings.get("channel", {}).get("composite", "divide")
        self.entries: list[_Entry] = []

    def write(self, file) -> None:
        """Write all pages into an open file."""
        source = self.source
        name = source.name or "terrain2q study"
        version = source.record.get("versions", {}).get("terrain2q", "")
        writer = PdfWriter(
            file,
            title=f"Calculation sheets: {name}",
            producer=f"terrain2q {version}".strip(),
            created=source.record.get("finished") or "",
        )
        count = len(self.chosen) + len(self.crossings)
        number = 1 + (1 if count <= _INDEX_FIRST else 1 + math.ceil((count - _INDEX_FIRST) / _INDEX_NEXT))
        for group, names, make in (
            ("Sections", self.chosen, self._section_sheet),
            ("Crossings", self.crossings, self._crossing_sheet),
        ):
            for i, one in enumerate(names):
                sheet, entry = make(writer, one, f"{'s' if group == 'Sections' else 'c'}{i}")
                if i == 0:
                    sheet.pages[0].bookmarks.insert(0, (group, 0, self.size[1]))
                entry.page = number
                number = sheet.finish(number)
                self.entries.append(entry)
        self._index(writer, name)
        writer.close()

    # --- what stands around -----------------------------------------------------------------------

    @cached_property
    def plan(self) -> Plan:
        """Cut lines and streams, for the pieces of map."""
        lines = [shapely.force_2d(r["geometry"]) for r in self.sections.values() if _is_line(r["geometry"])]
        streams = []
        asked = self.source.settings.get("streams")
        if asked:
            try:
                table = read_layer(
                    asked["path"], purpose="streams", geometry="line", crs=self.source.crs,
                    id_field=asked.get("id_field"), repeated_ids=True,
                )  # fmt: skip
                streams = [shapely.force_2d(g) for g in table.geometry if _is_line(g)]
            except InputError:
                pass  # a plan without streams: the inputs have moved since the run
        return Plan(shapely.STRtree(lines), shapely.STRtree(streams), self.source.crs.is_geographic)

    @cached_property
    def of_crossings(self) -> _Sheets | None:
        """The sections that were laid out for crossings; None where the run kept none."""
        layers = self.source.crossing_layers
        return _Sheets(replace(self.source, layers=layers), ALL, inside=True) if layers else None

    @cached_property
    def tones(self) -> dict[str, tuple[str, int]]:
        """Tone and place in order of each event, the more discharge the deeper."""
        stages = self.source.layers.get("design_stages")
        if stages is None or not len(stages):
            return {}
        typical = stages.groupby("event")["discharge"].median()
        # water that just reaches the crest is of no event: it is a line, and takes no tone from them
        typical = typical[typical.index != AT_CREST] if self.inside else typical
        order = sorted(typical.index, key=lambda e: (not np.isfinite(typical[e]), typical[e]))
        return {e: (tone, i) for i, (e, tone) in enumerate(zip(order, water_tones(len(order)), strict=True))}

    def _calculations(self, name: str) -> list[Calculation]:
        """Return every event of a section, that of most discharge first."""
        flows: dict[str, list[dict]] = {}
        for row in self.rows.of("subarea_flows", name):
            flows.setdefault(row["event"], []).append(row)
        subareas = self.rows.of("subareas", name)
        found = [
            calculate(row, subareas, flows.get(row["event"], ()), self.units, self.composite)
            for row in self.rows.of("design_stages", name)
        ]
        return sorted(
            found,
            key=lambda c: (
                self._is_at_crest(c), not c.answered, -c.row["discharge"] if c.answered else 0.0
            ),
        )  # fmt: skip

    def _is_at_crest(self, one: Calculation) -> bool:
        """Return whether a calculation is of the water that just reaches a crest, not of an event."""
        return self.inside and one.event == AT_CREST

    def _length(self, value: float, decimals: int = 2) -> str:
        return f"{value:.{decimals}f} {self.length}" if math.isfinite(value) else "–"

    # --- a section --------------------------------------------------------------------------------

    def _section_sheet(self, writer: PdfWriter, name: str, anchor: str) -> tuple[Sheet, _Entry]:
        sheet = Sheet(writer, self.size, f"Section {name}", fitted(self.source.name, 260, 8), CAUTION, anchor)
        found = self._calculations(name)
        findings = self.findings.get((True, name), [])
        self._section_part(sheet, name, found)
        self._findings(sheet, findings)
        sheet.sign()
        return sheet, self._entry(f"Section {name}", self.sections[name]["stream"], found, findings, anchor)

    def _entry(self, title, about, found: Sequence[Calculation], findings, anchor: str) -> _Entry:
        statuses = {c.row["status"] for c in found}
        status = next((s for s in ("failed", "doubtful", "ok") if s in statuses), "–")
        stage = f"{found[0].row['stage']:.2f}" if found and found[0].answered else "–"
        return _Entry(title, about, status, stage, len(findings), anchor)

    def _section_part(
        self, sheet: Sheet, name: str, found: Sequence[Calculation], marks: Mapping[str, float] | None = None,
        point: Any = None,
    ) -> None:  # fmt: skip
        """Draw all that a sheet has about a section; a crossing's sheet has it too."""
        row = self.sections[name]
        profile = _profile(row["geometry"])
        waters = [self._water(c, profile) for c in found if c.answered and not self._is_at_crest(c)]
        self._facts(sheet, row, found, point)
        if len(profile) > 1:
            sheet.need(160)
            waters.sort(key=lambda w: (w.stage, w.area))
            used = draw_section(
                sheet.page, sheet.left, sheet.y, sheet.width, min(190.0, sheet.room), profile,
                self.rows.of("subareas", name), waters, self.length, marks,
            )  # fmt: skip
            sheet.space(used + 4)
        else:
            sheet.title("No section")
            sheet.lines("The cut line gave no profile; the findings say why.")
        if self.inside:
            self._doubts(sheet, name)
        for place, one in enumerate(found):
            self._event(sheet, one, profile, first=place == 0)
        if not found:
            sheet.title("No design flow")
            sheet.lines("The study has no design flows; the layer ratings has this section's rating.")

    def _water(self, one: Calculation, profile: np.ndarray) -> Water:
        tone, order = self.tones.get(one.event, (WATERS[2], 0))
        pieces = tuple(stretches(one.row, profile, one.levels))
        area = one.total("area")
        return Water(one.event, float(one.row["stage"]), pieces, area, tone, stroke(order))

    def _facts(self, sheet: Sheet, row: Mapping, found: Sequence[Calculation], point: Any) -> None:
        subareas = self.rows.of("subareas", row["section_id"])
        crs = self.source.crs
        authority = crs.to_authority()
        slope = figures(row["slope"], 4)
        facts = [
            ("Stream", row["stream"] or "not known"),
            ("Stream distance", self._length(row["stream_distance"], 1) + " from its upstream end"
             if math.isfinite(row["stream_distance"]) else "not known"),
            ("Length", f"{self._length(row['length'], 1)}, {int(row['points'])} points"),
            ("Lowest ground", self._length(row["lowest_ground"])),
            ("Friction slope S", f"{slope} ({row['slope_source']})" if row["slope_source"] else slope),
            ("Subareas", f"{len(subareas)}, " + (
                "divided at the banks" if any(s["zone"] == "channel" for s in subareas) else "not divided"
            )),
            ("Method", "normal depth; Manning’s equation in each subarea"),
            ("Units", f"{self.length}, {self.area}, {self.flow}; n in s/m^(1/3), k = {self._k}"),
            ("Map", f"{crs.name}" + (f" ({':'.join(authority)})" if authority else "")),
        ]  # fmt: skip
        if self.composite != "divide":
            facts.insert(6, ("n in the channel", f"one composite n, {self.composite}"))
        plan = None
        if _is_line(row["geometry"]):
            wet = found[0].row.get("geometry") if found and found[0].answered else None
            tone = self.tones.get(found[0].event, (WATERS[2], 0))[0] if found else WATERS[2]
            line = shapely.force_2d(row["geometry"])
            plan = (line, float(row["length"]), wet, max(tone, WATERS[1], key=WATERS.index), point, True)
        self._fact_list(sheet, facts, plan)

    def _fact_list(self, sheet: Sheet, facts: Sequence[tuple[str, str]], plan: tuple | None) -> None:
        """Write facts one below the other, and beside them draw a piece of map."""
        height, plan_width = max(128.0, 12.4 * len(facts) + 8), 190.0
        sheet.need(height)
        y, page, room = sheet.y - 2, sheet.page, sheet.width - plan_width - 94
        for word, text in facts:
            y -= 12.4
            page.text(sheet.left, y, word, 7.2, colour=GREY)
            page.text(sheet.left + 80, y, fitted(text, room, 7.4), 7.4, colour=INK)
        if plan is not None:
            line, length, wet, tone, point, named = plan
            draw_plan(
                page, sheet.left + sheet.width - plan_width, sheet.y, plan_width, 122.0, self.plan, line,
                length, self.length, wet=wet, tone=tone, point=point, shown=named,
            )  # fmt: skip
        sheet.space(height)

    @property
    def _k(self) -> str:
        return "1" if self.units.manning == 1.0 else f"{self.units.manning:.4g}"

    # --- an event ---------------------------------------------------------------------------------

    def _event(self, sheet: Sheet, one: Calculation, profile: np.ndarray, *, first: bool) -> None:
        self._title(sheet, one)
        if not one.answered:
            return
        sources = self._table(sheet, one, first)
        if first:
            for number, source in enumerate(sources, 1):
                sheet.lines(f"[{number}] {source}", 6.6, colour=GREY, hang=12)
        self._remarks(sheet, one)
        if first:
            self._worked(sheet, one)
        self._whole(sheet, one)
        self._checks(sheet, one, profile, whole=first)

    def _title(self, sheet: Sheet, one: Calculation) -> None:
        row = one.row
        if not one.answered:
            sheet.title(f"{one.event}: no answer", row["status"])
            sheet.lines("There is no stage at this event; the findings say why.")
            return
        found = "carried at stage" if self._is_at_crest(one) else "stage found"
        sheet.title(
            f"{one.event}: Q = {figures(row['discharge'])} {self.flow}, {found} "
            f"{self._length(row['stage'])}, depth {self._length(row['depth'])}",
            f"status: {row['status']}",
            keep=30 + _ROW * (min(len(one.parts), _UNBROKEN) + 2),  # a short table is not broken
        )

    def _table(self, sheet: Sheet, one: Calculation, first: bool) -> list[str]:
        """Draw the table by subarea; return the sources of n in the order of their numbers."""
        area, length, flow, velocity = self.area, self.length, self.flow, self.velocity
        several = len(one.levels) > 1
        sources: list[str] = []
        columns = [
            TableColumn("no.", "", 16),
            TableColumn("zone", "", 60, words=True),
            TableColumn("land class", "", 66 if several else 84, words=True),
            TableColumn("from", length, 36),
            TableColumn("to", length, 36),
            *([TableColumn("water", length, 40)] if several else []),
            TableColumn("n", "", 35),
            *([TableColumn("source", "", 33)] if first else []),
            TableColumn("A", area, 44),
            TableColumn("P", length, 42),
            TableColumn("R = A/P", length, 40),
            TableColumn("K", flow, 46),
            TableColumn("Q", flow, 42),
            TableColumn("v = Q/A", velocity, 40),
        ]
        rows = []
        for part in one.parts:
            stated = "n stated in the study" if part.n_source == "study" else part.n_source
            source = ": ".join(text for text in (part.land_class, stated) if text)
            if source and source not in sources:
                sources.append(source)
            mark = f"[{sources.index(source) + 1}]" if source else ""
            rows.append([
                str(part.number), part.zone or "–", part.land_class or "–",
                f"{part.start:.1f}", f"{part.end:.1f}", *([f"{part.stage:.2f}"] if several else []),
                _roughness(part), *([mark] if first else []),
                figures(part.area, 5), figures(part.perimeter, 5), figures(part.radius, 5),
                figures(part.conveyance, 5), figures(part.discharge, 5), figures(part.velocity, 4),
            ])  # fmt: skip
        total, around = one.total("area"), one.total("perimeter")
        carried = one.total("discharge")
        rows_last = [
            "", "sum", "", "", "", *([""] if several else []), "", *([""] if first else []),
            figures(total, 5), figures(around, 5), figures(total / around, 5),
            figures(one.total("conveyance"), 5), figures(carried, 5), figures(carried / total, 4),
        ]  # fmt: skip
        sheet.table(columns, rows, rows_last)
        return sources

    def _remarks(self, sheet: Sheet, one: Calculation) -> None:
        """Say where n or K is not what the plain equation gives."""
        for group in one.together:
            numbers = ", ".join(str(n) for n in group.numbers)
            n, area, perimeter, radius, conveyance = (
                figures(value, 4 if value is group.n else 5)
                for value in (
                    group.n, group.area, group.perimeter, group.area / group.perimeter, group.conveyance
                )
            )  # fmt: skip
            sheet.lines(
                f"† Subareas {numbers} are taken together under one composite n ({group.rule}): n = {n}, "
                f"A = {area}, P = {perimeter}, R = {radius}, K = {self._k}/{n} × {area} × {radius}^(2/3) = "
                f"{conveyance}; each carries its share by area.",
                6.8,
                hang=10,
            )
        differing = [p for p in one.parts if p.n_differs and not p.together]
        if differing:
            listed = ", ".join(f"{p.number}: {figures(p.n_table, 3)}" for p in differing)
            sheet.lines(
                f"* n at this depth of water, where it falls with depth; as stated, in the table’s {listed}.",
                6.8,
                hang=10,
            )
        if one.factor != 1.0:
            sheet.lines(
                "Stretches of water here share a subarea or a composite n: each K is "
                f"{figures(one.factor, 5)} times what its own A and P give, so that together they carry what "
                "the whole carries.",
                6.8,
            )

    def _worked(self, sheet: Sheet, one: Calculation) -> None:
        """Put the numbers into the equation, subarea by subarea."""
        slope = figures(one.row["slope"], 4)
        factor = "" if one.factor == 1.0 else f" × {figures(one.factor, 5)}"
        sheet.space(2)
        sheet.need(40)
        sheet.lines(
            f"In each subarea   K = (k/n) · A · R^(2/3),   Q = K · √S,   k = {self._k},   S = {slope}:",
            7.3,
            face="bold",
        )
        parts = [p for p in one.parts if not p.together]
        shown = sorted(sorted(parts, key=lambda p: -p.conveyance)[:_WORKED], key=lambda p: p.number)
        for part in shown:
            sheet.lines(
                f"{part.number}:  K = {self._k}/{roughness_text(part.n)} × {figures(part.area, 5)} × "
                f"{figures(part.radius, 5)}^(2/3){factor} = {figures(part.conveyance, 5)};   "
                f"Q = {figures(part.conveyance, 5)} × √{slope} = {figures(part.discharge, 5)} {self.flow}",
                7.2,
                indent=8,
                hang=12,
            )
        left = len(parts) - len(shown)
        if left:
            sheet.lines(f"and {left} more, the same way from the table", 7.2, indent=8)

    def _whole(self, sheet: Sheet, one: Calculation) -> None:
        """Put the numbers into the equations of the whole section."""
        row, slope = one.row, figures(one.row["slope"], 4)
        conveyance, area = one.total("conveyance"), one.total("area")
        width, alpha = float(row["top_width"]), float(row["alpha"])
        velocity = float(row["mean_velocity"])
        gravity = f"{self.units.gravity:.4g}"
        cubes = math.fsum(p.conveyance**3 / p.area**2 for p in one.parts)
        sheet.need(34)
        k, a, q = figures(conveyance, 5), figures(area, 5), figures(float(row["discharge"]), 5)
        v = figures(velocity)
        sheet.lines(
            f"Q = ΣK · √S = {k} × √{slope} = {figures(one.total('discharge'), 5)} {self.flow};   "
            f"V = Q/A = {q} / {a} = {v} {self.velocity}",
            7.3,
        )
        power = math.floor(math.log10(cubes))
        sheet.lines(
            f"α = A² · Σ(K³/A²) / (ΣK)³ = {a}² × {cubes / 10.0**power:.4f} × 10^{power} / {k}³ "
            f"= {figures(alpha, 4)}   (Chow 1959, section 2-7)",
            7.3,
        )
        sheet.lines(
            f"Fr = V · √α / √(g · A/T) = {v} × √{figures(alpha, 4)} / √({gravity} × "
            f"{a} / {figures(width, 5)}) = {figures(row['froude'], 3)};   "
            f"top width T = {figures(width, 5)} {self.length}",
            7.3,
        )
        sheet.space(3)

    def _checks(self, sheet: Sheet, one: Calculation, profile: np.ndarray, *, whole: bool) -> None:
        """Draw all checks as a table, or in one paragraph the numbers of those that ask for a look."""
        rows = list(self._check_rows(one, profile))
        if whole:
            columns = [
                TableColumn("check", "", 140, words=True),
                TableColumn("numbers", "", 350, words=True),
                TableColumn("", "", 40, words=True),
            ]
            sheet.need(60)
            sheet.table(columns, rows)
            return
        holding = [name for name, _, verdict in rows if verdict == _HOLDS]
        sheet.lines(f"Checks that hold: {'; '.join(holding) or 'none'}.", 7.0)
        for name, numbers, verdict in rows:
            if verdict == _LOOK:
                sheet.lines(f"Look here: {name}: {numbers}.", 7.0)
        sheet.space(4)

    def _check_rows(self, one: Calculation, profile: np.ndarray) -> Iterator[list[str]]:
        row, unit = one.row, self.length

        def verdict(holds: bool) -> str:
            return _HOLDS if holds else _LOOK

        asked, carried = float(row["discharge"]), one.total("discharge")
        off = abs(carried / asked - 1.0)
        yield [
            f"Sum of subareas, {'discharge above' if self._is_at_crest(one) else 'design flow'}",
            f"{figures(carried, 5)} against {figures(asked, 5)} {self.flow}: {100 * off:.2f} % apart",
            verdict(off < _SUM_TOLERANCE),
        ]
        water = stretches(row, profile, one.levels)
        if water:
            total, again = one.total("area"), area_below(profile, water)
            off = abs(again / total - 1.0)
            yield [
                "Area measured again from the profile",
                f"{figures(again, 5)} against {figures(total, 5)} {self.area}: {100 * off:.2f} % apart",
                verdict(off < _SUM_TOLERANCE),
            ]
        lowest = float(self.sections[row["section_id"]]["lowest_ground"])
        depth = row["stage"] - lowest
        yield [
            "Depth above the lowest ground",
            f"{row['stage']:.2f} − {lowest:.2f} = {depth:.2f} {unit}",
            verdict(depth > 0 and abs(depth - row["depth"]) < 0.005),
        ]
        if len(profile) > 1 and water:
            texts, holds = [], True
            for word, ground, at in (
                ("left", profile[0, 2], profile[0, 3]),
                ("right", profile[-1, 2], profile[-1, 3]),
            ):
                stands = [s.stage for s in water if s.start - 1e-6 <= at <= s.end + 1e-6 and s.stage > ground]
                level = max(stands, default=float(row["stage"]))
                above = level - ground
                if stands:
                    texts.append(f"water {above:.2f} {unit} above the {word} end, {ground:.2f}")
                    holds = False
                elif above > 0:
                    texts.append(f"{word} end, {ground:.2f}, dry behind higher ground")
                else:
                    texts.append(f"{word} end, {ground:.2f}, {-above:.2f} {unit} above the water")
            yield ["Ends of the section", "; ".join(texts), verdict(holds)]
        critical = float(row["critical_stage"])
        if math.isfinite(critical):
            # at the top of a bank both stand at the bank
            apart = critical - row["stage"]
            side = "at" if abs(apart) < 0.01 else "below" if apart < 0 else "above"
            yield [
                "Critical stage and Froude number",
                f"{critical:.2f}, {side} the stage found; Fr = {figures(row['froude'], 3)}",
                verdict(apart < 0.01 and row["froude"] <= 1.0),
            ]
        yield [
            "Velocity-head coefficient α",
            f"{figures(row['alpha'], 4)}; above {_HIGH_ALPHA:g} the division asks for a look",
            verdict(row["alpha"] <= _HIGH_ALPHA),
        ]
        share = float(row["channel_share"])
        if math.isfinite(share):
            yield ["Share in the channel", f"{100 * share:.0f} % of the discharge", ""]

    # --- findings ---------------------------------------------------------------------------------

    def _findings(self, sheet: Sheet, findings: Sequence[Mapping]) -> None:
        sheet.title("Findings", keep=14)
        if not findings:
            sheet.lines("None.")
        for one in findings:
            sheet.lines(f"{one['severity']}: {one['message']}  [{one['code']}]", 7.2, hang=10)
            sheet.lines(one["remedy"], 6.8, colour=GREY, indent=10)
        sheet.space(4)

    def _doubts(self, sheet: Sheet, name: str) -> None:
        """Say below the drawing of a crossing's section why some of its events are doubtful."""
        for one in self.findings.get((True, name), []):
            sheet.lines(f"{one['severity']}: {one['message']}  [{one['code']}]", 7.2, hang=10)
            sheet.space(3)

    # --- a crossing -------------------------------------------------------------------------------

    def _crossing_sheet(self, writer: PdfWriter, name: str, anchor: str) -> tuple[Sheet, _Entry]:
        rows = self.rows.of("crossings", name)
        sheet = Sheet(
            writer, self.size, f"Crossing {name}", fitted(self.source.name, 260, 8), CAUTION, anchor,
            signed_first=True,
        )  # fmt: skip
        first = max(rows, key=lambda r: r["discharge"] if math.isfinite(r["discharge"]) else -math.inf)
        self._crossing_facts(sheet, first)
        sheet.title("Verdict by event", keep=50)
        columns = [
            TableColumn("event", "", 80, words=True),
            TableColumn("Q", self.flow, 50),
            TableColumn("stage at road", self.length, 60),
            TableColumn("crest − stage = freeboard", self.length, 130),
            TableColumn("", "", 10),
            TableColumn("verdict", "", 100, words=True),
            TableColumn("status", "", 50, words=True),
        ]
        sheet.table(columns, [self._crossing_row(r) for r in rows])
        steps = self._steps_of(name, rows)
        self._verdict_rule(sheet, rows, steps)
        about = [n for n in _CROSSING_NUMBERS if n in first and any(math.isfinite(r[n]) for r in rows)]
        if about:
            sheet.title("Water on the road, tailwater and opening", keep=50)
            columns = [TableColumn("event", "", 60, words=True)] + [
                TableColumn(_SHORT.get(n, COLUMNS[n].title), self._unit(n), 76) for n in about
            ]
            sheet.table(columns, [[r["event"], *(_shown(n, float(r[n])) for n in about)] for r in rows])
        findings = self.findings.get((False, name), [])
        self._findings(sheet, findings)
        section = self._section_of(name, first)
        approach = f"{name} approach"
        found: list[Calculation] = []
        if self.of_crossings is not None and approach in self.of_crossings.sections:
            self._approach_part(sheet, approach, rows)
        elif section is not None:
            sheet.title(f"Section {section}", keep=120)
            found = self._calculations(section)
            self._section_part(
                sheet, section, found, {"crest of the road": float(first["crest"])}, first.get("geometry")
            )
        else:
            sheet.lines(
                "The stage at the road is carried from the section above it (the approach), worked out by "
                "itself. Its cut line is in crossing_sections.gpkg: a run with that file as [cut_lines] "
                "gives the section a sheet on which its stage can be followed.",
                7.3,
            )
        if steps is not None:
            write_probability(sheet, steps, self.units)
            write_road(sheet, steps, self.units)
            write_opening(sheet, steps, self.units)
            if write_tailwater(sheet, steps, self.units):
                self.of_crossings._short_part(sheet, f"{name} tailwater", float(first["crest"]))
        findings = self.findings.get((False, name), [])
        sheet.sign()
        entry = self._entry(f"Crossing {name}", first["road"], found, findings, anchor)
        statuses = {r["status"] for r in rows}
        entry.status = next((s for s in ("failed", "doubtful", "ok") if s in statuses), entry.status)
        entry.stage = _stages_at_road(rows)
        return sheet, entry

    def _steps_of(self, name: str, rows: Sequence[Mapping]) -> CrossingSteps | None:
        """Return what the crossing's numbers are worked out with; None where the run kept none."""
        if self.of_crossings is None:
            return None
        kept = self.of_crossings.rows
        steps = {row["event"]: row for row in kept.of("crossing_steps", name)}
        if not steps:
            return None
        parts: dict[str, list[dict]] = {}
        for row in kept.of("opening_parts", name):
            parts.setdefault(row["event"], []).append(row)
        stations, road = self.of_crossings.roads.get(name, (np.zeros(0), np.zeros(0)))

        def stages(which: str) -> dict[str, float]:
            found = kept.of("design_stages", f"{name} {which}")
            return {row["event"]: float(row["stage"]) for row in found if math.isfinite(row["stage"])}

        zones = {int(r["subarea"]): r["zone"] for r in kept.of("subareas", f"{name} approach")}
        return CrossingSteps(
            rows, steps, parts, stations, road, stages("approach"), stages("tailwater"), zones,
            self.composite, self.of_crossings.tones,
        )  # fmt: skip

    def _verdict_rule(self, sheet: Sheet, rows: Sequence[Mapping], steps: CrossingSteps | None) -> None:
        """Say how verdicts follow from freeboard, and which event is the first over."""
        wanted = ""
        if steps is not None:
            step, row = next(iter(steps.steps.values())), rows[0]
            room = row["crest"] + row["slope"] * row["approach_distance"] - step["allowed_stage"]
            wanted = f" of {room:.2f} {self.length}"
        sheet.lines(
            "Over the crest: freeboard of 0 or less; within freeboard: less than the freeboard wanted"
            f"{wanted}; else crest not reached. The first event over is that of least discharge over the "
            "crest.",
            7.0,
            colour=GREY,
        )
        sheet.space(3)

    def _approach_part(self, sheet: Sheet, section: str, rows: Sequence[Mapping]) -> None:
        """Write the section that gives the stages, and how each is carried down to the road."""
        first = rows[0]
        found = self.of_crossings._calculations(section)
        stages = {c.event: c.row for c in found if c.answered}
        slope, distance, crest = (float(first[n]) for n in ("slope", "approach_distance", "crest"))
        fall = slope * distance
        sheet.title("From the approach section to the road", keep=70)
        sheet.lines(
            f"Fall to the road = S × distance = {figures(slope, 4)} × {distance:.1f} = {fall:.3f} "
            f"{self.length}. Stage at the section − fall = stage at the road; crest − stage at the road = "
            "freeboard:",
            7.3,
        )
        for row in rows:
            at = stages.get(row["event"])
            if at is not None:
                text = (
                    f"{row['event']}: {at['stage']:.3f} − {fall:.3f} = {row['stage']:.3f};   "
                    f"{crest:.3f} − {row['stage']:.3f} = {row['freeboard']:.3f} {self.length}"
                )
                sheet.lines(text.replace("= -", "= −").replace("− -", "− −"), 7.2, indent=8)
        at = stages.get(AT_CREST)
        if at is not None:
            sheet.lines(
                f"Water just reaches the crest at {crest:.3f} + {fall:.3f} = {crest + fall:.3f} at the "
                f"section, which then carries {figures(float(at['discharge']))} {self.flow} "
                f"(below as “{AT_CREST}”).",
                7.2,
                indent=8,
            )
        sheet.space(4)
        sheet.title(f"Section {section}", keep=120)
        # the crest as seen from the section: as much higher as the water falls to the road
        marks = {"water just reaches the crest": crest + fall}
        self.of_crossings._section_part(sheet, section, found, marks)

    def _short_part(self, sheet: Sheet, name: str, crest: float) -> None:
        """Draw a section that gives no more than stages: its ground and water, and each discharge."""
        row = self.sections.get(name)
        if row is None:
            return
        found, profile = self._calculations(name), _profile(row["geometry"])
        # the heading, a line, the drawing and a table that is not broken stay together
        sheet.title(f"Section {name}", keep=180)
        sheet.lines(
            f"{self._length(row['length'], 1)} long, {int(row['points'])} points; lowest ground "
            f"{self._length(row['lowest_ground'])}; S = {figures(row['slope'], 4)}. In each subarea "
            f"K = (k/n) · A · R^(2/3), k = {self._k}; Σ K · √S is the discharge.",
            7.2,
        )
        sheet.space(10)
        waters = sorted(
            (self._water(c, profile) for c in found if c.answered), key=lambda w: (w.stage, w.area)
        )
        if len(profile) > 1:
            sheet.space(4 + draw_section(
                sheet.page, sheet.left, sheet.y, sheet.width, 150.0, profile, self.rows.of("subareas", name),
                waters, self.length, {"crest of the road": crest},
            ))  # fmt: skip
        self._doubts(sheet, name)
        for one in found:
            self._title(sheet, one)
            if not one.answered:
                continue
            self._table(sheet, one, False)
            self._remarks(sheet, one)
            k = figures(one.total("conveyance"), 5)
            sheet.lines(
                f"Q = ΣK · √S = {k} × √{figures(one.row['slope'], 4)} = "
                f"{figures(one.total('discharge'), 5)} {self.flow}",
                7.2,
            )
            sheet.space(4)

    def _crossing_facts(self, sheet: Sheet, row: Mapping) -> None:
        """Write where the crossing is, and draw a piece of map about it."""
        facts = [
            ("Road", row["road"] or "not named"),
            ("Stream", row["stream"] or "not named"),
            ("Crest", f"{self._length(row['crest'], 3)}, where water would first pass the road"),
            ("First event over", row["first_event_over"] or "none"),
            ("Discharge at crest", f"{figures(float(row['crest_discharge']))} {self.flow}"),
        ]
        if math.isfinite(place := row.get("overflow_station", math.nan)):
            side = "right" if place > 0 else "left"
            where = "at the stream" if place == 0 else f"to the {side} along the road, looking downstream"
            facts.append(("Crest from stream", f"{self._length(abs(place), 1)} {where}"))
        if math.isfinite(distance := row.get("approach_distance", math.nan)):
            facts.append(("Approach section", f"{self._length(distance, 1)} above the road"))
        if "slope" in row and math.isfinite(row["slope"]):
            facts.append(("Slope", figures(row["slope"], 4)))
        if math.isfinite(row.get("rank", float("nan"))):
            rule = ", then ".join(self.source.settings.get("crossings", {}).get("rank") or DEFAULT_RANK)
            facts.append(("Rank", f"{int(row['rank'])} of {len(self.crossings)}, by {rule}"))
        if math.isfinite(chance := row.get("probability", math.nan)):
            facts.insert(5, ("Exceeded", f"with probability {figures(chance, 3)} in any year"))
        point = row.get("geometry")
        line, length = (None, 0.0) if point is None else self._about(point)
        self._fact_list(sheet, facts, None if line is None else (line, length, None, WATERS[2], point, False))

    def _about(self, point: Any) -> tuple[shapely.LineString, float]:
        """Return a line through a point, west to east, about 300 m long, and its length on the ground."""
        crs, (x, y) = self.source.crs, shapely.get_coordinates(point)[0]
        reach = 150.0 / (111_000.0 if crs.is_geographic else crs.axis_info[0].unit_conversion_factor)
        ends = np.array([[x - reach, y], [x + reach, y]])
        there = pyproj.Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True).transform(*ends.T)
        metres = crs.get_geod().inv(there[0][0], there[1][0], there[0][1], there[1][1])[2]
        return shapely.LineString(ends), metres * self.units.per_si("length")

    def _unit(self, column: str) -> str:
        unit = self.units.symbol(COLUMNS[column].quantity)
        return "" if unit == "1" else unit

    def _section_of(self, name: str, row: Mapping) -> str | None:
        wanted = row.get("section_id") or name
        return wanted if wanted in self.sections else None

    def _crossing_row(self, row: Mapping) -> list[str]:
        crest, stage, free = (float(row[n]) for n in ("crest", "stage", "freeboard"))
        numbers = "–"
        if row["status"] != FAILED and all(math.isfinite(v) for v in (crest, stage, free)):
            numbers = f"{crest:.3f} − {stage:.3f} = {free:.3f}".replace("-", "−")
        return [
            row["event"], figures(float(row["discharge"])), f"{stage:.3f}" if math.isfinite(stage) else "–",
            numbers, "", row["verdict"] or "–", row["status"],
        ]  # fmt: skip

    # --- the index --------------------------------------------------------------------------------

    def _index(self, writer: PdfWriter, name: str) -> None:
        sheet = Sheet(writer, self.size, "Calculation sheets", "", CAUTION)
        sheet.pages[0].bookmark("Index")
        record = self.source.record
        sheet.lines(name, 11, face="bold")
        sheet.space(3)
        chosen = {
            FLAGGED: "those with findings or a crossing; sheets = \"all\" under [output] gives every one",
            ALL: "all",
        }[self.which]  # fmt: skip
        finished = (record.get("finished") or "").replace("T", " ").replace("+00:00", " UTC")
        facts = [
            f"{len(self.chosen)} of {len(self.sections)} sections ({chosen})"
            + (f"; {len(self.crossings)} crossings" if self.crossings else "") + ".",
            f"Run finished {finished}, terrain2q {record.get('versions', {}).get('terrain2q', '')}."
            if finished else "",
            f"SHA-256 of {RESULT_NAME}: {sha256_of(self.source.folder / RESULT_NAME)}"
            if self.source.folder is not None else "",
            "" if self.source.is_of_record or not record or self.source.folder is None
            else f"{RESULT_NAME} has changed since the run that run.json speaks of; numbers are the file’s.",
        ]  # fmt: skip
        for text in facts:
            if text:
                sheet.lines(text, 7.4)
        sheet.space(3)
        sheet.lines(
            "How to follow a sheet: in each subarea under water K = (k/n) · A · R^(2/3) with R = A/P, "
            f"k = {self._k}; the sum of all K times √S is the discharge that the stage found carries, "
            "which is the design flow. Numbers are rounded only for print. Where water stands at several "
            "levels, the table has the level over each subarea.",
            7.4,
        )
        sheet.space(3)
        sheet.lines(CAUTION, 7.4, face="bold")
        sheet.space(6)
        stages = ["of a section that of its largest event"] if self.chosen else []
        if self.crossings:
            events = [row["event"] for row in self.rows.of("crossings", self.crossings[0])]
            stages.append(f"of a crossing those at the road, of {', '.join(events)} in turn")
        if stages:
            sheet.lines(f"Stages are: {'; '.join(stages)}.", 7.0, colour=GREY)
            sheet.space(3)
        if not self.entries:
            sheet.lines("No section has a finding or a crossing, so that there are no sheets.", 8)
        columns = [
            TableColumn("sheet", "", 130, words=True),
            TableColumn("stream or road", "", 130, words=True),
            TableColumn("status", "", 50, words=True),
            TableColumn("findings", "", 40),
            TableColumn(f"stage [{self.length}]", "", 150),
            TableColumn("page", "", 35),
        ]
        first, rest = self.entries[:_INDEX_FIRST], self.entries[_INDEX_FIRST:]
        blocks = [first, *(rest[i : i + _INDEX_NEXT] for i in range(0, len(rest), _INDEX_NEXT))]
        for number, block in enumerate(blocks):
            if number:
                sheet.need(self.size[1])  # a page of its own
            if block:
                self._index_table(sheet, columns, block)
        if len(sheet.pages) != len(blocks):
            raise AssertionError("the index has another number of pages than was reckoned with")
        sheet.finish(1, front=True)

    def _index_table(self, sheet: Sheet, columns, entries: Sequence[_Entry]) -> None:
        def link(page, number: int, bottom: float, height: float) -> None:
            page.link(sheet.left, bottom, sheet.width, height, entries[number].anchor)

        rows = [[e.title, e.about, e.status, str(e.findings), e.stage, str(e.page)] for e in entries]
        sheet.table(columns, rows, size=_INDEX_SIZE, on_row=link)


def _stages_at_road(rows: Sequence[Mapping]) -> str:
    """Return the stage at the road of each event; the lowest and the highest where all would not fit."""
    texts = [f"{r['stage']:.2f}" if math.isfinite(r["stage"]) else "–" for r in rows]
    text = ", ".join(texts)
    known = [float(r["stage"]) for r in rows if math.isfinite(r["stage"])]
    if known and text_width(text, _INDEX_SIZE) > _STAGES_WIDTH:
        return f"{min(known):.2f} to {max(known):.2f}"
    return text if known else "–"


def _roads(table) -> dict[str, tuple[np.ndarray, np.ndarray]]:
    """Return stations and elevations of each crossing's road; its rows stand together."""
    if table is None or not len(table):
        return {}
    names = table["crossing_id"].to_numpy(dtype=object)
    starts = np.flatnonzero(np.concatenate([[True], names[1:] != names[:-1]]))
    ends = [*starts[1:], len(names)]
    x, z = table["station"].to_numpy(dtype=float), table["road_elevation"].to_numpy(dtype=float)
    return {names[a]: (x[a:b], z[a:b]) for a, b in zip(starts, ends, strict=True)}


def _shown(column: str, value: float) -> str:
    """Return a number with four figures, a level of water with three decimals."""
    if not math.isfinite(value):
        return "–"
    return f"{value:.3f}" if column.endswith("stage") else figures(value)


def _is_line(geometry: Any) -> bool:
    return (
        geometry is not None
        and not shapely.is_empty(geometry)
        and bool(np.isfinite(shapely.bounds(geometry)).all())
    )


def _profile(geometry: Any) -> np.ndarray:
    """Return x, y, z, m of the points that have an elevation, shape (n, 4)."""
    if geometry is None:
        return np.zeros((0, 4))
    points = shapely.get_coordinates(geometry, include_z=True, include_m=True)
    return points[np.isfinite(points[:, 2]) & np.isfinite(points[:, 3])]


def _roughness(part: Part) -> str:
    return roughness_text(part.n) + ("†" if part.together else "*" if part.n_differs else "")
