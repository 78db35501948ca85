"""``run.json``: what went into a run and what came out, so that it can be repeated and checked."""

from __future__ import annotations

import dataclasses
import hashlib
import json
import math
import os
import platform
from collections import Counter
from collections.abc import Iterable, Iterator, Mapping
from concurrent.futures import Future, ThreadPoolExecutor
from contextlib import contextmanager, suppress
from datetime import UTC, date, datetime
from importlib import metadata
from pathlib import Path

import terrain2q
from terrain2q.columns import CAUTION
from terrain2q.errors import SEVERITIES, Finding
from terrain2q.output.whole_file import not_writable, whole_file

RECORD_NAME = "run.json"

# What decides the numbers and the files; a change in one of them may change a result.
_LIBRARIES = (
    "numpy",
    "scipy",
    "pandas",
    "shapely",
    "pyproj",
    "rasterio",
    "geopandas",
    "pyogrio",
    "matplotlib",
)

# The files of a shapefile that decide what is read from it. Indexes and notes, which a GIS writes
# while looking, are left out.
_SHAPEFILE = (".cpg", ".dbf", ".prj", ".shp", ".shx")


def sha256_of(path: str | os.PathLike) -> str:
    """Return the SHA-256 of an input as 64 hexadecimal digits.

    Parameters
    ----------
    path : path
        A file, a shapefile or a folder. A vector path with ``|layer=`` must come without it.

    Returns
    -------
    str
        Of a single file, what ``sha256sum`` prints. Of a shapefile (its ``.shp``, ``.shx``, ``.dbf``,
        ``.prj`` and ``.cpg``) and of a folder (every file in it), the SHA-256 of the lines
        ``<digest of the file>  <name>``, in the order of the names, so that it may be checked by hand.

    Raises
    ------
    OSError
        A file is not there or cannot be read.
    """
    path = Path(path)
    files = _files_of(path)
    if files == [path]:
        return _sha256_of_file(path)
    base = path if path.is_dir() else path.parent
    lines = (f"{_sha256_of_file(file)}  {file.relative_to(base).as_posix()}\n" for file in files)
    return hashlib.sha256("".join(lines).encode()).hexdigest()


def size_of(path: str | os.PathLike) -> int:
    """Return the bytes of the files that :func:`sha256_of` reads."""
    return sum(file.stat().st_size for file in _files_of(Path(path)))


def _files_of(path: Path) -> list[Path]:
    if path.is_dir():
        return sorted((file for file in path.rglob("*") if file.is_file()), key=lambda file: file.as_posix())
    if path.suffix.lower() == ".shp" and path.exists():
        return sorted(
            file
            for file in path.parent.iterdir()
            if file.stem == path.stem and file.suffix.lower() in _SHAPEFILE
        )
    return [path]


def _sha256_of_file(path: Path) -> str:
    ahead = _AHEAD.pop(_same_file(path), None)
    if ahead is not None and (digest := ahead.result()) is not None:
        return digest
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


# Digests of files that a thread is at, each taken once.
_AHEAD: dict[tuple, Future] = {}


@contextmanager
def hashed_ahead(paths: Iterable[str | os.PathLike]) -> Iterator[None]:
    """Let a thread hash files while the block does something else; :func:`sha256_of` then has them at once.

    A file that changes meanwhile is hashed again when it is asked for.
    """
    pool = ThreadPoolExecutor(1)
    mine = []
    for path in paths:
        with suppress(OSError):
            for file in _files_of(Path(path)):
                key = _same_file(file)
                _AHEAD[key] = pool.submit(_hash_unless_changed, file, key)
                mine.append(key)
    try:
        yield
    finally:
        pool.shutdown(wait=False, cancel_futures=True)
        for key in mine:
            if (future := _AHEAD.get(key)) is not None and future.cancelled():
                del _AHEAD[key]


def _same_file(path: Path) -> tuple:
    about = path.stat()
    return about.st_dev, about.st_ino, about.st_size, about.st_mtime_ns


def _hash_unless_changed(path: Path, key: tuple) -> str | None:
    try:
        with path.open("rb") as file:
            digest = hashlib.file_digest(file, "sha256").hexdigest()
        return digest if _same_file(path) == key else None
    except OSError:
        return None


def versions() -> dict[str, str]:
    """Return the versions of Python, of this package and of the libraries that decide the numbers."""
    found = {"python": platform.python_version(), "terrain2q": terrain2q.__version__}
    for name in _LIBRARIES:
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:  # pragma: no cover - all are required
            continue
    return found


def findings_by_code(findings: Iterable[Finding]) -> dict[str, dict[str, int]]:
    """Count findings by severity, the worst first, and by code, in the order of the alphabet.

    Examples
    --------
    >>> findings_by_code([Finding("line-turned", "Line 3 has been turned.")])
    {'by_severity': {'failed': 0, 'doubtful': 0, 'note': 1}, 'by_code': {'line-turned': 1}}
    """
    findings = list(findings)
    severities = Counter(finding.severity for finding in findings)
    codes = Counter(finding.code for finding in findings)
    return {
        "by_severity": {severity: severities[severity] for severity in SEVERITIES},
        "by_code": dict(sorted(codes.items())),
    }


def run_record(
    *,
    inputs: Mapping[str, str | os.PathLike | Iterable[str | os.PathLike]],
    settings: Mapping,
    units: str,
    crs: str,
    counts: Mapping[str, int],
    findings: Iterable[Finding],
    seconds: float,
    outputs: Iterable[str | os.PathLike] = (),
    earlier: Iterable[Mapping] = (),
    finished: str | None = None,
) -> dict:
    """Gather what ``run.json`` says about a run.

    Parameters
    ----------
    inputs : mapping of str to path or paths
        By the key of the study file, such as ``terrain.dem``, the file or files read.
    settings : mapping
        The study as it was understood, defaults filled in.
    units, crs : str
        Of the results.
    counts : mapping of str to int
        Rows by layer, and what else is worth counting.
    findings : iterable of Finding
        All findings of the run.
    seconds : float
        How long the run took.
    outputs : iterable of path
        Files written, to tell whether a result belongs to this record.
    earlier : iterable of mapping
        Files of the run before, see :func:`files_of_record`, that are still in the folder. They stand under
        ``pages`` until the run has ended, so that no file of ours is ever lost sight of.
    finished : str, optional
        The time of writing; now where not given.

    Returns
    -------
    dict
        To be given to :func:`write_run_record`.
    """
    outputs = [_file(path) for path in outputs]
    new = {_name(entry) for entry in outputs}
    files = []
    for key, paths in inputs.items():
        paths = [paths] if isinstance(paths, str | os.PathLike) else paths
        files += [{"key": key, **_file(path)} for path in paths]
    return {
        "caution": CAUTION,
        "finished": finished or datetime.now(UTC).isoformat(timespec="seconds"),
        "seconds": round(float(seconds), 3),
        "units": units,
        "crs": crs,
        "versions": versions(),
        "platform": platform.platform(),
        "inputs": files,
        "outputs": outputs,
        "pages": [dict(entry) for entry in earlier if _name(entry) not in new],
        "counts": dict(counts),
        "findings": findings_by_code(findings),
        "settings": dict(settings),
    }


def _file(path: str | os.PathLike) -> dict:
    return {"path": str(path), "bytes": size_of(path), "sha256": sha256_of(path)}


def _name(entry: Mapping) -> str:
    return str(entry["path"]).replace("\\", "/").rpartition("/")[2]


def files_of_record(folder: Path) -> list[dict]:
    """Return the files that the record in an output folder says were written there; empty without one."""
    try:
        record = json.loads((folder / RECORD_NAME).read_text(encoding="utf-8"))
        entries = [*record.get("outputs", ()), *record.get("pages", ())]
        return [e for e in entries if isinstance(e["path"], str) and isinstance(e["sha256"], str)]
    except (OSError, ValueError, TypeError, KeyError, AttributeError):
        return []


def note_pages(folder: Path, pages: Iterable[Path], *, alone: bool = False) -> None:
    """Note pages and tables, with their SHA-256, in the record of their folder; without one nothing is done.

    Parameters
    ----------
    folder : Path
    pages : iterable of Path
        Just written.
    alone : bool
        Forget what else stood there.
    """
    path = folder / RECORD_NAME
    try:
        record = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return
    new = {_name(entry): entry for entry in map(_file, pages)}
    old = {} if alone else {_name(entry): entry for entry in record.get("pages", ())}
    record["pages"] = list({**old, **new}.values())
    write_run_record(path, record)


def remove_earlier(folder: Path, earlier: Iterable[Mapping], written: Iterable[Path]) -> list[Path]:
    """Remove files of the run before that a new run did not write, as they could be taken for its own.

    Parameters
    ----------
    folder : Path
        Nothing outside of it is touched.
    earlier : iterable of mapping
        See :func:`files_of_record`.
    written : iterable of Path
        Files of the new run.

    Returns
    -------
    list of Path
        Those that have changed since they were written, or cannot be removed; they stay.
    """
    names = {path.name for path in written}
    left = []
    for entry in earlier:
        path = folder / _name(entry)
        if path.name in names or not path.is_file():
            continue
        try:
            if sha256_of(path) == entry["sha256"]:
                path.unlink()
                continue
        except OSError:
            pass
        left.append(path)
    return left


def plain(value):
    """Return a value made of what JSON knows: NaN and infinity become null, paths and dates text.

    Raises
    ------
    TypeError
        The value, or a part of it, is of a kind that has no place in JSON.

    Examples
    --------
    >>> plain({"slope": float("nan"), "tiles": (Path("a.tif"),)})
    {'slope': None, 'tiles': ['a.tif']}
    """
    if value is None or isinstance(value, str | bool | int):
        return value
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, Path):
        return str(value)
    if isinstance(value, date):
        return value.isoformat()
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {field.name: plain(getattr(value, field.name)) for field in dataclasses.fields(value)}
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, set | frozenset):
        return [plain(item) for item in sorted(value)]
    if isinstance(value, list | tuple):
        return [plain(item) for item in value]
    if hasattr(value, "tolist"):  # numpy's numbers and arrays
        return plain(value.tolist())
    raise TypeError(f"{type(value).__name__} has no place in a run record: {value!r}")


def write_run_record(path: str | os.PathLike, record: Mapping) -> None:
    """Write a record as JSON, whole or not at all; an earlier record is replaced.

    Parameters
    ----------
    path : path
        Usually ``run.json`` in the output folder.
    record : mapping
        See :func:`run_record`; NaN becomes null.

    Raises
    ------
    OutputError
        The file cannot be written (code ``output-not-writable``).
    """
    text = json.dumps(plain(record), ensure_ascii=False, allow_nan=False, indent=2) + "\n"
    path = Path(path)
    with whole_file(path) as temporary:
        try:
            temporary.write_text(text, encoding="utf-8", newline="\n")
        except OSError as error:
            raise not_writable(path, error) from error
