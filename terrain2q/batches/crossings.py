"""Many crossings in batches: they are screened, and their sections become rows, whoever works on them."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import pyarrow as pa
import pyproj

from terrain2q.batches.engines import Batch, Job
from terrain2q.batches.run import Pace, answered
from terrain2q.ground.approach import Courses
from terrain2q.ground.roads import Crossing
from terrain2q.jobs.crossings import (
    CrossingAnswer,
    CrossingInputs,
    answer_crossings,
    neighbouring_crossings,
    ranked,
)
from terrain2q.output.crossing_table import crossing_tables
from terrain2q.units import UnitSystem

LABEL = "crossings"

ROWS = 50
"""Crossings whose rows are made together, so that those of thousands are not held at once."""

_WORTH_ANOTHER = 2
"""Batches for each process that make it worth starting."""


@dataclass(frozen=True)
class Screening:
    """What is the same for all batches of crossings.

    Attributes
    ----------
    inputs : CrossingInputs
        Without crossings, which come in batches.
    """

    inputs: CrossingInputs

    @cached_property
    def _courses(self) -> Courses:
        return Courses(self.inputs.network)

    def __getstate__(self) -> dict:
        return {"inputs": self.inputs}

    def answer(self, items: Sequence[Crossing], places: Sequence[int]) -> list[CrossingAnswer]:
        """Return the answers of some crossings, not ranked."""
        return answer_crossings(items, self.inputs, self._courses)


@dataclass(frozen=True)
class SectionRows:
    """How the sections of crossings become rows.

    Attributes
    ----------
    units : UnitSystem
    terrain_crs, crs : pyproj.CRS
        Of the answers, and of the layers.
    stages : int
        Steps of a rating.
    top : float or None
        Height of its last stage above the lowest ground, m.
    """

    units: UnitSystem
    terrain_crs: pyproj.CRS
    crs: pyproj.CRS
    stages: int
    top: float | None

    def answer(self, items: Sequence[CrossingAnswer], places: Sequence[int]) -> dict[str, pa.Table]:
        """Return the rows of some crossings by layer."""
        return crossing_tables(items, self.units, self.terrain_crs, self.crs, self.stages, self.top)


def _workers(jobs: int, batches: Sequence) -> int:
    return max(1, min(jobs, len(batches) // _WORTH_ANOTHER))


def screen_in_batches(
    inputs: CrossingInputs, jobs: int, scheduler: str | None, progress: Callable[[int, int, str], None]
) -> list[CrossingAnswer]:
    """Screen every crossing as :func:`~terrain2q.jobs.crossings.screen_crossings` does, many at once.

    Parameters
    ----------
    inputs : CrossingInputs
    jobs : int
        Processes on this machine.
    scheduler : str or None
        Address of a Dask scheduler, whose cluster then does the work.
    progress : callable
        ``progress(done, total, label)``.
    """
    crossings = inputs.crossings
    plan = neighbouring_crossings(crossings, inputs.sections.terrain)
    batches = [(number, [crossings[i] for i in batch], batch) for number, batch in enumerate(plan)]
    work = Screening(replace(inputs, crossings=()))
    pace = Pace(len(crossings), progress, LABEL)
    found: dict[int, CrossingAnswer] = {}
    for number, answers in answered(work, batches, None, _workers(jobs, batches), scheduler):
        found.update(zip(plan[number], answers, strict=True))
        pace.findings += sum(len(a.findings) for a in answers)
        pace.take(len(answers))
    return ranked([found[i] for i in range(len(crossings))], inputs.rank)


def rows_in_batches(
    answers: Sequence[CrossingAnswer], rows: SectionRows, jobs: int, scheduler: str | None
) -> Iterator[dict[str, pa.Table]]:
    """Give the rows of the sections of crossings by layer, in order of rank, some crossings at a time.

    Parameters
    ----------
    answers : sequence of CrossingAnswer
    rows : SectionRows
    jobs, scheduler
        As for :func:`screen_in_batches`.
    """
    ordered = sorted(answers, key=lambda a: a.rank)
    batches: list[Batch] = [
        (number, ordered[start : start + ROWS], range(start, min(start + ROWS, len(ordered))))
        for number, start in enumerate(range(0, len(ordered), ROWS))
    ]
    yield from _in_turn(rows, batches, _workers(jobs, batches), scheduler)


def _in_turn(work: Job, batches: Sequence[Batch], jobs: int, scheduler: str | None) -> Iterator:
    """Give the parts of batches in the order of the batches."""
    held: dict[int, object] = {}
    turn = 0
    for number, part in answered(work, batches, None, jobs, scheduler):
        held[number] = part
        while turn in held:
            yield held.pop(turn)
            turn += 1
