"""Section and Subarea: a profile with roughness, and the questions an engineer asks of it."""

from __future__ import annotations

import importlib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise

import numpy as np
from numpy.typing import ArrayLike, NDArray

from terrain2q.errors import InputError, NoAnswerError, ProfileError
from terrain2q.hydraulics.banks import find_banks
from terrain2q.hydraulics.conveyance import froude_number, velocity_coefficients
from terrain2q.hydraulics.divided import DividedProfile, Roughness, Wet
from terrain2q.hydraulics.paths import Path, flow_paths
from terrain2q.hydraulics.wetted import (
    Ground,
    check_profile,
    cut_at,
    foot_of,
    segment_subareas,
    snapped,
    without_outer_faces,
)
from terrain2q.units import unit_system

Floats = NDArray[np.float64]

CHANNEL = "channel"
ZONES = ("left floodplain", CHANNEL, "right floodplain")
COMPOSITES = ("divide", "horton", "lotter", "pavlovskii")

RATING_COLUMNS = (
    "section_id", "stage", "depth", "discharge", "flow_area", "wetted_perimeter", "hydraulic_radius",
    "top_width", "mean_velocity", "froude", "conveyance", "alpha", "beta",
)  # fmt: skip

_TELLING_RISE = 0.01
"""A rating shows a bank's top twice where the hollow behind it adds more than this share of discharge."""


@dataclass(frozen=True)
class DepthRoughness:
    """Manning's n that falls with depth: straight between two depths, level beyond them.

    Attributes
    ----------
    shallow, deep : float
        n at and below `shallow_depth`, and at and above `deep_depth` [s/m^(1/3)]; 0 < deep <= shallow.
    shallow_depth, deep_depth : float
        Depth over the lowest ground that water has reached in the subarea, in the section's unit of
        length; 0 <= shallow_depth < deep_depth.
    """

    shallow: float
    shallow_depth: float
    deep: float
    deep_depth: float

    def __post_init__(self) -> None:
        _positive("shallow n", self.shallow, "roughness")
        _positive("deep n", self.deep, "roughness")
        if self.deep > self.shallow or not 0 <= self.shallow_depth < self.deep_depth < np.inf:
            raise InputError(
                "value-not-allowed",
                f"n {self.shallow:g} at depth {self.shallow_depth:g}, {self.deep:g} at {self.deep_depth:g}",
                where="roughness",
                fix="n falls (or stays) as depth grows: give the shallow depth and its n first",
            )


@dataclass(frozen=True)
class Subarea:
    """A stretch of a section with one roughness.

    Parameters
    ----------
    start, end : float
        Stations, start < end.
    n : float or DepthRoughness
        Manning's roughness [s/m^(1/3)], > 0; used unchanged in both unit systems.
    label : str
        What covers the ground, for tables and plots.
    zone : str
        ``left floodplain``, ``channel`` or ``right floodplain``; empty where not told apart.

    Raises
    ------
    InputError
        ``number-not-positive``, ``number-not-finite`` or ``value-not-allowed``.
    """

    start: float
    end: float
    n: float | DepthRoughness
    label: str = ""
    zone: str = ""

    def __post_init__(self) -> None:
        where = f"subarea {self.label!r} from {self.start} to {self.end}"
        if not np.isfinite([self.start, self.end]).all():
            raise InputError("number-not-finite", "a limit is not a number", where=where)
        if not self.start < self.end:
            raise InputError(
                "value-not-allowed", "the subarea has no width", where=where, fix="let start be less than end"
            )
        if not isinstance(self.n, DepthRoughness):
            _positive("n", self.n, where)
        if self.zone and self.zone not in ZONES:
            raise InputError(
                "value-not-allowed",
                f"zone is {self.zone!r}",
                where=where,
                fix="use one of: " + ", ".join(ZONES),
            )


@dataclass(frozen=True)
class FlowPath:
    """A stretch of a section with one water level.

    Attributes
    ----------
    start, end : float
        Stations of the water's edges.
    stage : float
        Elevation of the water surface in it.
    discharge, flow_area : float
        What it carries, and its area.
    """

    start: float
    end: float
    stage: float
    discharge: float
    flow_area: float


@dataclass(frozen=True)
class Geometry:
    """Wetted geometry at one or many stages; arrays have the shape of `stage`.

    `subarea_area`, `subarea_perimeter` and `subarea_width` have one more axis, over subareas.
    """

    flow_area: Floats
    wetted_perimeter: Floats
    top_width: Floats
    hydraulic_radius: Floats
    hydraulic_depth: Floats
    subarea_area: Floats
    subarea_perimeter: Floats
    subarea_width: Floats


@dataclass(frozen=True)
class FlowState:
    """A discharge in a section: the stage, every path, and the hydraulics of path by subarea.

    Attributes
    ----------
    discharge, slope, stage : float
    at_bank : bool
        The stage is a bank's top and the hollow behind it is filling.
    stages : tuple of float
        Every stage that carries the discharge, from the lowest; `stage` is the highest.
    paths : tuple of Path
        The channel's first.
    """

    discharge: float
    slope: float
    stage: float
    at_bank: bool
    stages: tuple[float, ...]
    paths: tuple[Path, ...]

    @property
    def parts(self) -> Wet:
        """Hydraulics of every subarea in every path, each shape (1, paths times subareas)."""
        return Wet(*(
            np.concatenate([getattr(p.wet, name) for p in self.paths], axis=1)
            for name in ("area", "perimeter", "width", "n", "conveyance")
        ))  # fmt: skip

    @property
    def above_ends(self) -> tuple[bool, bool]:
        """Whether water stands above the left and the right end of the section."""
        return any(p.at_left_end for p in self.paths), any(p.at_right_end for p in self.paths)


class Section:
    """A station-elevation profile with its subareas.

    Parameters
    ----------
    stations, elevations : array_like, shape (m,)
        Left to right looking downstream. Stations never decrease; two equal stations make a vertical
        face, which at a limit of subareas belongs to the deeper side.
    subareas : sequence of Subarea
        From left to right, each starting where the one before ends, together covering the profile.
    units : str
        ``si`` (m, m³/s) or ``us`` (ft, ft³/s): the units of everything given and answered.
    connected : bool
        Only ground that water can reach from the channel counts. False lets water stand in every hollow.
    origin : float, optional
        Station where the stream crosses.
    n : float, optional
        In place of `subareas`: one roughness everywhere.
    composite : str
        How the subareas of the ``channel`` zone act together: ``divide`` (each by itself), or one
        composite n by ``horton``, ``lotter`` or ``pavlovskii``.
    section_id : str
        A name for tables.

    Raises
    ------
    ProfileError, InputError

    Notes
    -----
    Water spreads from the low point of the channel: the lowest ground of the ``channel`` zone, else
    that of the channel about `origin`, else the lowest ground of all. Water above an end of the
    section stands against an imagined wall without friction (:meth:`water_above_ends`).

    Flow is uniform: the energy slope is the slope given. Each subarea has its own roughness, area
    and wetted perimeter; the face between two subareas adds no perimeter; conveyances add up (Chow
    1959, section 6-5).

    At a stage equal to the top of a bank, :meth:`geometry`, :meth:`conveyance` and
    :meth:`discharge` give the water just before it passes the bank.

    Examples
    --------
    A triangular main channel with a berm (Cengel and Cimbala, Example 13-4: 84.8 m³/s):

    >>> s = Section([0, 0, 3, 6, 14, 14], [5, 3, 0, 3, 3, 5],
    ...             [Subarea(0, 6, 0.03), Subarea(6, 14, 0.05)])
    >>> round(s.discharge(5.0, 0.003), 1)
    84.9
    """

    def __init__(
        self,
        stations: ArrayLike,
        elevations: ArrayLike,
        subareas: Sequence[Subarea] | None = None,
        units: str = "si",
        connected: bool = True,
        origin: float | None = None,
        *,
        n: float | DepthRoughness | None = None,
        composite: str = "divide",
        section_id: str = "",
    ) -> None:
        x, z = check_profile(stations, elevations)
        self.stations, self.elevations = x, z
        self.stations.flags.writeable = self.elevations.flags.writeable = False
        self.system = unit_system(units)
        self.connected, self.origin, self.section_id = bool(connected), origin, section_id
        if (n is None) == (subareas is None):
            raise InputError(
                "key-conflict", "give either subareas or one n", where="Section", fix="give one of the two"
            )
        if subareas is None:
            subareas = [Subarea(float(x[0]), float(x[-1]), n)]
        self.subareas = _check_cover(tuple(subareas), x)
        if composite not in COMPOSITES:
            raise InputError(
                "value-not-allowed",
                f"composite is {composite!r}",
                where="Section",
                fix="use one of: " + ", ".join(COMPOSITES),
            )
        self.composite = composite
        if origin is not None and not x[0] <= origin <= x[-1]:
            raise InputError(
                "station-outside", f"origin {origin:g} lies outside {x[0]:g} to {x[-1]:g}", where="Section"
            )
        self._reached: tuple[tuple[float, float], ...] = ()

    def __repr__(self) -> str:
        unit = self.system.symbol("length")
        return (
            f"<Section {self.section_id or 'without a name'}: {self.stations.size} points, "
            f"{self.length:.4g} {unit} wide, {len(self.subareas)} subarea(s), "
            f"lowest ground {self.lowest_ground:.4g} {unit}>"
        )

    def __getstate__(self) -> dict:
        # what can be worked out again is left behind, so that a section travels light
        return {
            k: v
            for k, v in self.__dict__.items()
            if not isinstance(getattr(type(self), k, None), cached_property)
        }

    # --- what it is ------------------------------------------------------------------------------

    @property
    def units(self) -> str:
        """``si`` or ``us``."""
        return self.system.name

    @property
    def _where(self) -> str:
        return self.section_id or "Section"

    @property
    def length(self) -> float:
        """Width of the profile from its first to its last station."""
        return float(self.stations[-1] - self.stations[0])

    @cached_property
    def _cut(self) -> tuple[Floats, Floats, NDArray[np.intp]]:
        x, z = without_outer_faces(self.stations, self.elevations)
        # a limit that was worked out may miss a vertical face by rounding, and with it the face's side
        starts = snapped(np.array([s.start for s in self.subareas]), x)
        x, z = cut_at(x, z, starts[1:])
        return x, z, segment_subareas(x, z, starts)

    @cached_property
    def _source(self) -> NDArray[np.intp]:
        """Low points of the channel, one of each stretch of equally low ground."""
        x, z, owner = self._cut
        zones = [i for i, s in enumerate(self.subareas) if s.zone == CHANNEL]
        if zones:
            mine = np.isin(owner, zones)
            candidates = np.flatnonzero(np.append(mine, False) | np.append(False, mine))
        elif self.origin is not None:
            candidates = self._about(self.origin, x, z)
        else:
            candidates = np.arange(z.size)
        lowest = candidates[z[candidates] == z[candidates].min()]
        apart = np.append(True, np.diff(lowest) > 1)
        return lowest[apart]

    def _about(self, origin: float, x: Floats, z: Floats) -> NDArray[np.intp]:
        try:
            banks = find_banks(self.stations, self.elevations, origin)
        except (NoAnswerError, ProfileError):
            # no channel to be told apart: downhill from where the stream crosses
            return np.array([foot_of(z, int(np.argmin(np.abs(x - origin))))])
        inside = np.flatnonzero((x >= banks.left) & (x <= banks.right))
        # the foot of a vertical face that falls outward from the top of a bank lies outside the channel
        left, right = (inside[x[inside] == at] for at in (banks.left, banks.right))
        first = left[np.argmax(z[left])] if left.size else inside[0]
        last = right[np.argmax(z[right])] if right.size else inside[-1]
        return np.arange(first, last + 1)

    @cached_property
    def _profile(self) -> DividedProfile:
        x, z, owner = self._cut
        sources = None
        if self.connected:
            sources = np.append(self._source, self._hollows)
        return DividedProfile(
            Ground(x, z, owner, len(self.subareas), sources), self._roughness, self.system.manning
        )

    @property
    def _hollows(self) -> NDArray[np.intp]:
        """Low points of the hollows that water is known to reach from elsewhere."""
        x, z, _ = self._cut
        found = []
        for start, end in self._reached:
            inside = np.flatnonzero((x >= start) & (x <= end))
            if not inside.size:
                # between two points of the profile: water there runs to the lower of the two
                after = int(np.clip(np.searchsorted(x, start, side="right"), 1, x.size - 1))
                inside = np.array([after - 1, after])
            found.append(inside[np.argmin(z[inside])])
        return np.array(found, dtype=np.intp)

    @cached_property
    def _roughness(self) -> Roughness:
        parts = [
            s.n if isinstance(s.n, DepthRoughness) else DepthRoughness(s.n, 0.0, s.n, 1.0)
            for s in self.subareas
        ]
        together = [i for i, s in enumerate(self.subareas) if s.zone == CHANNEL]
        return Roughness(
            np.array([p.shallow for p in parts], dtype=float),
            np.array([p.deep for p in parts], dtype=float),
            np.array([p.shallow_depth for p in parts], dtype=float),
            np.array([p.deep_depth for p in parts], dtype=float),
            np.array(together if self.composite != "divide" else [], dtype=np.intp),
            self.composite,
        )

    @property
    def lowest_ground(self) -> float:
        """Lowest ground of the channel: depth is counted from here."""
        return float(self._cut[1][self._source[0]])

    @cached_property
    def bank_tops(self) -> tuple[float, ...]:
        """Stages at which water passes a ridge into lower ground behind it, from the lowest."""
        if not self.connected:
            return ()
        ground = self._profile.ground
        behind = ground.threshold > ground.low
        crossed = np.unique(ground.threshold[behind])
        if not crossed.size:
            return ()
        before, after = (
            ground.wetted(crossed)[0].sum(axis=1),
            ground.wetted(crossed, passed=True)[0].sum(axis=1),
        )
        return tuple(float(s) for s in crossed[after > before])

    @cached_property
    def telling_bank_tops(self) -> tuple[float, ...]:
        """Those tops of banks where the hollow behind adds more than a hundredth of the discharge."""
        tops = np.array(self.bank_tops)
        if not tops.size:
            return ()
        before = self._profile.wet(tops).conveyance.sum(axis=1)
        after = self._profile.wet(tops, passed=True).conveyance.sum(axis=1)
        return tuple(float(s) for s in tops[after - before > _TELLING_RISE * after])

    def reached(self, intervals: Iterable[tuple[float, float]]) -> Section:
        """Return the same section with hollows that water is known to reach from elsewhere.

        Parameters
        ----------
        intervals : iterable of (start, end)
            Stations about each hollow; water there counts from the hollow's own low ground, at the
            channel's stage.

        Raises
        ------
        InputError
            ``station-outside``: the section has no ground between two stations.
        """
        wanted = tuple((float(a), float(b)) for a, b in intervals)
        for start, end in wanted:
            if not (start <= end and end >= self.stations[0] and start <= self.stations[-1]):
                raise InputError(
                    "station-outside",
                    f"there is no ground between {start:g} and {end:g}",
                    where=self._where,
                    fix=f"give stations from left to right between {self.stations[0]:g} "
                    f"and {self.stations[-1]:g}",
                )
        other = Section.__new__(Section)
        other.__dict__.update(self.__getstate__())
        other._reached = self._reached + wanted
        return other

    # --- forward ---------------------------------------------------------------------------------

    def geometry(self, stage: ArrayLike) -> Geometry:
        """Return the wetted geometry at a stage: all ground that water at this stage has reached.

        At a stage equal to level ground, that ground is still dry; at the top of a bank, the water
        has not yet passed it.

        Parameters
        ----------
        stage : array_like
            Elevation of the water surface; any shape.

        Returns
        -------
        Geometry
            Arrays of the shape of `stage`; by subarea with one more axis. Zero where dry.
        """
        level = _finite("stage", stage)
        area, perimeter, width = self._profile.ground.wetted(level.ravel())
        whole, around, top = (a.sum(axis=1).reshape(level.shape) for a in (area, perimeter, width))
        shape = (*level.shape, len(self.subareas))
        return Geometry(
            _like(whole),
            _like(around),
            _like(top),
            _like(_ratio(whole, around)),
            _like(_ratio(whole, top)),
            area.reshape(shape),
            perimeter.reshape(shape),
            width.reshape(shape),
        )

    def conveyance(self, stage: ArrayLike) -> Floats:
        """Return the conveyance at a stage [flow], same shape: discharge = conveyance * sqrt(slope)."""
        level = _finite("stage", stage)
        return _like(self._profile.wet(level.ravel()).conveyance.sum(axis=1).reshape(level.shape))

    def discharge(self, stage: ArrayLike, slope: ArrayLike) -> Floats:
        """Return the discharge of uniform flow at a stage, on an energy slope > 0."""
        return _like(np.asarray(self.conveyance(stage)) * np.sqrt(_positives("slope", slope)))

    def water_above_ends(self, stage: float) -> tuple[bool, bool]:
        """Return whether water at this stage stands above the left and the right end of the section."""
        ground = self._profile.ground
        limit = max(ground.threshold[0], ground.z[0]), max(ground.threshold[-1], ground.z[-1])
        return bool(stage > limit[0]), bool(stage > limit[1])

    # --- backward --------------------------------------------------------------------------------

    def normal_stages(self, discharge: float, slope: float) -> tuple[float, ...]:
        """Return every stage at which uniform flow carries a discharge, from the lowest."""
        return self.flow_state(discharge, slope).stages

    def normal_stage(self, discharge: ArrayLike, slope: ArrayLike) -> Floats:
        """Return the stage of uniform flow; the highest where several carry the discharge.

        Parameters
        ----------
        discharge : array_like
            >= 0; 0 gives the lowest ground.
        slope : array_like
            Energy slope, > 0; broadcast with `discharge`.

        Returns
        -------
        ndarray or float
            Stage in the channel. While a hollow behind a bank is filling it is the bank's top.

        Raises
        ------
        InputError
            ``number-not-positive`` or ``number-not-finite``.
        """
        q, s = np.broadcast_arrays(_not_negative("discharge", discharge), _positives("slope", slope))
        target = (q / np.sqrt(s)).ravel()
        found = np.full(target.size, self.lowest_ground)
        flows = target > 0
        found[flows] = [stages[-1][0] for stages in self._profile.stages_for_each(target[flows])]
        return _like(found.reshape(q.shape))

    def flow_state(self, discharge: float, slope: float) -> FlowState:
        """Return the stage, every path and the hydraulics by subarea of one discharge > 0.

        The conveyances of all paths add up to that of the discharge (see :meth:`flow_paths`).
        """
        q, s = float(_positives("discharge", discharge)), float(_positives("slope", slope))
        target = q / np.sqrt(s)
        stages = self._profile.stages_for(target)
        stage, at_bank = stages[-1]
        paths = flow_paths(self._profile, target, stage, at_bank, int(self._source[0]))
        scale = target / sum(p.conveyance for p in paths)
        return FlowState(
            q, s, stage, at_bank, tuple(x for x, _ in stages), tuple(p.scaled(scale) for p in paths)
        )

    def flow_paths(self, discharge: float, slope: float) -> list[FlowPath]:
        """Return the stretches of water that together carry a discharge, the channel's first.

        Below the top of a bank there is one. At the top the channel stays level while the hollow
        behind fills at its own stage; a hollow may spill outward in turn. The discharges add up.

        Notes
        -----
        Where stretches of water share a subarea, or a composite n, or an n that falls with depth, the
        whole carries more or less than its stretches each by itself: a hollow that is just full then
        may add more than it carried, and stretches at one level that do not meet count as one. Each
        then gets its share, so that the discharges still add up to the flow.
        """
        state = self.flow_state(discharge, slope)
        root = np.sqrt(state.slope)
        return [
            FlowPath(p.start, p.end, p.stage, float(p.conveyance * root), float(p.wet.area.sum()))
            for p in state.paths
        ]

    def water_at(self, stage: float) -> list[FlowPath]:
        """Return the stretches of water that stand at one stage, the channel's first, without a discharge."""
        level = float(_finite("stage", stage))
        ground = self._profile.ground
        main = ground.pool(int(self._source[0]), level)
        pools = sorted(ground.pools(level), key=lambda p: (p.first, p.last) != (main.first, main.last))
        return [
            FlowPath(
                p.start,
                p.end,
                level,
                float("nan"),
                float(ground.wetted_between(p.first, p.last, level)[0].sum()),
            )
            for p in pools
        ]

    def critical_stage(self, discharge: ArrayLike) -> Floats:
        """Return the stage of least specific energy for a discharge, alpha included.

        Parameters
        ----------
        discharge : array_like
            >= 0; 0 gives the lowest ground.

        Notes
        -----
        Chow (1959), chapters 2 and 3: the least of stage + alpha Q² / (2 g A²). One level is taken
        for all ground that water has reached.
        """
        q = _not_negative("discharge", discharge)
        found = np.full(q.size, self.lowest_ground)
        flows = q.ravel() > 0
        found[flows] = self._profile.critical_stages(q.ravel()[flows], self.system.gravity)
        return _like(found.reshape(q.shape))

    def slope_for(self, discharge: ArrayLike, stage: ArrayLike) -> Floats:
        """Return the energy slope on which uniform flow carries a discharge > 0 at a stage.

        Raises
        ------
        NoAnswerError
            The section is dry at the stage.
        """
        q, k = np.broadcast_arrays(_positives("discharge", discharge), np.asarray(self.conveyance(stage)))
        if (k <= 0).any():
            raise NoAnswerError(
                f"the section is dry at stage {float(np.broadcast_to(stage, k.shape)[k <= 0].flat[0]):g}",
                nearest=self.lowest_ground,
                where=self._where,
                fix=f"give a stage above the lowest ground, {self.lowest_ground:g}",
            )
        return _like((q / k) ** 2)

    def n_for(
        self, discharge: ArrayLike, stage: ArrayLike, slope: ArrayLike, subarea: int | str | None = None
    ):
        """Return the roughness at which uniform flow carries a discharge at a stage.

        Parameters
        ----------
        discharge, stage, slope : array_like
            Broadcast together; discharge and slope > 0.
        subarea : int or str, optional
            Index or label of the subarea whose n is sought. None seeks one factor on every n.

        Returns
        -------
        ndarray or float
            n of the subarea, or the factor.

        Raises
        ------
        NoAnswerError
            The others alone carry more than the discharge, or the subarea is dry, or (under a
            composite n) even a smooth subarea does not pass it. `nearest` is the nearest discharge
            that can be had.
        """
        q, h, s = np.broadcast_arrays(
            _positives("discharge", discharge), _finite("stage", stage), _positives("slope", slope)
        )
        index = None if subarea is None else self._index(subarea)
        found = [
            self._n_for(float(a), float(b), float(c), index)
            for a, b, c in zip(q.ravel(), h.ravel(), s.ravel(), strict=True)
        ]
        return _like(np.array(found).reshape(q.shape))

    def _index(self, subarea: int | str) -> int:
        labels = [s.label for s in self.subareas]
        if isinstance(subarea, str):
            if labels.count(subarea) == 1:
                return labels.index(subarea)
            problem = "no" if subarea not in labels else "more than one"
            raise InputError(
                "value-not-allowed",
                f"{problem} subarea is labelled {subarea!r}",
                where=self._where,
                fix=f"give an index from 0 to {len(labels) - 1}, or one of: {', '.join(map(repr, labels))}",
            )
        if not -len(labels) <= subarea < len(labels):
            raise InputError(
                "value-not-allowed",
                f"there is no subarea {subarea}",
                where=self._where,
                fix=f"give an index from 0 to {len(labels) - 1}",
            )
        return subarea % len(labels)

    def _n_for(self, discharge: float, stage: float, slope: float, index: int | None) -> float:
        wet = self._profile.wet(np.array([stage]))
        area, perimeter, n, k = wet.area[0], wet.perimeter[0], wet.n[0], wet.conveyance[0]
        target, root = discharge / np.sqrt(slope), np.sqrt(slope)
        if k.sum() <= 0:
            raise NoAnswerError(f"the section is dry at stage {stage:g}", nearest=0.0, where=self._where)
        if index is None:
            return float(k.sum() / target)
        label = self.subareas[index].label or str(index)
        if area[index] <= 0:
            raise NoAnswerError(
                f"subarea {label} is dry at stage {stage:g}",
                nearest=float(k.sum() * root),
                where=self._where,
            )
        rough = self._profile.roughness
        mates = rough.channel if rough.together and index in rough.channel else np.array([index])
        others = float(np.delete(k, mates).sum())
        needed = target - others
        if needed <= 0:
            raise NoAnswerError(
                f"at stage {stage:g} the other subareas carry {others * root:g}, not less than {discharge:g}",
                nearest=others * root,
                where=self._where,
                fix="look at a lower stage, or at the roughness of the others",
            )
        if mates.size == 1:
            return float(k[index] * n[index] / needed)
        # the composite n that is needed gives this subarea's share of it
        whole, around = area[mates].sum(), perimeter[mates].sum()
        power = 1.5 if rough.composite == "horton" else 2.0
        mixed = self.system.manning * whole * np.cbrt((whole / around) ** 2) / needed
        rest = (perimeter[mates] * n[mates] ** power)[mates != index].sum()
        share = mixed**power * around - rest
        if share <= 0:
            most = (
                self.system.manning * whole * np.cbrt((whole / around) ** 2) / (rest / around) ** (1 / power)
            )
            raise NoAnswerError(
                f"no n above zero in subarea {label} passes {discharge:g} at stage {stage:g}",
                nearest=float((most + others) * root),
                where=self._where,
                fix="look at a higher stage, or at the roughness of the others",
            )
        return float((share / perimeter[index]) ** (1 / power))

    def required_bench(
        self,
        discharge: ArrayLike,
        stage: ArrayLike,
        slope: float,
        base: float,
        n: float | DepthRoughness,
        sides: str = "both",
        side_slope: float = 0.0,
    ):
        """Return the narrowest bench with which the section passes a discharge at a stage.

        See :func:`terrain2q.hydraulics.widths.required_bench`; `base` is an elevation.
        """
        from terrain2q.hydraulics.widths import required_bench

        return required_bench(self, discharge, stage, slope, base, n, sides, side_slope)

    def required_opening(self, discharge: ArrayLike, stage: ArrayLike, slope: ArrayLike) -> Floats:
        """Return the least clear width about the channel, between vertical walls, that passes a discharge.

        See :func:`terrain2q.hydraulics.widths.required_opening`.
        """
        from terrain2q.hydraulics.widths import required_opening

        return required_opening(self, discharge, stage, slope)

    # --- tables ----------------------------------------------------------------------------------

    def rating(self, slope: float, stages: ArrayLike | int | None = None):
        """Return the stage-discharge rating.

        Parameters
        ----------
        slope : float
            Energy slope, > 0.
        stages : array_like or int, optional
            Stages, or how many even steps from the lowest ground to the lower end of the section (30
            where absent). A bank's top has two rows: before and after the hollow behind it fills; even
            steps are joined by the tops of banks where the hollow adds more than a hundredth.

        Returns
        -------
        Rating
            A pandas.DataFrame with the columns of the ``ratings`` layer, in the section's units, that
            draws itself with ``plot()``.
        """
        from terrain2q.hydraulics.rating import Rating

        table = Rating(self.rating_arrays(slope, stages))
        table.attrs["units"] = self.units
        return table

    def plot(self, **how):
        """Draw the section; see :func:`terrain2q.output.plots.plot_section` for what can be given."""
        return _plots().plot_section(self, **how)

    def _repr_html_(self) -> str:
        return importlib.import_module("terrain2q.output.notebook").section_html(self)

    def rating_arrays(self, slope: float, stages: ArrayLike | int | None = None, top: float | None = None):
        """Return the rating as a dict of arrays; `top` is how high even steps go above the lowest ground."""
        root = np.sqrt(float(_positives("slope", slope)))
        if stages is None or isinstance(stages, int | np.integer):
            count = 30 if stages is None else int(stages)
            if count < 1:
                raise InputError(
                    "value-not-allowed", f"{count} stages", where="rating", fix="give one or more"
                )
            low = self.lowest_ground
            high = low + top if top is not None else self._rating_top()
            level = low + (high - low) * np.arange(1, count + 1) / count
            level = np.union1d(level, [t for t in self.telling_bank_tops if t <= high])
        else:
            level = np.sort(_finite("stages", stages).ravel())
        # most stages lie at no ridge at all, and then the tops of banks need not be worked out
        twice = np.isin(level, self._profile.ground.threshold)
        if twice.any():
            twice = np.isin(level, np.array(self.bank_tops))
        # the second of two rows is the one after the hollow has filled
        passed = np.repeat(twice, 1 + twice)
        passed[np.cumsum(1 + twice) - 1 - twice] = False
        level = np.repeat(level, 1 + twice)
        wet = self._profile.wet(level)
        if passed.any():
            after = self._profile.wet(level[passed], passed=True)
            for name in ("area", "perimeter", "width", "conveyance"):
                getattr(wet, name)[passed] = getattr(after, name)
        columns = hydraulic_columns(wet, root, self.system.gravity)
        return {
            "section_id": np.full(level.size, self.section_id, dtype=object),
            "stage": level,
            "depth": np.maximum(level - self.lowest_ground, 0.0),
            **columns,
        }

    def _rating_top(self) -> float:
        low, z = self.lowest_ground, self.elevations
        ends = min(z[0], z[-1])
        return float(ends if ends > low else z.max() if z.max() > low else low + 1.0)


def hydraulic_columns(wet: Wet, root: float | Floats, gravity: float) -> dict[str, Floats]:
    """Return the hydraulic columns of a rating from parts of shape (rows, parts) and sqrt(slope)."""
    area, perimeter, width = wet.area.sum(axis=1), wet.perimeter.sum(axis=1), wet.width.sum(axis=1)
    conveyance = wet.conveyance.sum(axis=1)
    discharge = conveyance * root
    alpha, beta = velocity_coefficients(wet.area, wet.conveyance)
    return {
        "discharge": discharge,
        "flow_area": area,
        "wetted_perimeter": perimeter,
        "hydraulic_radius": _ratio(area, perimeter),
        "top_width": width,
        "mean_velocity": _ratio(discharge, area),
        "froude": froude_number(discharge, area, width, alpha, gravity),
        "conveyance": conveyance,
        "alpha": alpha,
        "beta": beta,
    }


def _plots():
    # Pictures stand above the numbers in the house; a section only hands itself over when asked for one.
    return importlib.import_module("terrain2q.output.plots")


def _check_cover(subareas: tuple[Subarea, ...], x: Floats) -> tuple[Subarea, ...]:
    if not subareas:
        raise InputError("subareas-do-not-cover", "there is no subarea", where="Section")
    # stations read from a file are printed numbers: a gap of rounding is no gap
    near = 1e-9 * max(1.0, float(np.abs(x).max()))
    if subareas[0].start > x[0] + near or subareas[-1].end < x[-1] - near:
        raise InputError(
            "subareas-do-not-cover",
            f"subareas run from {subareas[0].start:g} to {subareas[-1].end:g}, "
            f"the profile from {x[0]:g} to {x[-1]:g}",
            where="Section",
        )
    for one, following in pairwise(subareas):
        if abs(following.start - one.end) > near:
            word = "a gap" if following.start > one.end else "an overlap"
            raise InputError(
                "subareas-do-not-cover",
                f"{word} between {one.end:g} and {following.start:g}",
                where="Section",
            )
    return subareas


def _ratio(top: Floats, bottom: Floats) -> Floats:
    return np.divide(top, bottom, out=np.zeros_like(top), where=bottom > 0)


def _like(values: Floats):
    """Return a plain float where one number was asked for."""
    return values if np.ndim(values) else float(values)


def _finite(name: str, values: ArrayLike) -> Floats:
    out = np.asarray(values, dtype=float)
    if not np.isfinite(out).all():
        raise InputError("number-not-finite", f"{name} has a value that is not a finite number", where=name)
    return out


def _not_negative(name: str, values: ArrayLike) -> Floats:
    out = _finite(name, values)
    if (out < 0).any():
        raise InputError("number-not-positive", f"{name} is {out[out < 0].flat[0]:g}", where=name)
    return out


def _positives(name: str, values: ArrayLike) -> Floats:
    out = _finite(name, values)
    if (out <= 0).any():
        raise InputError("number-not-positive", f"{name} is {out[out <= 0].flat[0]:g}", where=name)
    return out


def _positive(name: str, value: float, where: str) -> None:
    if not (np.isfinite(value) and value > 0):
        raise InputError("number-not-positive", f"{name} is {value}", where=where)
