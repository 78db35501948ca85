"""Who works on the batches: this process, several on this machine, or a Dask cluster.

Each gives the parts as they come, in any order, and keeps each before that where parts are kept; what they
hold is the same. A part that is not at hand comes as None, to be read where it is kept.
"""

from __future__ import annotations

import gc
import os
import pickle
import subprocess
import sys
import threading
from collections.abc import Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait
from contextlib import contextmanager, suppress
from typing import Any, Protocol

from terrain2q.batches.kept import KeptParts
from terrain2q.errors import InputError, Terrain2qError
from terrain2q.ground import tiles

Batch = tuple[int, Sequence, Sequence[int]]
"""Number of a batch, its cut lines or crossings, and their places among all."""


class Job(Protocol):
    """What is the same for all batches, and can be sent to those that work on them."""

    def answer(self, items: Sequence, places: Sequence[int]) -> Any:
        """Return the part that comes of a batch, by what is given alone."""


def serial(work: Job, batches: Sequence[Batch], kept: KeptParts | None = None) -> Iterator[tuple[int, Any]]:
    """Work on one batch after another in this process."""
    for number, items, places in batches:
        yield number, _answered(work, number, items, places, kept)


def _answered(work: Job, number: int, items: Sequence, places, kept: KeptParts | None):
    part = work.answer(items, places)
    if kept is not None:
        kept.keep(number, part)
    return part


class Crew:
    """Other processes, called before there is work, so that they are there when there is.

    Parameters
    ----------
    count : int
    """

    def __init__(self, count: int) -> None:
        self._workers = [_Worker() for _ in range(count)]

    def one(self) -> _Worker:
        """Return a worker, which is then the caller's to close."""
        return self._workers.pop() if self._workers else _Worker()

    def close(self) -> None:
        """Send those home that nobody wanted."""
        for worker in self._workers:
            worker.close()


# --- processes ----------------------------------------------------------------------------------------


class _Worker:
    """Another Python that answers batches through its pipes.

    It starts nothing of the program that called us, unlike a process of `multiprocessing`, so that a script
    needs no guard about its own main part; and it ends when its pipe does.
    """

    def __init__(self) -> None:
        path = [p for p in sys.path if p]
        environment = {**os.environ, "PYTHONPATH": os.pathsep.join(path)}
        for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
            environment.setdefault(name, "1")
        self._process = subprocess.Popen(
            [sys.executable, "-m", "terrain2q.batches.engines"],
            stdin=subprocess.PIPE, stdout=subprocess.PIPE, env=environment,
        )  # fmt: skip

    def send(self, message: bytes) -> None:
        self._process.stdin.write(message)
        self._process.stdin.flush()

    def answer(self, batch: Batch):
        try:
            self.send(pickle.dumps(batch, protocol=5))
            part = pickle.load(self._process.stdout)
        except (EOFError, OSError, pickle.UnpicklingError) as error:
            raise RuntimeError(
                f"a worker process ended in the middle of its work (exit code {self._process.poll()}); "
                "run again to go on, with a smaller --jobs where memory is short"
            ) from error
        if isinstance(part, BaseException):
            raise part
        return part

    def close(self) -> None:
        self._process.stdin.close()
        self._process.stdout.close()
        self._process.kill()
        self._process.wait()


class _Here:
    """The process itself as one of the workers: it is at work while the others still start."""

    def __init__(self, work: Job, kept: KeptParts | None) -> None:
        self._work, self._kept = work, kept
        # one thread reads the terrain for each that works
        self._threads, tiles.MOST_THREADS = tiles.MOST_THREADS, 1

    def answer(self, batch: Batch):
        number, items, places = batch
        return _answered(self._work, number, items, places, self._kept)

    def close(self) -> None:
        tiles.MOST_THREADS = self._threads


def processes(
    work: Job, batches: Sequence[Batch], jobs: int, kept: KeptParts | None = None, crew: Crew | None = None
) -> Iterator[tuple[int, Any]]:
    """Work on several batches at once: this process, and others of which each keeps its parts itself."""
    crew = crew or Crew(0)
    message = pickle.dumps((work, kept), protocol=5)
    workers: list[_Worker | _Here] = [_Here(work, kept)]
    first = threading.Lock()
    mine = threading.local()

    def begin() -> None:
        if first.acquire(blocking=False):
            mine.worker = workers[0]
            return
        mine.worker = crew.one()
        workers.append(mine.worker)
        mine.worker.send(message)

    def one(batch: Batch) -> tuple[int, Any]:
        return batch[0], mine.worker.answer(batch)

    pool = ThreadPoolExecutor(min(jobs, len(batches)), initializer=begin)
    asked: set[Future] = set()
    try:
        waiting = iter(batches)
        # few are asked for ahead, so that parts do not pile up where they are taken slowly
        asked = {pool.submit(one, batch) for _, batch in zip(range(2 * jobs), waiting, strict=False)}
        while asked:
            done, asked = wait(asked, return_when=FIRST_COMPLETED)
            for future in done:
                following = next(waiting, None)
                if following is not None:
                    asked.add(pool.submit(one, following))
                yield future.result()
    finally:
        pool.shutdown(wait=False, cancel_futures=True)
        for worker in workers[1:]:
            worker.close()
        pool.shutdown()
        for worker in workers:  # one may have begun meanwhile
            worker.close()


def _serve() -> None:
    """Answer batches from stdin to stdout until there are no more."""
    source, target = sys.stdin.buffer, os.fdopen(os.dup(sys.stdout.fileno()), "wb")
    # what libraries print must not get between the parts
    os.dup2(sys.stderr.fileno(), sys.stdout.fileno())
    tiles.MOST_THREADS = 1
    # what is sure to be needed is loaded while the inputs are still read
    with suppress(ImportError):
        import terrain2q.hydraulics.compiled_batch
        import terrain2q.output.compiled_wkb  # noqa: F401
    try:
        work, kept = pickle.load(source)
    except EOFError:
        return
    # what stays to the end need not be looked through again and again for what can go
    gc.freeze()
    while True:
        try:
            number, items, places = pickle.load(source)
        except EOFError:
            return
        try:
            answer: object = _answered(work, number, items, places, kept)
            if kept is not None:
                answer = None
        except Terrain2qError as error:
            answer = error
        except Exception as error:
            error.add_note("in a worker process")
            answer = error
        pickle.dump(answer, target, protocol=5)
        target.flush()


# --- a cluster ----------------------------------------------------------------------------------------


def cluster(
    work: Job, batches: Sequence[Batch], address: str, kept: KeptParts | None = None
) -> Iterator[tuple[int, Any]]:
    """Work on a Dask cluster; a batch whose worker dies is given to another.

    Raises
    ------
    InputError
        ``library-missing`` where Dask is not installed, ``scheduler-unreachable`` where nobody answers.
    """
    with _client(address) as client:
        from distributed import as_completed

        # a task and not scattered data, so that it can be made again where the worker that held it dies
        shared = client.submit(pickle.loads, pickle.dumps(work, protocol=5), pure=False, retries=3)
        futures = {
            client.submit(_answer, shared, items, places, pure=False, retries=3): number
            for number, items, places in batches
        }
        for future in as_completed(list(futures), loop=client.loop):
            number = futures.pop(future)
            part = future.result()
            future.release()  # the cluster need not hold what has been taken
            if kept is not None:
                kept.keep(number, part)
            yield number, part


def _answer(work: Job, items: Sequence, places: Sequence[int]):
    return work.answer(items, places)


@contextmanager
def _client(address: str):
    try:
        from distributed import Client
    except ImportError as error:
        raise InputError(
            "library-missing",
            "a cluster needs Dask, which is not installed",
            where="--scheduler",
            fix='install it with: pip install "terrain2q[cluster]"',
        ) from error
    try:
        client = Client(address, timeout=10, set_as_default=False)
    except (OSError, TimeoutError, ValueError) as error:
        raise InputError(
            "scheduler-unreachable", f"no scheduler answers at {address}: {error}", where="--scheduler"
        ) from error
    try:
        yield client
    finally:
        client.close()


if __name__ == "__main__":
    _serve()
