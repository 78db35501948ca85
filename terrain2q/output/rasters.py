"""Grids as Cloud Optimized GeoTIFFs on the terrain's own cells, written whole or not at all.

A grid is streamed by rows into a tiled file beside its place, from which GDAL's COG driver makes the
result with its overviews; only then does it take its name.
"""

from __future__ import annotations

import os
import re
import unicodedata
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager, suppress
from pathlib import Path

import numpy as np
import rasterio
import rasterio.shutil
from rasterio.enums import Resampling
from rasterio.errors import RasterioError
from rasterio.transform import Affine
from rasterio.windows import Window

from terrain2q.jobs.extent import FloodMap
from terrain2q.output.whole_file import not_writable, whole_file
from terrain2q.units import UnitSystem

NODATA = -9999.0
BLOCK = 512

FINENESS = 1024
"""Values are kept to this part of their unit, a millimetre or less: finer digits only fill the file."""


_MOST_LETTERS = 60
"""Of an event's name in a file's: file systems take 255 bytes for the whole."""


def file_words(events: Sequence[str]) -> dict[str, str]:
    """Return for each event a word that any file system takes, no two alike.

    Examples
    --------
    >>> file_words(["10-year", "1 % chance", "1 ? chance"])
    {'10-year': '10-year', '1 % chance': '1_chance', '1 ? chance': '1_chance_2'}
    >>> file_words(["Crue décennale"])
    {'Crue décennale': 'Crue_decennale'}
    """
    words: dict[str, str] = {}
    taken: set[str] = set()
    for event in events:
        # a letter without its accents says more than none
        letters = "".join(c for c in unicodedata.normalize("NFKD", event) if not unicodedata.combining(c))
        plain = re.sub(r"[^A-Za-z0-9.-]+", "_", letters)[:_MOST_LETTERS].strip("._") or "event"
        word, number = plain, 1
        while word.lower() in taken:
            number += 1
            word = f"{plain}_{number}"
        taken.add(word.lower())
        words[event] = word
    return words


class _Statistics:
    """Least, greatest, mean and standard deviation of values that come in parts."""

    def __init__(self) -> None:
        self.least, self.most, self.count, self.cells, self.mean, self.square = (
            np.inf,
            -np.inf,
            0,
            0,
            0.0,
            0.0,
        )

    def add(self, values: np.ndarray, cells: int) -> None:
        self.cells += cells
        if not values.size:
            return
        mean = float(values.mean(dtype=float))
        # two parts joined (Chan, Golub and LeVeque 1983)
        apart, total = mean - self.mean, self.count + values.size
        self.square += (
            float(values.var(dtype=float)) * values.size + apart**2 * self.count * values.size / total
        )
        self.mean += apart * values.size / total
        self.count = total
        self.least, self.most = min(self.least, float(values.min())), max(self.most, float(values.max()))

    def tags(self) -> dict[str, str]:
        if not self.count:
            return {}
        return {
            "STATISTICS_MINIMUM": f"{self.least:.9g}",
            "STATISTICS_MAXIMUM": f"{self.most:.9g}",
            "STATISTICS_MEAN": f"{self.mean:.9g}",
            "STATISTICS_STDDEV": f"{(self.square / self.count) ** 0.5:.9g}",
            "STATISTICS_VALID_PERCENT": f"{100 * self.count / self.cells:.4g}",
        }


@contextmanager
def cloud_raster(
    path: str | os.PathLike,
    read: Callable[[int, int], np.ndarray],
    *,
    rows: int,
    columns: int,
    transform: Affine,
    crs,
    factor: float,
    unit: str,
    description: str,
    step: int = BLOCK,
) -> Iterator[Path]:
    """Write a grid beside `path` and put it in its place when the block ends well.

    Parameters
    ----------
    path : path
        Ending in ``.tif``.
    read : callable
        ``read(row, end)`` returns some rows, shape (end - row, columns); NaN where there is nothing.
    rows, columns, transform, crs
        The grid.
    factor : float
        What values are multiplied by.
    unit, description : str
        Of the band, after multiplication.
    step : int
        Rows read at once.

    Raises
    ------
    OutputError
        The file cannot be written (code ``output-not-writable``).
    """
    with whole_file(path) as temporary:
        base = temporary.with_name(temporary.name + ".base.tif")
        try:
            statistics = _Statistics()
            with rasterio.open(
                base, "w", driver="GTiff", height=rows, width=columns, count=1, dtype="float32",
                crs=None if crs is None else crs.to_wkt(), transform=transform, nodata=NODATA,
                tiled=True, blockxsize=BLOCK, blockysize=BLOCK, sparse_ok=True, bigtiff="if_safer",
            ) as out:  # fmt: skip
                for row in range(0, rows, step):
                    end = min(row + step, rows)
                    values = read(row, end)
                    known = np.isfinite(values)
                    if not known.any():
                        statistics.add(values[known], values.size)
                        continue
                    values *= np.float32(factor * FINENESS)
                    np.rint(values, out=values)
                    values *= np.float32(1.0 / FINENESS)
                    statistics.add(values[known], values.size)
                    np.copyto(values, NODATA, where=~known)
                    # blocks without water are left out of the file
                    for column in range(0, columns, BLOCK):
                        last = min(column + BLOCK, columns)
                        if known[:, column:last].any():
                            part = values[:, column:last]
                            out.write(part, 1, window=Window(column, row, last - column, end - row))
                out.units, out.descriptions = (unit,), (description,)
                out.update_tags(1, **statistics.tags())
            # here parts without water are passed over; the COG driver would average every one of them
            factors = [2**k for k in range(1, 32) if 2 ** (k - 1) * BLOCK < max(rows, columns)]
            if factors:
                with rasterio.Env(SPARSE_OK_OVERVIEW="YES"), rasterio.open(base, "r+") as out:
                    out.build_overviews(factors, Resampling.average)
            rasterio.shutil.copy(
                base, temporary, driver="COG", compress="DEFLATE", predictor="YES", level="1",
                blocksize=str(BLOCK), bigtiff="IF_SAFER", num_threads="ALL_CPUS", sparse_ok="TRUE",
            )  # fmt: skip
        except (RasterioError, OSError) as error:
            raise not_writable(Path(path), error) from error
        finally:
            with suppress(OSError):
                base.unlink()
        yield Path(path)


@contextmanager
def flood_rasters(folder: Path, floods: FloodMap, units: UnitSystem, crs) -> Iterator[list[Path]]:
    """Write ``depth_<event>.tif`` and ``depth_velocity_<event>.tif`` of every event.

    All take their names when the block ends well, and none where it raises.

    Parameters
    ----------
    folder : pathlib.Path
    floods : FloodMap
        One without cells writes nothing.
    units : UnitSystem
    crs : pyproj.CRS
        The terrain's.

    Yields
    ------
    list of pathlib.Path
        The files.
    """
    with ExitStack() as stack:
        paths = []
        words = file_words([e.event for e in floods.events]) if floods.rows else {}
        for event in floods.events if words else ():
            length = units.symbol("length")
            kinds = (
                ("depth", event.depth, "length", length, f"Depth of water, {event.event}"),
                ("depth_velocity", event.depth_velocity, "area", f"{length}2/s",
                 f"Depth times mean velocity of the subarea, {event.event}"),
            )  # fmt: skip
            for name, read, quantity, unit, description in kinds:
                raster = cloud_raster(
                    folder / f"{name}_{words[event.event]}.tif", read,
                    rows=floods.rows, columns=floods.columns, transform=floods.transform, crs=crs,
                    factor=units.per_si(quantity), unit=unit, description=description,
                )  # fmt: skip
                paths.append(stack.enter_context(raster))
        yield paths
