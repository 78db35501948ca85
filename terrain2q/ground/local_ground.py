"""The ground about one place, read once, in metres east and north of it."""

from __future__ import annotations

import numpy as np
from scipy.ndimage import map_coordinates

from terrain2q.ground.terrain import Terrain


class LocalGround:
    """A window of the terrain about a place, with coordinates in metres of ground.

    Within a kilometre or so a map's scale is one number in each direction; for lengths that go into an
    answer the terrain's own distances are used.

    Parameters
    ----------
    terrain : Terrain
    x, y : float
        The place, in the terrain's CRS: the origin of the metres.
    reach : float or sequence of four floats
        Metres to each side; or the bounds about the place: west, south, east, north.

    Attributes
    ----------
    elevations : ndarray of float32, shape (rows, columns)
        Metres, NaN in gaps.
    cell : float
        Ground size of a cell, its smaller side, metres.
    scale : ndarray, shape (2,)
        Metres in one map unit along x and y.
    """

    def __init__(self, terrain: Terrain, x: float, y: float, reach) -> None:
        self.origin = np.array([x, y], dtype=float)
        unit = 1e-4
        steps = terrain.distances.step_lengths([x, x], [y, y], [unit, 0.0], [0.0, unit])
        self.scale = np.asarray(steps) / unit
        bounds = np.asarray([-reach, -reach, reach, reach] if np.isscalar(reach) else reach, dtype=float)
        box = self.origin[[0, 1, 0, 1]] + bounds / self.scale[[0, 1, 0, 1]]
        self.elevations, self.transform = terrain.read_window(box, dtype=np.float32)
        self.cell = float(min(terrain.cell_size))
        a, b, _, d, e, _ = self.transform[:6]
        self._inverse = np.array([[e, -b], [-d, a]]) / (a * e - b * d)

    def to_map(self, points) -> np.ndarray:
        """Return map coordinates of local points, shape (..., 2)."""
        return self.origin + np.asarray(points, dtype=float) / self.scale

    def to_local(self, points) -> np.ndarray:
        """Return local metres of map points, shape (..., 2)."""
        return (np.asarray(points, dtype=float) - self.origin) * self.scale

    def at(self, points) -> np.ndarray:
        """Return elevations at local points, straight between cell centres; NaN in gaps and outside."""
        points = np.asarray(points, dtype=float)
        step = self.to_map(points) - [self.transform.c, self.transform.f]
        column, row = np.moveaxis(step @ self._inverse.T, -1, 0)
        if not self.elevations.size:
            return np.full(column.shape, np.nan)
        # a place in the outer half of an outer cell takes that cell's own height, as the terrain does
        height, width = self.elevations.shape
        inside = (column >= 0) & (column <= width) & (row >= 0) & (row <= height)
        place = [np.clip(row - 0.5, 0, height - 1), np.clip(column - 0.5, 0, width - 1)]
        values = map_coordinates(self.elevations, place, order=1, mode="nearest", output=np.float64)
        return np.where(inside, values, np.nan)
