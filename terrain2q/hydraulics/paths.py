"""Flow paths: where water goes when it passes a bank.

Ground along a section is a row of hollows parted by ridges. Water rises in the channel until it
reaches the lower bank; what is more than the channel carries then passes over and flows in the
hollow behind, at that hollow's own stage, until the hollow is full to the bank's top and both rise
as one. A hollow may spill outward in turn. Where both banks are reached at one height the water
that passes is shared equally until one side is full.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from terrain2q.hydraulics.divided import DividedProfile, Wet


@dataclass(frozen=True)
class Path:
    """One stretch of water: its ends, its stage, and the hydraulics by subarea, shape (1, subareas)."""

    start: float
    end: float
    stage: float
    wet: Wet
    at_left_end: bool
    at_right_end: bool

    @property
    def conveyance(self) -> float:
        """Conveyance of the whole path."""
        return float(self.wet.conveyance.sum())

    def scaled(self, factor: float) -> Path:
        """Return the same water carrying `factor` times as much."""
        return replace(self, wet=replace(self.wet, conveyance=self.wet.conveyance * factor))


def flow_paths(
    profile: DividedProfile, target: float, stage: float, at_bank: bool, source: int
) -> list[Path]:
    """Return the stretches of water that together carry a conveyance, the channel's first.

    Parameters
    ----------
    profile : DividedProfile
    target : float
        Conveyance to be carried.
    stage, at_bank : float, bool
        The channel's stage, and whether it is a bank's top with the hollow behind it filling.
    source : int
        Low point of the channel.

    Returns
    -------
    list of Path
    """
    ground = profile.ground
    main = ground.pool(source, stage)
    stretches = [_Stretch(main.first, main.last)]
    # hollows known to be reached from elsewhere stand at the channel's level beside it
    stretches += [
        _Stretch(p.first, p.last) for p in ground.pools(stage) if (p.first, p.last) != (main.first, main.last)
    ]
    ends = (float(ground.x[0]), float(ground.x[-1]))
    if not at_bank:
        return [s.path(profile, stage, ends) for s in stretches]
    return _spill(profile, stretches, stage, target, ends)


@dataclass(frozen=True)
class _Stretch:
    """Water between points `first` and `last`; `passed` once it has filled a hollow beside it."""

    first: int
    last: int
    passed: bool = False

    def conveyance(self, profile: DividedProfile, level: float) -> float:
        wet = profile.wet_between(self.first, self.last, level, passed=self.passed)
        return float(wet.conveyance.sum())

    def path(self, profile: DividedProfile, level: float, ends: tuple[float, float]) -> Path:
        """Return the water at `level`; `ends` are the outermost stations of the section."""
        ground, first, last = profile.ground, self.first, self.last
        start, end = ground.edge(first, first + 1, level), ground.edge(last, last - 1, level)
        return Path(
            start,
            end,
            level,
            profile.wet_between(first, last, level, passed=self.passed),
            bool(start == ends[0] and level > ground.z[first]),
            bool(end == ends[1] and level > ground.z[last]),
        )

    def joined(self, other: _Stretch) -> _Stretch:
        return _Stretch(min(self.first, other.first), max(self.last, other.last), True)


def _spill(profile: DividedProfile, stretches: list[_Stretch], level: float, target: float, ends):
    """Return the paths of water that stands at `level` in some stretches and spills out of them."""
    while True:
        rest = max(target - sum(s.conveyance(profile, level) for s in stretches), 0.0)
        sides: list[_Side] = []
        for stretch in stretches:
            for ridge, step in ((stretch.first, -1), (stretch.last, 1)):
                side = _Side.beyond(profile, ridge, step, level)
                known = [*stretches, *(other.whole for other in sides)]
                if side is not None and not any(side.meets(stretch) for stretch in known):
                    sides.append(side)
        share = rest / max(len(sides), 1)
        full = [side for side in sides if share >= side.capacity]
        if not full:
            paths = [s.path(profile, level, ends) for s in stretches]
            return paths + [p for side in sides for p in side.fill(share, ends)]
        for side in full:
            # the hollow stands at the bank's top: from here it is one with the water inside
            stretches = _joined(stretches, side)


def _joined(stretches: list[_Stretch], side: _Side) -> list[_Stretch]:
    """Return the stretches with a full hollow joined to those it touches; the channel's stays first."""
    grown, others = side.whole, []
    position = None
    for i, stretch in enumerate(stretches):
        if stretch.first <= grown.last and grown.first <= stretch.last:
            grown = grown.joined(stretch)
            position = i if position is None else position
        else:
            others.append(stretch)
    others.insert(position or 0, grown)
    return others


@dataclass(frozen=True)
class _Side:
    """Ground beyond a ridge that water has reached, seen from its first hollow.

    `whole` is the hollow when it is full to the ridge, as a stretch of the ground it was seen from.
    """

    profile: DividedProfile
    level: float
    capacity: float
    whole: _Stretch

    @classmethod
    def beyond(cls, profile: DividedProfile, ridge: int, step: int, level: float) -> _Side | None:
        """Return the side beyond point `ridge`, or None where the ground does not fall away there."""
        z = profile.ground.z
        if z[ridge] != level:
            return None
        crest = ridge
        while 0 <= crest + step < z.size and z[crest + step] == level:
            crest += step
        if not 0 <= crest + step < z.size or z[crest + step] > level:
            return None
        low = crest + step
        while 0 <= low + step < z.size and z[low + step] <= z[low]:
            low += step
        first, last = (crest, z.size - 1) if step > 0 else (0, crest)
        part = profile.ground.part(first, last, np.array([low - first]))
        hollow = DividedProfile(part, profile.roughness, profile.constant)
        full = part.pool(low - first, level)
        capacity = float(hollow.wet_between(full.first, full.last, level).conveyance.sum())
        reached = sorted((ridge, (full.last if step > 0 else full.first) + first))
        return cls(hollow, level, capacity, _Stretch(*reached, True))

    def meets(self, other: _Stretch) -> bool:
        """Whether more than a point of the hollow is water of `other` already."""
        return self.whole.first < other.last and other.first < self.whole.last

    def fill(self, target: float, ends: tuple[float, float]) -> list[Path]:
        """Return the water beyond the ridge that carries `target`, less than the hollow's capacity."""
        if target <= 0:
            return []
        stages = self.profile.stages_for(target, self.level)
        # a target within rounding of the capacity fills the hollow
        stage, at_bank = stages[-1] if stages else (self.level, False)
        pool = self.profile.ground.pool(int(self.profile.ground.sources[0]), stage)
        stretch = _Stretch(pool.first, pool.last)
        if at_bank:
            return _spill(self.profile, [stretch], stage, target, ends)
        return [stretch.path(self.profile, stage, ends)]
