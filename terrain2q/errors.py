"""Every deliberate error and every finding, in one catalogue. Imports nothing of ours.

    Terrain2qError              anything this package says no with
    ├── InputError              an input is wrong; nothing was written (also a ValueError)
    │   ├── InputErrors         several inputs are wrong; each is in `problems`
    │   └── ProfileError        a section's own numbers are wrong
    ├── OutputError             a result cannot be written (also an OSError)
    └── NoAnswerError           the question has no answer; `nearest` says what can be had

An error stops; a :class:`Finding` is noted about one place and the rest goes on. Both carry a code
of :data:`CATALOGUE`, and each code has a heading in ``docs/findings.md``.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from types import MappingProxyType

ERROR, FAILED, DOUBTFUL, NOTE = "error", "failed", "doubtful", "note"
SEVERITIES = (FAILED, DOUBTFUL, NOTE)
"""Severities of findings, the worst first. An ``error`` stops the run and is never a finding."""


@dataclass(frozen=True)
class Kind:
    """What one code of the catalogue means: its usual severity, a title and the remedy."""

    severity: str
    title: str
    remedy: str


CATALOGUE: MappingProxyType[str, Kind] = MappingProxyType({
    # --- errors: the inputs are wrong and nothing was written -------------------------------------
    "file-missing": Kind(ERROR, "A file or folder is not there", "Correct the path; paths are relative to the study file."),
    "file-unreadable": Kind(ERROR, "A file cannot be read", "Check that the file is whole and of the kind expected."),
    "study-not-toml": Kind(ERROR, "The study file is not valid TOML", "Mend the line named; `terrain2q start` writes a valid file to fill in."),
    "key-unknown": Kind(ERROR, "A key the study file does not have", "Use the nearest known key, or delete the line."),
    "key-missing": Kind(ERROR, "A key is needed and not there", "Add the key to the study file or give it as an option."),
    "key-conflict": Kind(ERROR, "Two keys contradict each other", "Keep one of the two."),
    "value-not-allowed": Kind(ERROR, "A value of the wrong type or outside what is allowed", "Give a value as described."),
    "layer-missing": Kind(ERROR, "A file has no such layer", "Name one of the file's layers after `|layer=`."),
    "layer-empty": Kind(ERROR, "A layer has no features", "Give a layer with features."),
    "geometry-kind": Kind(ERROR, "A layer holds the wrong kind of geometry", "Give a layer of the kind named."),
    "field-missing": Kind(ERROR, "A layer or table has no such column", "Name one of the columns listed."),
    "crs-missing": Kind(ERROR, "A layer or raster does not say its coordinate reference system", "Assign the CRS with a GIS before running."),
    "crs-unknown": Kind(ERROR, "A coordinate reference system is not recognised", "Give an authority code such as EPSG:26915."),
    "crs-local": Kind(ERROR, "A coordinate reference system is not tied to the Earth", "Bring the data to a geographic or projected CRS."),
    "transform-missing": Kind(ERROR, "A raster's cells have no exact place on the map", "Warp the raster to a CRS with a GIS (gdalwarp) before running."),
    "elevation-unit-unknown": Kind(ERROR, "The raster does not say the unit of its elevations", 'Set `elevation_unit = "m"`, `"ft"` or `"us-ft"` under [terrain].'),
    "tiles-differ": Kind(ERROR, "Tiles of the terrain do not fit together", "Bring the tiles to one CRS, unit and cell size."),
    "id-duplicate": Kind(ERROR, "Two features carry the same id", "Make the ids unique, or name another id field."),
    "id-missing": Kind(ERROR, "A feature has no id", "Fill in the id, or name another id field."),
    "class-missing": Kind(ERROR, "Land-cover classes are not in the roughness table", "Add a row for each class listed."),
    "class-duplicate": Kind(ERROR, "A class stands twice in the roughness table", "Keep one row for each class."),
    "section-unknown": Kind(ERROR, "No cut line has the id that a table names", "Correct the id, or take the row away."),
    "table-unknown": Kind(ERROR, "No built-in table has this name", "`terrain2q tables` lists them."),
    "library-missing": Kind(ERROR, "A library that is asked for is not installed", "Install what the message names."),
    "scheduler-unreachable": Kind(ERROR, "No scheduler answers at the address", "Start the cluster, or correct the address; without --scheduler this machine does the work."),
    "number-not-positive": Kind(ERROR, "A roughness, slope or discharge is not above zero", "Give a number above zero."),
    "station-decreases": Kind(ERROR, "Stations of a section decrease", "Give the points from left to right; two equal stations make a vertical face."),
    "profile-too-short": Kind(ERROR, "A section has no width", "Give at least two points at different stations."),
    "number-not-finite": Kind(ERROR, "A number is missing or not finite", "Remove the point or fill in the number."),
    "subareas-do-not-cover": Kind(ERROR, "The subareas leave a gap or overlap", "Let each subarea start where the one before ends, from the first station to the last."),
    "station-outside": Kind(ERROR, "A station lies outside the section", "Give a station between the section's ends."),
    "output-exists": Kind(ERROR, "The output folder already holds results", "Set `overwrite = true` under [output], or name another folder."),
    "output-not-writable": Kind(ERROR, "The output cannot be written", "Choose a folder you can write to, with room on the disk."),
    "no-answer": Kind(ERROR, "The question has no answer for this section", "The message gives the nearest value that can be reached."),
    # --- findings: one place, the rest goes on ----------------------------------------------------
    "line-empty": Kind(FAILED, "A cut line has no geometry or no length", "Draw the line again."),
    "line-not-finite": Kind(FAILED, "A cut line has coordinates that are not numbers", "Draw the line again."),
    "line-multipart": Kind(FAILED, "A cut line has several parts", "Join the parts, or give each part its own id."),
    "line-parts-joined": Kind(NOTE, "A cut line came as a multipart of parts that join", "Nothing; store it as a single line to lose this note."),
    "line-off-terrain": Kind(FAILED, "A cut line lies off the terrain", "Move the line or add the tile that is missing."),
    "line-leaves-terrain": Kind(DOUBTFUL, "A cut line runs off the terrain", "Shorten the line or add the tile that is missing."),
    "gap-bridged": Kind(DOUBTFUL, "A short gap in the terrain was bridged by a straight line", "Look at the ground there, or fill the gap in the terrain."),
    "gap-ends-section": Kind(DOUBTFUL, "A gap in the terrain ends the usable part of a section", "Fill the gap in the terrain or draw the line elsewhere."),
    "gap-at-stream": Kind(FAILED, "The terrain has a gap where the stream crosses", "Fill the gap in the terrain or draw the line elsewhere."),
    "direction-unknown": Kind(NOTE, "No stream line tells which way a cut line runs; its drawn direction was kept", "Give stream lines, or make sure the line runs left to right looking downstream."),
    "line-turned": Kind(NOTE, "A cut line was drawn right to left and has been turned", "Nothing; stations now run left to right looking downstream."),
    "line-misses-stream": Kind(DOUBTFUL, "A cut line does not cross any stream", "Lengthen or move the line so that it crosses its stream once."),
    "line-crosses-stream-again": Kind(DOUBTFUL, "A cut line crosses its stream more than once", "Bend or shorten the line so that it crosses once."),
    "line-crosses-streams": Kind(DOUBTFUL, "A cut line crosses more than one stream", "Shorten the line so that it crosses one stream, or accept that the flow is that of one stream."),
    "lines-meet": Kind(DOUBTFUL, "Two cut lines of one stream meet", "Bend or shorten one so that they do not meet."),
    "line-crosses-itself": Kind(DOUBTFUL, "A cut line crosses itself", "Draw the line so that it never comes back over itself."),
    "line-oblique": Kind(NOTE, "A cut line is far from square to its stream", "Turn the line square to the flow; a slanted section is too wide."),
    "line-ends-low": Kind(DOUBTFUL, "A laid-out cut line ends below the height asked for", "Give a larger `width`, or a lower `height` if the flood stays below the line's end; or draw the line by hand."),
    "line-moved": Kind(NOTE, "A laid-out cut line stands a little up- or downstream of its place", "Nothing, if the place will do; else draw the line by hand."),
    "line-left-out": Kind(DOUBTFUL, "No cut line could be laid out at a place", "Draw a line there by hand, if one is needed."),
    "lines-kept": Kind(NOTE, "Cut lines that a person drew or edited were kept", "Nothing; delete a line to have it laid out again."),
    "lines-not-used": Kind(NOTE, "Edited cut lines lie beside the study and are not used", "Set `path` under [cut_lines] in place of `every` and `width` to use them."),
    "stream-unusable": Kind(DOUBTFUL, "A stream line has no geometry, no length or broken coordinates; it was left out", "Draw the stream line again."),
    "stream-gap": Kind(NOTE, "The parts of a stream do not join; stream distances run straight over the gap", "Join the parts in the stream layer."),
    "stream-parts-oppose": Kind(DOUBTFUL, "Parts of a stream run against each other", "Turn the part that runs upstream; streams are drawn downstream."),
    "stream-turned": Kind(NOTE, "A stream was drawn upstream and has been turned", "Look at the stream on the map; draw streams downstream to lose this note."),
    "stream-direction-uncertain": Kind(NOTE, "The ground does not tell which way a stream flows; its drawn direction was kept", "Make sure the stream is drawn downstream."),
    "stream-shifted": Kind(NOTE, "The low line of the ground lies beside the stream line", "Bring the stream line to the channel; the low line was used for the slope only."),
    "stream-fill": Kind(NOTE, "A fill across a stream was taken out of its low line", "Look at the long profile; a crossing or a wrong stream line may be there."),
    "no-low-ground": Kind(FAILED, "A section has no ground below its ends", "Draw the line across the stream, from high ground to high ground."),
    "end-is-lowest": Kind(DOUBTFUL, "The ground falls away at a section's end", "Lengthen the line to high ground."),
    "polygon-mended": Kind(NOTE, "An invalid polygon was mended", "Mend the polygon in its source."),
    "polygon-dropped": Kind(DOUBTFUL, "A polygon could not be used", "Mend the polygon in its source."),
    "class-empty": Kind(DOUBTFUL, "Land-cover polygons have no class; they count as gaps", "Fill in the class."),
    "column-ignored": Kind(DOUBTFUL, "A table has a column that is not used but looks like one that would be", "Correct the spelling, or rename the column."),
    "cover-gap": Kind(DOUBTFUL, "The land cover has a gap under a section; the default roughness was used", "Fill the gap in the land cover, or check the default."),
    "cover-gap-no-default": Kind(FAILED, "The land cover has a gap under a section and there is no default roughness", "Fill the gap, or set `default_n` under [land_cover]."),
    "cover-overlap": Kind(NOTE, "Land-cover polygons overlap under a section", "Mend the overlap; the higher roughness was used."),
    "channel-not-found": Kind(DOUBTFUL, "No channel could be told apart in the profile", "Draw a channel polygon, or look at the section; the lowest ground was used."),
    "channel-by-polygon-missing": Kind(DOUBTFUL, "No channel polygon meets this section", "Extend the channel polygon, or set `banks = \"auto\"`."),
    "channel-in-pieces": Kind(NOTE, "The channel polygon meets a section more than once", "Look at the section; the piece at the stream was taken."),
    "channel-off-stream": Kind(DOUBTFUL, "The stream crosses a section outside its channel polygon", "Bring channel polygon and stream line together; the nearest piece was taken."),
    "slope-missing": Kind(FAILED, "A cut line has no slope", "Fill in the slope field, or set `value` under [slope]."),
    "slope-not-positive": Kind(FAILED, "A cut line's slope is not above zero", "Correct the slope field; where the slope is that of the stream, look at its long profile or lengthen `window`."),
    "slope-steep": Kind(DOUBTFUL, "The slope is steeper than normal depth is usually trusted at", "Check the slope; above 4 % flow is seldom near uniform."),
    "slope-flat": Kind(DOUBTFUL, "The slope is so flat that the stage is very sensitive to it", "Check the slope and look for backwater."),
    "slope-uncertain": Kind(DOUBTFUL, "The slope from the ground is uncertain", "Lengthen `window` under [slope], or give a surveyed slope."),
    "water-in-channel": Kind(NOTE, "The terrain seems to show water, not the bed, in the channel", "Say what lies below it under [submerged]; without, the stage is on the high side."),
    "bed-below-water": Kind(NOTE, "The channel was deepened below the water that the terrain shows", "Check the depth against a survey."),
    "water-not-found": Kind(NOTE, "No level water was found in a channel that was to be deepened", "Look at the section; where the channel is narrower than about four stations, lower its bed in the terrain or give a smaller `spacing`."),
    "flow-missing": Kind(FAILED, "No design flow applies to a section", "Add a row for this stream or section to the flows."),
    "flow-place-unknown": Kind(DOUBTFUL, "Rows of the flows name a place that the study does not have", "Correct the name, or take the row away."),
    "drainage-area-missing": Kind(DOUBTFUL, "A section has no drainage area where one is needed", "Fill in the field of the cut lines."),
    "drainage-area-far": Kind(DOUBTFUL, "A discharge was carried over to a very different drainage area", "Use a flow estimate nearer to the section; a ratio of areas from 0.5 to 1.5 is common practice."),
    "above-section-ends": Kind(DOUBTFUL, "Water stands above an end of the section", "Lengthen the line to higher ground; the stage is on the high side."),
    "bank-passed": Kind(NOTE, "Water passes a bank into lower ground behind it", "Follow the water on the map; the channel's stage stays at the bank's top while the hollow fills."),
    "several-stages": Kind(DOUBTFUL, "Several stages carry this discharge; the highest was taken", "Divide the section where the shelf begins."),
    "supercritical": Kind(DOUBTFUL, "Normal flow is supercritical", "Check slope and roughness; use the critical stage where the flow cannot stay shallow."),
    "velocity-high": Kind(DOUBTFUL, "The mean velocity is above 6 m/s", "Check slope, roughness and discharge."),
    "alpha-high": Kind(DOUBTFUL, "The velocity coefficient alpha is above 2", "Check the division into subareas; the velocities differ widely."),
    "n-outside-range": Kind(DOUBTFUL, "A roughness lies outside the published range of its class", "Check the class and its n, or state in the table's source why it differs."),
    "n-low-for-slope": Kind(DOUBTFUL, "The roughness is far below what steep streams show", "Raise n, or show from an observed flood that the channel is so smooth."),
    "shelf-undivided": Kind(DOUBTFUL, "A wide shelf shares a subarea with deeper water", "Let a subarea begin at the shelf's edge."),
    "subarea-sliver": Kind(NOTE, "A subarea is a sliver", "Mend the edges of the land cover or the channel polygon there."),
    "hollow-reached": Kind(NOTE, "Water reaches low ground that the section's own ridges cut off", "Look at the map up- and downstream; draw the section so that it meets the low ground, or accept the stage with it."),
    "water-rises-downstream": Kind(DOUBTFUL, "Water rises from one section to the next one downstream", "Check slope and roughness of both sections, or look for backwater, which normal depth does not know."),
    "extent-cut-off": Kind(DOUBTFUL, "The flood extent is cut off where the sections end", "Lengthen the cut lines to high ground, or lay another between them."),
    "extent-without-section": Kind(DOUBTFUL, "A section is left out of the flood extent", "Mend the section, or draw it across a stream; the extent runs from the section before it to the one after it."),
    "extent-one-section": Kind(DOUBTFUL, "A stream has fewer than two sections with an answer, so no extent", "Draw more cut lines across the stream."),
    "elevation-unit-contradicted": Kind(DOUBTFUL, "The study and the raster state different elevation units; the study's was used", "Remove `elevation_unit`, or correct the raster."),
    "crossing-off-stream": Kind(FAILED, "A crossing is not at a stream", "Move the point to its stream, or add the stream."),
    "crossings-none": Kind(FAILED, "No road meets a stream", "Look at roads and streams on one map: both must cover the same place, and their CRS must be right; or give points with `path`."),
    "crossing-unknown": Kind(DOUBTFUL, "No crossing has the id that the flows name; these rows are not used", "Correct the id in the flows, or take the row away; of crossings that are merged only one keeps its id."),
    "crossings-merged": Kind(NOTE, "Crossings close to each other are counted as one", "Nothing; or set `merge` under [crossings] to a smaller distance."),
    "road-grazes-stream": Kind(DOUBTFUL, "A road follows a stream and meets it without clearly passing over it", "Look at the map; correct the road or the stream line where they are drawn into each other."),
    "road-in-tunnel": Kind(NOTE, "A road is in a tunnel where it meets the stream", "Nothing; there is no road for water to pass here."),
    "road-line-missing": Kind(DOUBTFUL, "No road line is near a crossing", "Give road lines with `roads` under [crossings]."),
    "deck-bridged": Kind(DOUBTFUL, "The road's surface is missing over the stream and was bridged from abutment to abutment", "Look at the picture; where there is a bridge, survey its low point, or mark it with a field `bridge`."),
    "crest-doubtful": Kind(DOUBTFUL, "The crest of a road cannot be told well from the ground", "Survey the crest and give it with `crest_field`."),
    "crest-at-end": Kind(DOUBTFUL, "A road goes on falling where the search for its crest ends", "Look along the road; set `reach` under [crossings] to a larger distance."),
    "crest-survey-differs": Kind(DOUBTFUL, "The surveyed crest differs from the one in the ground", "Check the survey, its datum and its unit; leave the field empty where there is none."),
    "field-not-number": Kind(DOUBTFUL, "A field of a crossing holds something other than a usable number; it was left out", "Write a plain number without unit or thousands separator, or leave the field empty."),
    "overflow-aside": Kind(NOTE, "Water would first pass the road away from the stream", "Look at the place; a sag aside decides when the road is closed."),
    "section-cut-by-road": Kind(DOUBTFUL, "No place for a section is clear of the fills of roads", "Draw a section there by hand, from high ground to high ground."),
    "no-opening-passes": Kind(NOTE, "No opening within the section passes the event below the stage allowed", "Nothing; the whole valley is not enough at that stage."),
    "weir-drowned": Kind(NOTE, "The tailwater stands above the crest, so the weir's flow is too high", "Use the flow over the road as an upper bound."),
    "backwater": Kind(DOUBTFUL, "Water downstream may hold the stage up", "Find the stage of the water downstream and take the higher one."),
    "culvert-ponds": Kind(DOUBTFUL, "Water ponds behind a high fill, which normal depth does not know", "Route the event's water through the room behind the fill and the culvert."),
    "tidal": Kind(DOUBTFUL, "The tide reaches a crossing", "Find the stage of the tide and take the higher one."),
    "crossing-failed": Kind(FAILED, "A crossing could not be worked out", "See the message; please report it if the inputs look right."),
    "bench-not-possible": Kind(FAILED, "A bench cannot be cut as the study asks", "Set `base` below the allowed stage, or give `stage` under [bench]."),
    "width-not-enough": Kind(FAILED, "No bench within the section passes the flow", "Raise `stage`, lower `base`, smooth the bench, or draw the cut line longer."),
    "width-at-jump": Kind(NOTE, "The required width lies where the discharge jumps", "Look at the curve of width and discharge; a little less width passes clearly less."),
    "observation-no-answer": Kind(FAILED, "No roughness reproduces an observation", "Check its stage, discharge and section; the message gives the nearest discharge that can be had."),
    "section-failed": Kind(FAILED, "A section could not be worked out", "See the message; please report it if the inputs look right."),
})  # fmt: skip


class Terrain2qError(Exception):
    """Anything this package says no with: what, where, how to fix it, and a code of the catalogue.

    Parameters
    ----------
    code : str
        A code of :data:`CATALOGUE`.
    what : str
        What is wrong, with the value.
    where : str
        The file, layer, feature or argument.
    fix : str, optional
        What to do; the catalogue's remedy where empty.
    """

    def __init__(self, code: str, what: str, *, where: str = "", fix: str = "") -> None:
        if code not in CATALOGUE:
            raise KeyError(f"{code!r} is not in the catalogue")
        self.code, self.what, self.where, self.fix = code, what, where, fix or CATALOGUE[code].remedy
        super().__init__(code, what)

    def __str__(self) -> str:
        lines = [f"{self.what}  [{self.code}]"]
        if self.where:
            lines.append(f"  where: {self.where}")
        lines.append(f"  fix:   {self.fix}")
        return "\n".join(lines)

    def __reduce__(self):
        return (_rebuild, (type(self), self.__dict__.copy()))

    def at(self, where: str) -> Terrain2qError:
        """Return the same error with the place put in front of where it was seen."""
        other = _rebuild(type(self), self.__dict__.copy())
        other.where = f"{where}: {self.where}" if self.where else where
        return other

    def as_dict(self) -> dict[str, str]:
        """Return the error as plain text fields, for ``--json``."""
        return {"code": self.code, "what": self.what, "where": self.where, "fix": self.fix}


def _rebuild(kind: type[Terrain2qError], state: dict) -> Terrain2qError:
    error = kind.__new__(kind)
    error.__dict__.update(state)
    error.args = (state["code"], state["what"])
    return error


class InputError(Terrain2qError, ValueError):
    """An input is wrong; nothing was written."""


class InputErrors(InputError):
    """Several inputs are wrong and are reported together; nothing was written.

    Code, place and remedy are those of the first; the text lists all.

    Attributes
    ----------
    problems : tuple of InputError
        At least two, in the order met.
    """

    def __init__(self, problems) -> None:
        self.problems: tuple[InputError, ...] = tuple(problems)
        first = self.problems[0]
        super().__init__(first.code, first.what, where=first.where, fix=first.fix)

    def __str__(self) -> str:
        return "\n".join([f"{len(self.problems)} problems", *map(str, self.problems)])

    def at(self, where: str) -> InputErrors:
        """Return the same errors with the place put in front of where each was seen."""
        return InputErrors(problem.at(where) for problem in self.problems)

    def as_dict(self) -> dict:
        """Return the first error as plain text fields, and all of them under ``problems``."""
        return super().as_dict() | {"problems": [problem.as_dict() for problem in self.problems]}


def raise_together(problems) -> None:
    """Raise what is in `problems`: nothing where it is empty, the one, or all as one :class:`InputErrors`."""
    problems = list(problems)
    if len(problems) == 1:
        raise problems[0]
    if problems:
        raise InputErrors(problems)


class ProfileError(InputError):
    """A section's own numbers are wrong."""


class OutputError(Terrain2qError, OSError):
    """A result cannot be written."""


class NoAnswerError(Terrain2qError, ArithmeticError):
    """The question has no answer for this section.

    Attributes
    ----------
    nearest : float
        The nearest value that can be reached (NaN where there is none); `what` says of which quantity.
    """

    def __init__(self, what: str, *, nearest: float = float("nan"), where: str = "", fix: str = "") -> None:
        super().__init__("no-answer", what, where=where, fix=fix)
        self.nearest = nearest


@dataclass(frozen=True)
class Finding:
    """One thing a reviewer must know about one place.

    Attributes
    ----------
    code : str
        A code of :data:`CATALOGUE`.
    message : str
        What was found here, with the numbers.
    layer, feature_id : str
        The layer of the inputs or results, and the feature.
    severity, remedy : str
        From the catalogue, unless stated.
    x, y : float
        The place in the terrain's CRS, NaN where there is none.
    """

    code: str
    message: str
    layer: str = ""
    feature_id: str = ""
    severity: str = ""
    remedy: str = ""
    x: float = float("nan")
    y: float = float("nan")

    def __post_init__(self) -> None:
        kind = CATALOGUE[self.code]
        if not self.severity:
            object.__setattr__(self, "severity", kind.severity)
        if not self.remedy:
            object.__setattr__(self, "remedy", kind.remedy)
        if self.severity not in SEVERITIES:
            raise ValueError(f"a finding's severity is one of {SEVERITIES}, not {self.severity!r}")

    def at(self, x: float, y: float) -> Finding:
        """Return the same finding with a place."""
        return replace(self, x=float(x), y=float(y))


def worst(severities) -> str:
    """Return the worst of some severities, or an empty string where there is none.

    Examples
    --------
    >>> worst(["note", "doubtful"])
    'doubtful'
    """
    found = set(severities)
    return next((s for s in SEVERITIES if s in found), "")


def worst_first(findings: Iterable) -> list:
    """Return findings in order of severity, within each at first one for each feature.

    Parameters
    ----------
    findings : iterable
        Of anything with ``severity`` and ``feature_id``.
    """
    ordered = sorted(findings, key=lambda f: SEVERITIES.index(f.severity))
    seen: set[tuple[str, str]] = set()
    first, later = [], []
    for finding in ordered:
        feature = (finding.severity, finding.feature_id)
        (later if feature in seen else first).append(finding)
        seen.add(feature)
    return sorted(first + later, key=lambda f: SEVERITIES.index(f.severity))
