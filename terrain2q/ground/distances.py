"""True ground distances along lines drawn in any coordinate reference system.

Map units are not ground metres: degrees shrink towards the poles, a projected zone stretches by
parts in ten thousand, and the Mercator of web maps by 1/cos(latitude). So every length here is the
length on the ellipsoid of the line as it is drawn, straight on the map between its vertices.

With longitude λ and latitude φ on an ellipsoid of semi-major axis a and eccentricity e, the length
of a curve is (any text on geometrical geodesy, from memory)

    ds² = (M dφ)² + (N cos φ dλ)²,   N = a / √(1 - e² sin²φ),   M = N (1 - e²) / (1 - e² sin²φ)

Each drawn segment is cut into panels of at most a kilometre. In a panel λ and φ are taken as
quadratic in the place along the segment (through its ends and middle), which gives ds/dt at these
three places; the station within the panel is the integral of the parabola through them. That is
exact to about 1e-9 of the length below 85° of latitude, at two coordinate transformations per panel.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyproj

from terrain2q.errors import InputError

PANEL_LENGTH = 1000.0
"""Longest panel, in metres of map."""

_SHORT = 50
"""Panels of lines that are summed together, a panel of each at a time."""


def horizontal_crs(crs) -> pyproj.CRS:
    """Return the horizontal part of a CRS: no vertical axis, no shift to another datum attached.

    Parameters
    ----------
    crs : pyproj.CRS or anything it accepts

    Raises
    ------
    InputError
        The CRS is not recognised (``crs-unknown``).
    """
    try:
        crs = pyproj.CRS.from_user_input(crs)
    except pyproj.exceptions.CRSError as error:
        raise InputError(
            "crs-unknown", f"the coordinate reference system {crs!r} is not recognised"
        ) from error
    while crs.is_bound or crs.is_compound:
        crs = crs.source_crs if crs.is_bound else crs.sub_crs_list[0]
    return crs.to_2d() if len(crs.axis_info) == 3 else crs


@dataclass(frozen=True, eq=False)
class MeasuredLines:
    """Ground distances along lines, ready to be asked at any place between the vertices.

    Attributes
    ----------
    first_panel, panels : ndarray of int, shape (vertices,)
        The panels of the segment that starts at each vertex; a line's last vertex has one of no length.
    panel_station : ndarray, shape (panels,)
        Station of each panel's start, in metres from its line's first vertex.
    speeds : ndarray, shape (3, panels)
        ds/du in metres at the start, middle and end of each panel, with u from 0 to 1 along it.
    """

    first_panel: np.ndarray
    panels: np.ndarray
    panel_station: np.ndarray
    speeds: np.ndarray

    @property
    def vertex_stations(self) -> np.ndarray:
        """Station of every vertex, metres, shape (vertices,)."""
        return self.panel_station[self.first_panel]

    @property
    def largest_speed(self) -> np.ndarray:
        """Largest ds/dt in metres of the segment from each vertex, t from 0 to 1; shape (vertices,)."""
        if not self.panels.size:
            return np.zeros(0)
        return self.panels * np.maximum.reduceat(self.speeds.max(axis=0), self.first_panel)

    def stations(self, vertex: np.ndarray, fraction: np.ndarray) -> np.ndarray:
        """Return the stations of places on segments.

        Parameters
        ----------
        vertex : ndarray of int, shape (n,)
            The vertex at which each place's segment starts.
        fraction : ndarray, shape (n,)
            How far along the segment on the map, from 0 to 1.

        Returns
        -------
        ndarray, shape (n,)
            Metres from the line's first vertex.
        """
        panels = self.panels[vertex]
        u = fraction * panels
        panel = np.minimum(u.astype(np.int64), panels - 1)
        u -= panel
        panel += self.first_panel[vertex]
        start, middle, end = (speed[panel] for speed in self.speeds)
        # The integral of the parabola through the three speeds.
        return self.panel_station[panel] + u * (
            start
            + u * (0.5 * (4.0 * middle - 3.0 * start - end) + u * (2.0 / 3.0) * (start - 2.0 * middle + end))
        )


class GroundDistances:
    """Lengths on the ellipsoid of a coordinate reference system.

    Parameters
    ----------
    crs : pyproj.CRS or anything it accepts
        Geographic or projected; only the horizontal part counts. Coordinates are (x, y) in GIS order:
        easting or longitude first. No datum is shifted: a projected CRS is measured on its own datum.

    Attributes
    ----------
    crs : pyproj.CRS
    geod : pyproj.Geod
        The ellipsoid.

    Raises
    ------
    InputError
        The CRS is not tied to the Earth (``crs-local``) or not recognised (``crs-unknown``).

    Examples
    --------
    A degree of longitude at 60° north, and a map metre of the web maps' Mercator there:

    >>> round(float(GroundDistances("EPSG:4326").along([0.0, 1.0], [60.0, 60.0])[-1]))
    55800
    >>> round(float(GroundDistances("EPSG:3857").along([0.0, 1.0], [8399737.89, 8399737.89])[-1]), 4)
    0.5013
    """

    def __init__(self, crs) -> None:
        self.crs = horizontal_crs(crs)
        geographic = self.crs.geodetic_crs
        if self.crs.ellipsoid is None or geographic is None or self.crs.is_geocentric:
            raise InputError(
                "crs-local",
                f"the coordinate reference system {self.crs.name!r} has no ellipsoid or no axes on the "
                "ground, so true distances cannot be had",
            )
        geographic = horizontal_crs(geographic)
        self.geod = self.crs.get_geod()
        self._to_geographic = None
        if not self.crs.is_geographic or self.crs.is_derived:
            self._to_geographic = pyproj.Transformer.from_crs(self.crs, geographic, always_xy=True)
        # Degrees, or grads in some older systems.
        self._radians = geographic.axis_info[0].unit_conversion_factor
        unit = self.crs.axis_info[0].unit_conversion_factor
        self._rough_metres = unit * self.geod.a if self.crs.is_geographic else unit

    def __repr__(self) -> str:
        return f"GroundDistances({self.crs.name!r})"

    def __reduce__(self):
        # made anew from the CRS: an ellipsoid that is pickled loses its last digits
        return GroundDistances, (self.crs,)

    def _longitude_latitude(self, x: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return radians; infinite where the projection has no such place."""
        if self._to_geographic is not None and x.size:
            x, y = self._to_geographic.transform(x, y)
        return x * self._radians, y * self._radians

    def _speed(self, latitude: np.ndarray, d_longitude: np.ndarray, d_latitude: np.ndarray) -> np.ndarray:
        """Return the ground length in metres of small steps in radians."""
        shrink = 1.0 - self.geod.es * np.sin(latitude) ** 2
        across = self.geod.a / np.sqrt(shrink)
        along = across * (1.0 - self.geod.es) / shrink
        return np.sqrt((along * d_latitude) ** 2 + (across * np.cos(latitude) * d_longitude) ** 2)

    def _longitude_step(self, start: np.ndarray, end: np.ndarray) -> np.ndarray:
        step = end - start
        if self._to_geographic is not None:  # a projection may cross the antimeridian without a break
            step = np.remainder(step + np.pi, 2.0 * np.pi) - np.pi
        return step

    def measure(self, x, y, first_vertex) -> MeasuredLines:
        """Measure lines, each straight on the map between its vertices.

        Parameters
        ----------
        x, y : array_like, shape (vertices,)
            Vertices of all lines, one line after another.
        first_vertex : array_like of int, shape (lines,)
            Where each line starts in them, increasing from 0.

        Returns
        -------
        MeasuredLines
            Not finite where the projection has no such place.
        """
        x, y = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
        first_vertex = np.asarray(first_vertex, dtype=np.int64)
        last = np.zeros(x.size, dtype=bool)
        last[first_vertex[1:] - 1] = True
        last[-1:] = True
        step_x = np.where(last, 0.0, np.append(x[1:], 0.0) - x)
        step_y = np.where(last, 0.0, np.append(y[1:], 0.0) - y)
        rough = np.hypot(step_x, step_y) * (self._rough_metres / PANEL_LENGTH)
        panels = np.maximum(np.ceil(np.where(np.isfinite(rough), rough, 1.0)), 1.0).astype(np.int64)

        # Two nodes a panel, its start and its middle; its end is the next one's start.
        nodes = np.where(last, 1, 2 * panels)
        first_node = np.cumsum(nodes) - nodes
        vertex = np.repeat(np.arange(x.size), nodes)
        fraction = (np.arange(vertex.size) - first_node[vertex]) / nodes[vertex]
        longitude, latitude = self._longitude_latitude(
            x[vertex] + fraction * step_x[vertex], y[vertex] + fraction * step_y[vertex]
        )

        first_panel = np.cumsum(panels) - panels
        owner = np.repeat(np.arange(x.size), panels)
        start = first_node[owner] + 2 * (np.arange(owner.size) - first_panel[owner])
        moving = ~last[owner]
        start = start[moving]
        speeds = np.zeros((3, owner.size))
        with np.errstate(invalid="ignore"):  # infinite coordinates give NaN, which the caller looks for
            x1 = self._longitude_step(longitude[start], longitude[start + 1])
            x2 = self._longitude_step(longitude[start + 1], longitude[start + 2])
            y1, y2 = latitude[start + 1] - latitude[start], latitude[start + 2] - latitude[start + 1]
            speeds[0, moving] = self._speed(latitude[start], 3.0 * x1 - x2, 3.0 * y1 - y2)
            speeds[1, moving] = self._speed(latitude[start + 1], x1 + x2, y1 + y2)
            speeds[2, moving] = self._speed(latitude[start + 2], 3.0 * x2 - x1, 3.0 * y2 - y1)
        lengths = (speeds[0] + 4.0 * speeds[1] + speeds[2]) / 6.0

        # Summed line by line, so that a line's stations do not depend on its neighbours, to the last bit.
        panel_station = np.zeros(owner.size)
        begins = first_panel[first_vertex]
        sizes = np.diff(begins, append=owner.size)
        short = sizes <= _SHORT
        for step in range(1, int(sizes[short].max(initial=0))):
            at = begins[short & (sizes > step)] + step
            panel_station[at] = panel_station[at - 1] + lengths[at - 1]
        for begin, size in zip(begins[~short].tolist(), sizes[~short].tolist(), strict=True):
            np.cumsum(lengths[begin : begin + size - 1], out=panel_station[begin + 1 : begin + size])
        return MeasuredLines(first_panel, panels, panel_station, speeds)

    def along(self, x, y) -> np.ndarray:
        """Return the stations of one line's vertices.

        Parameters
        ----------
        x, y : array_like, shape (n,)

        Returns
        -------
        ndarray, shape (n,)
            Metres of ground from the first vertex.
        """
        return self.measure(x, y, [0]).vertex_stations if len(x) else np.zeros(0)

    def ring_area(self, x, y) -> float:
        """Return the area in m² inside a ring; ways between its vertices are geodesics, so let them be short.

        Parameters
        ----------
        x, y : array_like, shape (n,)
            The first vertex may be given again as the last. The way round does not matter.
        """
        longitude, latitude = self._longitude_latitude(np.asarray(x, dtype=float), np.asarray(y, dtype=float))
        return abs(self.geod.polygon_area_perimeter(longitude, latitude, radians=True)[0])

    def step_lengths(self, x, y, step_x, step_y) -> np.ndarray:
        """Return the ground lengths of short map steps.

        Parameters
        ----------
        x, y : array_like
            The middle of each step.
        step_x, step_y : array_like
            The step in map units.

        Returns
        -------
        ndarray
            Metres.
        """
        x, y, step_x, step_y = np.broadcast_arrays(
            *(np.asarray(v, dtype=float) for v in (x, y, step_x, step_y))
        )
        longitude, latitude = self._longitude_latitude(
            np.stack([x - 0.5 * step_x, x + 0.5 * step_x]), np.stack([y - 0.5 * step_y, y + 0.5 * step_y])
        )
        with np.errstate(invalid="ignore"):
            return self._speed(
                0.5 * (latitude[0] + latitude[1]),
                self._longitude_step(longitude[0], longitude[1]),
                latitude[1] - latitude[0],
            )
