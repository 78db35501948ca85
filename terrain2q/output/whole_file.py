"""A file is there whole or not at all: written beside its place, then renamed into it."""

from __future__ import annotations

import os
import platform
import re
import secrets
import time
from collections.abc import Iterator
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
