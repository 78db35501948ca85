"""Finished parts of a run, kept beside its output until all are done, so that a second run goes on.

A part counts only for the study and the inputs it was made from: their hash is the name of its folder.
"""

from __future__ import annotations

import hashlib
import json
import os
import pickle
import shutil
from collections.abc import Mapping, Sequence
from contextlib import suppress
from pathlib import Path

import numpy as np

from terrain2q import __version__
from terrain2q.batches.work import Part
from terrain2q.output.whole_file import not_writable

_PREFIX = ".unfinished-"

_NO_PART = (OSError, EOFError, LookupError, ValueError, TypeError, AttributeError, pickle.UnpicklingError)
"""What reading a file that is no part raises."""

_FORM = 2
"""Of the parts; those of another form are not taken up."""

_LENGTH = 8
"""Bytes at the head of a part that say how long the rest is."""


def study_hash(settings: Mapping, inputs: Mapping[str, Sequence[str]], batches: int) -> str:
    """Return what tells one run from another: settings, inputs and versions.

    Parameters
    ----------
    settings : mapping
        The study's tables as plain values; how and where it is written does not count.
    inputs : mapping of str to sequence of str
        Files by key. A file counts by its path, size and time of change, so that no large raster is read.
    batches : int
        How many there are.
    """
    files = {}
    for key, paths in inputs.items():
        for path in paths:
            try:
                about = os.stat(path)
                files[f"{key} {path}"] = [about.st_size, about.st_mtime_ns]
            except OSError:
                files[f"{key} {path}"] = []  # a web address, or a name only GDAL knows
    about = {
        "settings": {name: table for name, table in settings.items() if name != "output"},
        "files": files,
        "batches": batches,
        "versions": [__version__, np.__version__, _FORM],
    }
    return hashlib.sha256(json.dumps(about, sort_keys=True, default=str).encode()).hexdigest()[:16]


class KeptParts:
    """The folder of finished parts.

    Parameters
    ----------
    folder : path
        The output folder.
    name : str
        What tells this run from another (:func:`study_hash`).

    Attributes
    ----------
    refused : int
        Folders of parts made from other inputs, which are not used.
    """

    def __init__(self, folder: str | os.PathLike, name: str) -> None:
        self._output = Path(folder)
        self._folder = self._output / f"{_PREFIX}{name}"
        self._new = [p for p in (self._output, *self._output.parents) if not p.exists()]
        self.refused = sum(1 for path in self._all() if path != self._folder)

    def _all(self) -> list[Path]:
        return sorted(self._output.glob(f"{_PREFIX}*")) if self._output.is_dir() else []

    def _path(self, number: int) -> Path:
        return self._folder / f"{number:06d}.part"

    def __contains__(self, number: int) -> bool:
        """Whether a part is there, as long as it was when it was written."""
        try:
            with self._path(number).open("rb") as file:
                length = int.from_bytes(file.read(_LENGTH), "little")
                return os.fstat(file.fileno()).st_size == _LENGTH + length
        except OSError:
            return False

    def load(self, number: int, places: Sequence[int]) -> Part | None:
        """Return a kept part, None where it is not there or not whole."""
        try:
            with self._path(number).open("rb") as file:
                file.seek(_LENGTH)
                part = _PartUnpickler(file).load()
        except _NO_PART:
            return None
        same = isinstance(part, Part) and np.array_equal(part.places, places)
        return part if same else None

    def keep(self, number: int, part: Part) -> None:
        """Write a part, whole or not at all.

        Raises
        ------
        OutputError
            ``output-not-writable``.
        """
        target = self._path(number)
        temporary = target.with_suffix(f".{os.getpid()}")
        try:
            self._folder.mkdir(parents=True, exist_ok=True)
            with temporary.open("wb") as file:
                file.write(bytes(_LENGTH))
                pickle.dump(part, file, protocol=5)
                length = file.tell() - _LENGTH
                file.seek(0)
                file.write(length.to_bytes(_LENGTH, "little"))
            temporary.replace(target)
        except OSError as error:
            raise not_writable(target, error) from error

    def remove(self, *, all_new: bool = False) -> None:
        """Remove all parts, those of other inputs too; with `all_new` also the folders made for them."""
        for path in self._all():
            shutil.rmtree(path, ignore_errors=True)
        if all_new:
            for path in self._new:
                with suppress(OSError):
                    path.rmdir()


class _PartUnpickler(pickle.Unpickler):
    """Reads parts and nothing else: a file that asks for anything but data is no part."""

    _NUMPY = frozenset({"_reconstruct", "scalar", "dtype", "ndarray", "_frombuffer"})

    def find_class(self, module: str, name: str):
        found = super().find_class(module, name) if module.split(".")[0] in ("terrain2q", "numpy") else None
        data = isinstance(found, type) if module.startswith("terrain2q.") else name in self._NUMPY
        if found is None or not (data or (module == "terrain2q.units" and name == "unit_system")):
            raise pickle.UnpicklingError(f"a part holds {module}.{name}")
        return found
