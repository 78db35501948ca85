"""Roughness that reproduces observed stages: by observation, and one for all."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from terrain2q.errors import DOUBTFUL, FAILED, Finding, NoAnswerError
from terrain2q.ground.observed import Observation
from terrain2q.ground.streams import length_text
from terrain2q.hydraulics.review import N_OUTSIDE_RANGE, n_outside_range
from terrain2q.hydraulics.section import CHANNEL, Section, Subarea
from terrain2q.jobs.design_flows import OK
from terrain2q.jobs.remarks import CHANNEL_N, published_range, span_text
from terrain2q.jobs.sections import BuiltSection
from terrain2q.units import UnitSystem

_LAYER = "observed"


@dataclass(frozen=True)
class Fitted:
    """What reproduces one observation, in SI.

    Attributes
    ----------
    observation : Observation
    status : str
        ``ok``; ``doubtful`` where a fitted n lies outside the published range; ``failed`` where no factor
        reproduces the observation.
    discharge, stage : float
        What the section carries at the observed stage, and where the observed discharge stands, both with
        the roughness of the study.
    factor : float
        The one factor on every n of the section.
    channel_n_used, channel_n : float
        n of the channel as the study has it at this stage (the one n that several amount to), and the one
        that alone reproduces the observation with all else as it is; NaN where there is no channel, or no
        such n.
    """

    observation: Observation
    status: str
    discharge: float = math.nan
    stage: float = math.nan
    factor: float = math.nan
    channel_n_used: float = math.nan
    channel_n: float = math.nan


@dataclass(frozen=True)
class Best:
    """One value for several observations.

    Attributes
    ----------
    value : float
        Geometric mean: least squares of the logarithm of discharge.
    median : float
    spread : float
        Standard deviation of the logarithms, as a factor: about two thirds of the values lie between
        ``value / spread`` and ``value * spread``. NaN for fewer than two.
    least, greatest : float
    count : int
    """

    value: float
    median: float
    spread: float
    least: float
    greatest: float
    count: int

    @classmethod
    def of(cls, values: Sequence[float]) -> Best | None:
        """Return the best of some values above zero; None where there is none.

        Notes
        -----
        Discharge goes with 1/n, so that of the factors f_i that reproduce each observation the one that
        leaves the least sum of squares of log(observed discharge / computed discharge) is their geometric
        mean.

        Examples
        --------
        >>> Best.of([0.8, 1.25]).value
        1.0
        """
        known = np.array([v for v in values if math.isfinite(v)])
        if not known.size:
            return None
        logs = np.log(known)
        spread = float(np.exp(logs.std(ddof=1))) if known.size > 1 else math.nan
        return cls(
            float(np.exp(logs.mean())),
            float(np.median(known)),
            spread,
            float(known.min()),
            float(known.max()),
            int(known.size),
        )


@dataclass(frozen=True)
class Fit:
    """All observations with what reproduces them."""

    fitted: tuple[Fitted, ...]
    findings: tuple[Finding, ...]
    factor: Best | None
    channel_n: Best | None

    @property
    def answered(self) -> int:
        """How many observations have a factor."""
        return sum(f.status != FAILED for f in self.fitted)


def fit_observations(
    observations: Sequence[Observation],
    built: Mapping[str, BuiltSection],
    units: UnitSystem,
    progress: Callable | None = None,
) -> Fit:
    """Return the roughness that reproduces each observation, and the best for all.

    Parameters
    ----------
    observations : sequence of Observation
    built : mapping of str to BuiltSection
        By section id, one for each that is observed.
    units : UnitSystem
        For messages.
    progress : callable, optional
        ``progress(done, total, label)``.
    """
    fitted, findings = [], []
    for done, observation in enumerate(observations, 1):
        one, found = fit_one(observation, built[observation.section_id], units)
        fitted.append(one)
        findings += found
        if progress is not None and (done % 50 == 0 or done == len(observations)):
            progress(done, len(observations), "fitting")
    return Fit(
        tuple(fitted),
        tuple(findings),
        Best.of([f.factor for f in fitted]),
        Best.of([f.channel_n for f in fitted]),
    )


def fit_one(observation: Observation, built: BuiltSection, units: UnitSystem) -> tuple[Fitted, list[Finding]]:
    """Return what reproduces one observation, and the findings about it."""
    notes = _Notes(observation, built)
    section, slope = built.section, built.slope
    if section is None or not np.isfinite(slope):
        notes.add("observation-no-answer", "the section itself has no answer")
        return Fitted(observation, FAILED), notes.found
    stage, discharge = observation.stage, observation.discharge
    if stage <= section.lowest_ground:
        below = length_text(section.lowest_ground - stage, units)
        notes.add("observation-no-answer", f"the stage is {below} below the lowest ground of the channel")
        return Fitted(observation, FAILED), notes.found
    factor = float(section.n_for(discharge, stage, slope))
    used, channel_n = math.nan, math.nan
    whole = one_channel(section)
    if whole is not None:
        merged, index = whole
        now = float(section.discharge(stage, slope))
        try:
            used = float(merged.n_for(now, stage, slope, index))
            channel_n = float(merged.n_for(discharge, stage, slope, index))
        except NoAnswerError as error:
            nearest = error.nearest * units.per_si("flow")
            notes.add(
                "observation-no-answer",
                f"no n of the channel alone gives the discharge; the nearest is {nearest:,.4g} "
                f"{units.symbol('flow')}",
                DOUBTFUL,
            )
    _remark(factor, channel_n, built, notes)
    status = DOUBTFUL if notes.found or any(f.severity == DOUBTFUL for f in built.findings) else OK
    return (
        Fitted(
            observation,
            status,
            float(section.discharge(stage, slope)),
            float(section.normal_stage(discharge, slope)),
            factor,
            used,
            channel_n,
        ),
        notes.found,
    )


def one_channel(section: Section) -> tuple[Section, int] | None:
    """Return the section with its channel as one subarea, and its number; None where there is no channel.

    A section of a single subarea is all channel.
    """
    own = section.subareas
    mine = [i for i, s in enumerate(own) if s.zone == CHANNEL]
    if len(own) == 1:
        mine = [0]
    if not mine:
        return None
    if len(mine) == 1:
        return section, mine[0]
    first, last = mine[0], mine[-1]
    # its n does not matter: it is the one that is sought
    channel = Subarea(own[first].start, own[last].end, 0.04, zone=CHANNEL)
    merged = Section(
        section.stations,
        section.elevations,
        [*own[:first], channel, *own[last + 1 :]],
        section.units,
        section.connected,
        section.origin,
        section_id=section.section_id,
    )
    return merged, first


def _remark(factor: float, channel_n: float, built: BuiltSection, notes: _Notes) -> None:
    """Note where a fitted n is one that no table has."""
    told = set()
    for spec, subarea in zip(built.specs, built.section.subareas, strict=True):
        low, high, what = published_range(spec, subarea.zone)
        outside = n_outside_range(spec.n * factor, low, high)
        if outside is not None and what not in told:
            told.add(what)
            notes.add(
                N_OUTSIDE_RANGE,
                f"with the factor {factor:.4g} n of {what} is {outside.n:.4g}, "
                f"outside {span_text(low, high)}",
            )
    if math.isfinite(channel_n) and n_outside_range(channel_n, *CHANNEL_N):
        notes.add(
            N_OUTSIDE_RANGE,
            f"the channel's n alone would be {channel_n:.3g}; published for channels is "
            f"{CHANNEL_N[0]:g} to {CHANNEL_N[1]:g} (Chow 1959, Table 5-6)",
        )


class _Notes:
    """Findings about one observation."""

    def __init__(self, observation: Observation, built: BuiltSection) -> None:
        self.found: list[Finding] = []
        self._observation = observation
        x, y = observation.x, observation.y
        profile = built.profile
        if not np.isfinite([x, y]).all() and profile is not None:
            low = int(np.argmin(profile.elevations))
            x, y = float(profile.x[low]), float(profile.y[low])
        self._place = (x, y)

    def add(self, code: str, message: str, severity: str = "") -> None:
        self.found.append(
            Finding(
                code,
                f"{self._observation.place}: {message}" if self._observation.place else message,
                _LAYER,
                self._observation.section_id,
                severity,
                x=self._place[0],
                y=self._place[1],
            )
        )
