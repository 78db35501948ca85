"""From cut lines to parts: those that are kept are taken up, the others are worked on, whoever does it."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from itertools import chain

from terrain2q.batches.engines import Batch, cluster, processes, serial
from terrain2q.batches.kept import KeptParts
from terrain2q.batches.work import Part, Work
from terrain2q.errors import Finding
from terrain2q.ground.cut_lines import CutLine
from terrain2q.jobs.design_flows import SectionAnswer

LABEL = "sections"


def answer_lines(
    work: Work,
    lines: Sequence[CutLine],
    batches: Sequence[Sequence[int]],
    kept: KeptParts | None,
    jobs: int,
    scheduler: str | None,
    progress: Callable[[int, int, str], None],
) -> list[Part]:
    """Return the parts of all batches, in their order.

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
    """
    parts: list[Part | None] = [None] * len(batches)
    if kept is not None:
        parts = [kept.load(number, places) for number, places in enumerate(batches)]
    pace = _Pace(len(lines), progress)
    for part in parts:
        if part is not None:
            pace.take(part, fresh=False)
    waiting: list[Batch] = [
        (number, [lines[i] for i in places], places)
        for number, places in enumerate(batches)
        if parts[number] is None
    ]
    if not waiting:
        return parts
    if scheduler is not None:
        coming = cluster(work, waiting, scheduler)
    elif jobs > 1 and len(waiting) > 1:
        coming = processes(work, waiting, jobs)
    else:
        coming = serial(work, waiting)
    for number, part in coming:
        parts[number] = part
        if kept is not None:
            kept.keep(number, part)
        pace.take(part)
    return parts


class _Pace:
    """Tells how far the work is."""

    def __init__(self, total: int, progress: Callable[[int, int, str], None]) -> None:
        self._total, self._progress = total, progress
        self._began = time.perf_counter()
        self._done = self._fresh = self._findings = 0

    def take(self, part: Part, *, fresh: bool = True) -> None:
        self._done += len(part.places)
        self._fresh += len(part.places) if fresh else 0
        self._findings += part.finding_count
        taken = time.perf_counter() - self._began
        label = f"{LABEL}: {self._findings} findings"
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
