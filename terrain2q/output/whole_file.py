"""Files are there whole or not at all: written beside their places, then renamed into them."""

from __future__ import annotations

import os
import platform
import re
import secrets
import shutil
import signal
import threading
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from pathlib import Path

from terrain2q.errors import OutputError

# A run on another machine, whose processes cannot be seen, is taken for dead after this long.
_STALE_SECONDS = 3600.0


@contextmanager
def whole_file(path: str | os.PathLike) -> Iterator[Path]:
    """Give a temporary path in the same folder; rename it to `path` when the block ends well.

    A reader of `path` sees the earlier file or the whole new one at every moment, also when this
    process is killed. Where the block raises, the earlier file stays and nothing new is left in the
    folder. What a killed run left is removed by the next run that writes the same `path`.

    Parameters
    ----------
    path : path
        The file to make or to replace; its folder is made where it is not there.

    Yields
    ------
    pathlib.Path
        Where to write; it has the ending of `path`.

    Raises
    ------
    OutputError
        The folder or the file cannot be written (code ``output-not-writable``).
    """
    target = Path(path)
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        _remove_stale(target)
    except OSError as error:
        raise not_writable(target, error) from error
    token = secrets.token_hex(4)
    temporary = target.with_name(f".{target.name}.partial-{_host()}-{os.getpid()}-{token}{target.suffix}")
    try:
        yield temporary
        try:
            _flush_to_disk(temporary)
            temporary.replace(target)
            if os.name == "posix":
                _flush_to_disk(target.parent)
        except OSError as error:
            raise not_writable(target, error) from error
    finally:
        # Also what a library keeps beside its file, such as a journal.
        for left in target.parent.glob(f"{_literal(temporary.name)}*"):
            with suppress(OSError):
                left.unlink()


_FOLDER_MARK = ".unfinished.partial-"


@contextmanager
def whole_folder(
    folder: str | os.PathLike, first: Sequence[str] = (), last: Sequence[str] = ()
) -> Iterator[Path]:
    """Give an empty folder within `folder`; move its files up into `folder` when the block ends well.

    Where the block raises, `folder` is as it was: without the new files, and not there at all where it was
    not there before and nothing else was put into it. An interruption by the keyboard that comes while the
    files are moved waits until all are in their places. What a killed run left is removed by the next.

    Parameters
    ----------
    folder : path
        Made where it is not there. Files with the names of new ones are replaced.
    first, last : sequence of str
        Names of the files that are moved before, and after, all others: one that is open elsewhere stops
        the rest where it goes first; one that speaks of the others goes last.

    Yields
    ------
    pathlib.Path
        Where to write.

    Raises
    ------
    OutputError
        The folder cannot be written, or a file cannot be replaced (code ``output-not-writable``).
    """
    target = Path(folder)
    made = [path for path in (target, *target.parents) if not path.exists()]
    try:
        target.mkdir(parents=True, exist_ok=True)
        _remove_stale_folders(target)
        inner = target / f"{_FOLDER_MARK}{_host()}-{os.getpid()}-{secrets.token_hex(4)}"
        inner.mkdir()
    except OSError as error:
        raise not_writable(target, error) from error
    try:
        yield inner
        files = sorted(path for path in inner.iterdir() if path.is_file())
        files.sort(key=lambda path: (path.name in last, path.name not in first))
        with _uninterrupted():
            for path in files:
                try:
                    path.replace(target / path.name)
                except OSError as error:
                    raise not_writable(target / path.name, error) from error
            if os.name == "posix":
                _flush_to_disk(target)
    except OutputError as error:
        # said of the place that the user knows
        error.where = error.where.replace(str(inner), str(target))
        raise
    finally:
        shutil.rmtree(inner, ignore_errors=True)
        for path in made:
            # stops at the first that holds something
            with suppress(OSError):
                path.rmdir()


@contextmanager
def _uninterrupted() -> Iterator[None]:
    """Let an interruption by the keyboard wait until the block has ended."""
    if threading.current_thread() is not threading.main_thread():
        yield  # another thread is not interrupted, and may not say what is
        return
    came = []
    before = signal.getsignal(signal.SIGINT)
    if before is None:  # set by something other than Python
        yield
        return
    signal.signal(signal.SIGINT, lambda *about: came.append(about))
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)
    if came and callable(before):
        before(*came[0])


def not_writable(target: Path, error: BaseException) -> OutputError:
    """Return the error that says why `target` cannot be written."""
    reason = getattr(error, "strerror", None) or str(error)
    return OutputError("output-not-writable", f"{target.name} cannot be written: {reason}", where=str(target))


def _host() -> str:
    return re.sub(r"[^A-Za-z0-9]", "_", platform.node()) or "here"


def _flush_to_disk(path: Path) -> None:
    descriptor = os.open(path, os.O_RDONLY if path.is_dir() else os.O_RDWR)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def _literal(name: str) -> str:
    # Text that glob takes for itself, whatever signs it holds.
    return re.sub(r"([*?[])", r"[\1]", name)


def _remove_stale(target: Path) -> None:
    pattern = re.compile(re.escape(f".{target.name}.partial-") + r"(\w+)-(\d+)-[0-9a-f]{8}")
    for found in target.parent.glob(f"{_literal('.' + target.name)}.partial-*"):
        match = pattern.match(found.name)
        if match is None:
            continue
        with suppress(FileNotFoundError):
            old = time.time() - found.stat().st_mtime > _STALE_SECONDS
            if old or (match[1] == _host() and not _is_running(int(match[2]))):
                found.unlink()


def _remove_stale_folders(target: Path) -> None:
    pattern = re.compile(re.escape(_FOLDER_MARK) + r"(\w+)-(\d+)-[0-9a-f]{8}")
    for found in target.glob(f"{_FOLDER_MARK}*"):
        match = pattern.fullmatch(found.name)
        if match is None or not found.is_dir():
            continue
        with suppress(FileNotFoundError):
            old = time.time() - found.stat().st_mtime > _STALE_SECONDS
            if (match[1] == _host() and not _is_running(int(match[2]))) or (old and match[1] != _host()):
                shutil.rmtree(found, ignore_errors=True)


def _is_running(process: int) -> bool:
    if os.name != "posix":
        return True  # asking would end the process there; its age decides
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    except (OSError, OverflowError):
        return True
    return True
