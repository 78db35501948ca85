"""What lies below the water that the terrain shows in a section's channel."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from terrain2q.errors import Finding, NoAnswerError
from terrain2q.ground.cover import SubareaSpec
from terrain2q.ground.cut_lines import CutLine
from terrain2q.ground.streams import length_text
from terrain2q.ground.terrain import Profile
from terrain2q.hydraulics.submerged import Water, deepened, depth_for_flow, find_water
from terrain2q.units import UnitSystem

_LAYER = "sections"


@dataclass(frozen=True)
class Submerged:
    """How deep the bed lies below the water: one of three ways, in SI.

    Attributes
    ----------
    shape : str
        ``rectangle``, ``triangle`` or ``parabola``.
    depth : float or None
        The same everywhere, m.
    coefficient, exponent : float or None
        Depth [m] = coefficient · area^exponent.
    area_field : str or None
        Field of the cut lines with the area.
    survey_flow : float or None
        Discharge on the survey day, m³/s.
    """

    shape: str = "parabola"
    depth: float | None = None
    coefficient: float | None = None
    exponent: float | None = None
    area_field: str | None = None
    survey_flow: float | None = None

    def depth_at(
        self, line: CutLine, water: Water, specs: Sequence[SubareaSpec], slope: float, units: UnitSystem
    ) -> tuple[float, str, Finding | None]:
        """Return the depth below the water [m], how it was had, and a finding; NaN where it cannot be had."""
        if self.depth is not None:
            return self.depth, "as stated", None
        if self.coefficient is not None:
            area = drainage_area(line, self.area_field)
            if not np.isfinite(area):
                given = line.attributes.get(self.area_field)
                message = f"the field {self.area_field!r} holds {given!r}: the depth below water is not known"
                return np.nan, "", Finding("drainage-area-missing", message, "cut_lines", line.section_id)
            return self.coefficient * area**self.exponent, f"by drainage area {area:g}", None
        try:
            depth = depth_for_flow(
                water.width, self.survey_flow, lambda d: _roughness(specs, water, d), slope, self.shape
            )
        except NoAnswerError as error:
            return np.nan, error.what, None
        flow = f"{self.survey_flow * units.per_si('flow'):.3g} {units.symbol('flow')}"
        n = _roughness(specs, water, depth)
        return depth, f"which carries the survey day's {flow} at n {n:.3g}", None


def drainage_area(line: CutLine, name: str) -> float:
    """Return the drainage area of a cut line in the unit of its field; NaN where it holds none above zero."""
    try:
        area = float(line.attributes.get(name))
    except (TypeError, ValueError):
        return float("nan")
    return area if np.isfinite(area) and area > 0.0 else float("nan")


def with_bed(
    line: CutLine,
    profile: Profile,
    channel: tuple[float, float] | None,
    specs: Sequence[SubareaSpec],
    slope: float,
    submerged: Submerged | None,
    units: UnitSystem,
    find: Callable[..., Water | None] = find_water,
) -> tuple[Profile, list[Finding]]:
    """Return a section's profile with a bed where the terrain shows water, and what is to know about it.

    Parameters
    ----------
    line : CutLine
    profile : Profile
        Without gaps.
    channel : (float, float) or None
        Tops of bank.
    specs : sequence of SubareaSpec
        The subareas, for the roughness below the water.
    slope : float
    submerged : Submerged or None
        None where the study does not say; the profile then stays as it is.
    units : UnitSystem
        For messages.
    find : callable
        What finds the water.
    """
    water = find(profile.stations, profile.elevations, channel)
    if water is None:
        if submerged is None:
            return profile, []
        low = int(np.argmin(profile.elevations))
        message = "the lowest ground is not level, as water would be, so no bed was put below it"
        finding = Finding("water-not-found", message, _LAYER, line.section_id)
        return profile, [finding.at(profile.x[low], profile.y[low])]
    if submerged is None:
        return profile, [water_in_channel(line.section_id, profile, water, units)]
    middle = _middle_of(profile, water)

    def found(code: str, message: str) -> Finding:
        return Finding(code, message, _LAYER, line.section_id).at(profile.x[middle], profile.y[middle])

    depth, how, missing = submerged.depth_at(line, water, specs, slope, units)
    if not np.isfinite(depth):
        why = f" ({how})" if how else ""
        notes = [water_in_channel(line.section_id, profile, water, units, why)]
        if missing is not None:
            notes.append(missing.at(profile.x[middle], profile.y[middle]))
        return profile, notes
    station, elevation = deepened(profile.stations, profile.elevations, water, depth, submerged.shape)
    x, y = profile.place_at(station)
    vertices = profile.stations[profile.is_vertex]
    bed = Profile(station, elevation, x, y, np.isin(station, vertices))
    message = (
        f"water {_where(water, units)}: its bed was put {length_text(depth, units)} below it, {how}, "
        f"as a {submerged.shape}; z of the section is this bed there"
    )
    return bed, [found("bed-below-water", message)]


def water_in_channel(
    section_id: str, profile: Profile, water: Water, units: UnitSystem, why: str = ""
) -> Finding:
    """Return the finding that a section's lowest ground is water whose depth is not known."""
    middle = _middle_of(profile, water)
    message = (
        f"the ground is level within {length_text(water.within, units)} {_where(water, units)}, as water is; "
        f"it was taken for the bed, so the stage is on the high side{why}"
    )
    return Finding("water-in-channel", message, _LAYER, section_id).at(profile.x[middle], profile.y[middle])


def _middle_of(profile: Profile, water: Water) -> int:
    return int(np.argmin(np.abs(profile.stations - 0.5 * (water.start + water.end))))


def _where(water: Water, units: UnitSystem) -> str:
    level = f"{water.surface * units.per_si('length'):.2f} {units.symbol('length')}"
    start, end = length_text(water.start, units), length_text(water.end, units)
    return f"from station {start} to {end} at {level}"


def _roughness(specs: Sequence[SubareaSpec], water: Water, depth: float) -> float:
    """Return the mean n between the water's edges, by width, where the water has a depth."""
    width = np.array([max(min(s.end, water.end) - max(s.start, water.start), 0.0) for s in specs])
    n = np.array([_n_at(s, depth) for s in specs])
    return float((width * n).sum() / width.sum())


def _n_at(spec: SubareaSpec, depth: float) -> float:
    falls = spec.falling
    if falls is None:
        return spec.n
    return float(np.interp(depth, [falls.shallow_depth, falls.deep_depth], [falls.shallow, falls.deep]))
