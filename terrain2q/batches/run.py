"""From cut lines to parts: those that are kept are taken up, the others are worked on, whoever does it."""

from __future__ import annotations

import gc
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import closing, contextmanager
from itertools import chain
from typing import Any

from terrain2q.batches.engines import Batch, Crew, Job, cluster, processes, serial
from terrain2q.batches.kept import KeptParts
from terrain2q.batches.work import Part, Work
from terrain2q.errors import Finding
from terrain2q.ground.cut_lines import CutLine
from terrain2q.jobs.design_flows import SectionAnswer

LABEL = "sections"

_HELD = 4
"""Parts that came before their turn and are held; more are read again from where they are kept."""


def answer_lines(
    work: Work,
    lines: Sequence[CutLine],
    batches: Sequence[Sequence[int]],
    kept: KeptParts | None,
    jobs: int,
    scheduler: str | None,
    progress: Callable[[int, int, str], None],
    crew: Crew | None = None,
) -> Iterator[Part]:
    """Give the parts of all batches, one after another in the order of the batches.

    Where parts are kept, no more than a few are held at a time.

    Parameters
    ----------
    work : Work
    lines : sequence of CutLine
    batches : sequence of sequence of int
        Places of the lines of each.
    kept : KeptParts or None
        Where finished parts are kept; None keeps none.
    jobs : int
        Processes on this machine.
    scheduler : str or None
        Address of a Dask scheduler, whose cluster then does the work.
    progress : callable
        ``progress(done, total, label)``; the label tells the rate and the findings so far.
    crew : Crew, optional
        Processes that were called already.
    """
    ready = {number for number in range(len(batches)) if kept is not None and number in kept}
    pace = Pace(len(lines), progress)
    if ready:
        pace.take(sum(len(batches[number]) for number in ready), fresh=False)
    waiting: list[Batch] = [
        (number, [lines[i] for i in places], places)
        for number, places in enumerate(batches)
        if number not in ready
    ]
    coming = answered(work, waiting, kept, jobs, scheduler, crew)
    held: dict[int, Part] = {}
    with closing(coming), _old_objects_left_alone():
        for number, places in enumerate(batches):
            while number not in ready and number not in held:
                other, part = next(coming)
                pace.take(len(batches[other]))
                if part is not None and (kept is None or other == number or len(held) < _HELD):
                    held[other] = part
                else:
                    ready.add(other)
            part = held.pop(number, None)
            if part is None:
                part = kept.load(number, places)
            if part is None:  # damaged since it was kept
                part = work.answer([lines[i] for i in places], places)
            pace.findings += part.finding_count
            yield part


def answered(
    work: Job,
    batches: Sequence[Batch],
    kept: KeptParts | None,
    jobs: int,
    scheduler: str | None,
    crew: Crew | None = None,
) -> Iterator[tuple[int, Any]]:
    """Give number and part of each batch as they come, whoever works on them; see :func:`answer_lines`."""
    if scheduler is not None and batches:
        return cluster(work, batches, scheduler, kept)
    if jobs > 1 and len(batches) > 1:
        return processes(work, batches, jobs, kept, crew)
    return serial(work, batches, kept)


@contextmanager
def _old_objects_left_alone() -> Iterator[None]:
    """Spare what is there already, the lines above all, from being looked through for what can go."""
    gc.freeze()
    try:
        yield
    finally:
        gc.unfreeze()


class Pace:
    """Tells how far the work is.

    Parameters
    ----------
    total : int
    progress : callable
        ``progress(done, total, label)``.
    label : str
        What is worked on.
    """

    def __init__(self, total: int, progress: Callable[[int, int, str], None], label: str = LABEL) -> None:
        self._total, self._progress, self._label = total, progress, label
        self._began = time.perf_counter()
        self._done = self._fresh = self.findings = 0

    def take(self, count: int, *, fresh: bool = True) -> None:
        """Count so many more as done; those that are not fresh tell nothing of the rate."""
        self._done += count
        self._fresh += count if fresh else 0
        taken = time.perf_counter() - self._began
        label = f"{self._label}: {self.findings} findings"
        if fresh and taken > 0:
            rate = self._fresh / taken
            label += f", {rate:.3g} a second, {_duration((self._total - self._done) / rate)} left"
        self._progress(self._done, self._total, label)


def _duration(seconds: float) -> str:
    minutes, seconds = divmod(round(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    return (
        f"{hours} h {minutes:02d} min"
        if hours
        else f"{minutes} min {seconds:02d} s"
        if minutes
        else f"{seconds} s"
    )


def in_order(parts: Sequence[Part]) -> tuple[list[Finding], list[SectionAnswer], frozenset[str]]:
    """Return findings and answers of all parts in the order of the lines, and the failed sections."""
    built: dict[int, tuple[Finding, ...]] = {}
    answered: dict[int, tuple[Finding, ...]] = {}
    answers: dict[int, SectionAnswer] = {}
    for part in parts:
        built.update(zip(part.places, part.built_findings, strict=True))
        answered.update(zip(part.places, part.answer_findings, strict=True))
        if part.answers:
            answers.update(zip(part.places, part.answers, strict=True))
    findings = [f for one in (built, answered) for f in chain.from_iterable(one[i] for i in sorted(one))]
    failed = frozenset(name for part in parts for name in part.failed)
    return findings, [answers[i] for i in sorted(answers)], failed
