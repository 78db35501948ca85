"""The slope of each section: one value, a field of the cut lines, or the ground along the stream."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

import numpy as np
import shapely

from terrain2q.errors import Finding
from terrain2q.ground.cut_lines import CutLine
from terrain2q.ground.stream_slope import SlopeEstimate, robust_slope
from terrain2q.ground.streams import StreamNetwork
from terrain2q.units import SI, UnitSystem

if TYPE_CHECKING:
    from terrain2q.ground.low_line import LowLine, LowLines

WINDOW, WINDOW_CELLS = 304.8, 60.0
"""Metres (1000 ft), and cells at least, over which a stream's slope is taken where nothing is said."""

UNCERTAIN = 0.5
"""Width of the interval over the slope that is worth a finding: a slope 25 % off is a depth 7 to 9 % off."""

FLAT = 1e-4
"""Slope below which backwater and errors of the ground usually rule the stage (common practice)."""


@dataclass(frozen=True)
class SlopeAnswer:
    """The slope of one section: NaN where there is none, where it comes from, and what to know about it."""

    slope: float
    source: str
    findings: tuple[Finding, ...] = ()


class Slopes(Protocol):
    """What gives sections their slope."""

    def of(self, line: CutLine) -> SlopeAnswer:
        """Return the slope of a cut line."""
        ...


@dataclass(frozen=True)
class OneSlope:
    """One slope for every section."""

    value: float

    def of(self, line: CutLine) -> SlopeAnswer:
        """Return the slope of a cut line."""
        return _judged(self.value, "slope.value", line)


@dataclass(frozen=True)
class FieldSlopes:
    """A field of the cut lines."""

    field: str

    def of(self, line: CutLine) -> SlopeAnswer:
        """Return the slope of a cut line."""
        source = f"field {self.field}"
        given = line.attributes.get(self.field)
        try:
            slope = float(given)
        except (TypeError, ValueError):
            slope = float("nan")
        if not np.isfinite(slope):
            message = f"the slope field {self.field!r} holds {given!r}"
            return _none(source, Finding("slope-missing", message, "cut_lines", line.section_id))
        if slope <= 0:
            message = f"the slope field {self.field!r} holds {slope:g}"
            return _none(source, Finding("slope-not-positive", message, "cut_lines", line.section_id))
        return _judged(slope, source, line)


@dataclass(frozen=True)
class StreamSlope:
    """The slope of the stream at one section.

    Attributes
    ----------
    chain : int
        The stream's chain in its network.
    distance : float
        Stream distance of the section on it, m.
    estimate : SlopeEstimate or None
        None where too little ground is known. Its interval spans the slope over twice the window too.
    window : float
        Its length, m.
    """

    chain: int
    distance: float
    estimate: SlopeEstimate | None
    window: float


class StreamPlaces:
    """Where cut lines meet the chains of their streams.

    Parameters
    ----------
    network : StreamNetwork
    """

    def __init__(self, network: StreamNetwork) -> None:
        self._network = network
        self._pieces: dict[str, list[int]] = {}
        for piece, name in enumerate(network.chain_stream[network.piece_chain] if len(network) else ()):
            self._pieces.setdefault(str(name), []).append(piece)

    def of(self, line: CutLine) -> tuple[int, float] | None:
        """Return chain and stream distance [m] where a cut line meets its stream; None where it has none."""
        if not line.usable or line.stream not in self._pieces:
            return None
        network, mine = self._network, np.array(self._pieces[line.stream])
        shape = shapely.LineString(np.column_stack([line.x, line.y]))
        target = shape.interpolate(line.crossing) if np.isfinite(line.crossing) else shape
        piece = mine[np.argmin(shapely.distance(network.pieces[mine], target))]
        nearest = shapely.get_point(shapely.shortest_line(network.pieces[piece], target), 0)
        chain = int(network.piece_chain[piece])
        along = network.locate(np.array([piece]), np.array([nearest]))
        return chain, float(network.distance_at(np.array([chain]), along)[0])


class StreamSlopes:
    """The slope of the ground along the stream, over a window with the section in its middle.

    Parameters
    ----------
    lines : sequence of CutLine
        Every cut line that will be asked for.
    low_lines : LowLines
    window : float, optional
        m; :data:`WINDOW`, and :data:`WINDOW_CELLS` at least, where None.
    cell : float
        Size of a cell, m.
    units : UnitSystem
        For the words of source and findings.

    Attributes
    ----------
    window : float
        m.
    found : dict of str to StreamSlope
        By section.
    """

    def __init__(
        self,
        lines: Sequence[CutLine],
        low_lines: LowLines,
        window: float | None,
        cell: float,
        units: UnitSystem = SI,
    ) -> None:
        self.window = float(window) if window is not None else max(WINDOW, WINDOW_CELLS * cell)
        self.low_lines, self._units = low_lines, units
        self.found: dict[str, StreamSlope] = {}
        places = StreamPlaces(low_lines.network)
        for line in lines:
            place = places.of(line)
            if place is not None:
                self.found[line.section_id] = self._estimate(*place)

    @property
    def findings(self) -> list[Finding]:
        """What is to know about the streams themselves."""
        return list(self.low_lines.findings)

    def _estimate(self, chain: int, distance: float) -> StreamSlope:
        along, bed, length = self.low_lines.about(chain, distance, self.window)
        estimate = robust_slope(along, bed)
        if estimate is not None:
            twice = robust_slope(*self.low_lines.about(chain, distance, 2.0 * self.window)[:2])
            # A window within one pool is level and sure of it; one twice as long tells.
            if twice is not None:
                estimate = estimate.spanning(twice.slope)
        return StreamSlope(chain, distance, estimate, length)

    def of(self, line: CutLine) -> SlopeAnswer:
        """Return the slope of a cut line."""
        found = self.found.get(line.section_id)
        factor, unit = self._units.per_si("length"), self._units.symbol("length")
        if found is None:
            message = "the section has no stream to take its slope from"
            return _none("stream", Finding("slope-missing", message, "cut_lines", line.section_id))
        source = f"stream, window {found.window * factor:.0f} {unit}"
        estimate = found.estimate
        if estimate is None:
            over = f"{found.window * factor:.0f} {unit}"
            message = f"too little ground is known along stream {line.stream} over {over}"
            return _none(source, Finding("slope-missing", message, "cut_lines", line.section_id))
        interval = f"90 % interval {_shown(estimate.low)} to {_shown(estimate.high)}"
        source = f"{source}, {interval}"
        if estimate.slope <= 0.0:
            message = (
                f"the ground along stream {line.stream} does not fall: slope {_shown(estimate.slope)} over "
                f"{found.window * factor:.0f} {unit}, {interval}"
            )
            return _none(source, Finding("slope-not-positive", message, "cut_lines", line.section_id))
        answer = _judged(estimate.slope, source, line)
        if estimate.high - estimate.low > UNCERTAIN * estimate.slope:
            message = (
                f"the slope of stream {line.stream} is {_shown(estimate.slope)}, {interval}, over "
                f"{found.window * factor:.0f} {unit}"
            )
            finding = Finding("slope-uncertain", message, "sections", line.section_id)
            return SlopeAnswer(answer.slope, source, (*answer.findings, finding))
        return answer

    def low_line_of(self, section_id: str) -> LowLine | None:
        """Return the low line of the chain that a section crosses; None where there is none."""
        found = self.found.get(section_id)
        return None if found is None else self.low_lines.of(found.chain)


def _shown(slope: float) -> str:
    return f"{slope:.2g}" if abs(slope) < 0.001 else f"{slope:.4f}"


def _none(source: str, finding: Finding) -> SlopeAnswer:
    return SlopeAnswer(float("nan"), source, (finding,))


def _judged(slope: float, source: str, line: CutLine) -> SlopeAnswer:
    findings = ()
    if slope < FLAT:
        findings = (Finding("slope-flat", f"the slope is {slope:.2g}", "sections", line.section_id),)
    return SlopeAnswer(float(slope), source, findings)
