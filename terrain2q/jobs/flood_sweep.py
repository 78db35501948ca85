"""One event over the whole map, a strip of rows at a time: depth, velocity and state of every cell."""

from __future__ import annotations

import os
from collections import deque
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import shapely

from terrain2q.ground.water_edge import (
    GridFile,
    Joins,
    edge_field,
    fill_small_holes,
    made_valid,
    outlines,
    polygons_of,
    tidy,
)
from terrain2q.ground.water_surface import BESIDE, INSIDE
from terrain2q.jobs.flood_water import FloodReach, MapCells

JOINED, LOW = 3, 4
"""State of a cell under water that joins a stream, and of one below the water's level that does not."""

MADE_AHEAD = 2
"""Strips made at once; more would take more memory."""

HALO = 3
"""Rows of the strips beside it that a strip's outlines look at."""


class Sweep:
    """One event over the whole window: depth, velocity and state of every cell, a strip of rows at a time."""

    def __init__(self, frame: MapCells, pieces: list[FloodReach], folder) -> None:
        self.frame, self.pieces = frame, pieces
        shape = (frame.rows, frame.columns)
        self.depth = GridFile(*shape, np.float32, folder)
        self.velocity = GridFile(*shape, np.float32, folder)
        self.state = GridFile(*shape, np.uint8, folder)
        self.joins = Joins()
        self.region = shapely.union_all([p.reach.polygon for p in pieces])
        self.largest = {JOINED: float("nan"), LOW: float("nan")}
        self._wet_strips: set[int] = set()

    def close(self) -> None:
        """Give the room on the disk back."""
        for grid in (self.depth, self.velocity, self.state):
            grid.close()

    def run(self, seeds: np.ndarray, asked: np.ndarray) -> None:
        """Find depths and which patches are joined; `seeds`, `asked`: rows and columns in the terrain."""
        frame = self.frame
        seeds, asked = (places - (frame.row, frame.column) for places in (seeds, asked))
        seeds = np.unique(seeds, axis=0)
        seeds = seeds[((seeds >= 0) & (seeds < (frame.rows, frame.columns))).all(axis=1)]
        inside = ((asked >= 0) & (asked < (frame.rows, frame.columns))).all(axis=1)
        patches = []
        asked_patch = np.full(len(asked), -1, dtype=np.int64)
        for number, ((row, end), (depth, speed, state)) in enumerate(self._ahead(frame.strips())):
            labels, first = self.joins.add((state == INSIDE) & (depth > 0))
            some = labels.any()
            self._keep(number, row, depth, speed, state, some)
            if not some:
                continue
            mine = seeds[(seeds[:, 0] >= row) & (seeds[:, 0] < end)]
            found = labels[mine[:, 0] - row, mine[:, 1]]
            patches.append(np.unique(found[found > 0]) - 1 + first)
            here = np.flatnonzero(inside & (asked[:, 0] >= row) & (asked[:, 0] < end))
            found = labels[asked[here, 0] - row, asked[here, 1]].astype(np.int64)
            asked_patch[here] = np.where(found > 0, found - 1 + first, -1)
        self.joins.settle()
        self.joined = self.joins.holding(np.concatenate(patches) if patches else np.zeros(0, dtype=int))
        known = asked_patch >= 0
        self.asked_is_joined = np.zeros(len(asked), dtype=bool)
        self.asked_is_joined[known] = self.joined[self.joins.whole[asked_patch[known]]]

    def _keep(self, number: int, row: int, depth, speed, state, wet: bool) -> None:
        """Write a strip; of a dry one only the rows that the outlines beside it look at."""
        if wet:
            self._wet_strips.add(number)
            self.velocity.write(row, speed)
        for grid, values in ((self.depth, depth), (self.state, state)):
            if wet or len(values) <= 2 * (HALO + 1):
                grid.write(row, values)
            else:
                grid.write(row, values[: HALO + 1])
                grid.write(row + len(values) - HALO - 1, values[-HALO - 1 :])

    def _ahead(self, strips: list[tuple[int, int]]):
        """Yield strips with what :meth:`_strip` makes of them, a few being made while one is used."""
        workers = min(os.cpu_count() or 1, MADE_AHEAD)
        with ThreadPoolExecutor(workers) as pool:
            waiting: deque = deque()
            for strip in strips:
                waiting.append((strip, pool.submit(self._strip, *strip)))
                if len(waiting) > workers:
                    done, made = waiting.popleft()
                    yield done, made.result()
            while waiting:
                done, made = waiting.popleft()
                yield done, made.result()

    def _strip(self, row: int, end: int):
        """Depth (``-inf`` where unknown), velocity and state of rows of the window."""
        frame = self.frame
        shape = (end - row, frame.columns)
        depth = np.full(shape, -np.inf, dtype=np.float32)
        speed = np.zeros(shape, dtype=np.float32)
        state = np.zeros(shape, dtype=np.uint8)
        ground = None
        for piece in self.pieces:
            reach = piece.reach
            first, last = reach.overlap(row + frame.row, end - row)
            left = max(reach.column, frame.column)
            right = min(reach.column + reach.columns, frame.column + frame.columns)
            if first >= last or left >= right:
                continue
            if ground is None:
                ground = frame.ground(row + frame.row, frame.column, *shape)
            own = slice(left - reach.column, right - reach.column)
            there = (
                slice(first + reach.row - row - frame.row, last + reach.row - row - frame.row),
                slice(left - frame.column, right - frame.column),
            )
            cells = reach.cells(first, last, piece.margin)[:, own]
            old_state, old = state[there], depth[there]
            new = piece.levels(first, last)[:, own]
            if piece.least is not None:
                np.maximum(new, np.float32(piece.least), out=new, where=old_state != INSIDE)
            new -= ground[there]
            np.copyto(new, -np.inf, where=(cells == 0) | np.isnan(new))
            # the higher level holds; ground between lines goes before the margin around it
            better = (cells > old_state) | ((cells == old_state) & (new > old))
            np.copyto(old, new, where=better)
            np.maximum(old_state, cells, out=old_state)
            wet = np.flatnonzero((better & (cells == INSIDE) & (new > 0)).ravel())
            if wet.size:
                values = self._speeds(piece, first, last, own, wet)
                speed[there] = _put(speed[there], wet, values)
        return depth, speed, state

    def _speeds(self, piece: FloodReach, first: int, last: int, own: slice, wet: np.ndarray) -> np.ndarray:
        """Mean velocity at wet cells: on each line that of the subarea as far aside of the stream."""
        reach = piece.reach
        aside = reach.spread(reach.aside, first, last)[:, own].ravel()[wet]
        share = np.clip(reach.spread(reach.share, first, last)[:, own].ravel()[wet], 0.0, 1.0)
        width = 0.5 * min(self.frame.terrain.cell_size)
        both = []
        for water in piece.waters:
            table, least = water.velocities
            index = ((aside - least) * (1.0 / width)).astype(np.int32)
            both.append(table[np.clip(index, 0, table.size - 1, out=index)])
        return both[0] + share * (both[1] - both[0])

    def finish(self, smallest: float) -> tuple[list, list]:
        """Settle the state of every cell; return the polygons of joined water and of low ground, in cells."""
        frame, joins = self.frame, self.joins
        kind = np.full(joins.sizes.size, INSIDE, dtype=np.uint8)
        large = joins.sizes >= smallest
        kind[large & self.joined] = JOINED
        kind[large & ~self.joined] = LOW
        for number, (row, end) in enumerate(frame.strips()):
            if number not in self._wet_strips:
                continue
            depth, state = self.depth.read(row, end), self.state.read(row, end)
            again = Joins()
            labels, _ = again.add((state == INSIDE) & (depth > 0))
            table = joins.table(number, kind)
            settled = table[labels]
            np.copyto(state, settled, where=labels > 0)
            self.state.write(row, state)
            for what in (JOINED, LOW):
                mine = state == what
                if mine.any():
                    deepest = float(depth.max(where=mine, initial=0.0))
                    self.largest[what] = np.fmax(self.largest[what], deepest)
        return tuple(self._polygons(what, smallest) for what in (JOINED, LOW))

    def _polygons(self, what: int, smallest: float) -> list:
        if not self.largest[what] > 0:
            return []
        frame, halo = self.frame, HALO
        seams, whole = [], []
        for row, end in frame.strips():
            # up to the centres of the next strip's first row, where the two meet
            end = min(end + 1, frame.rows)
            state = self.state.read_around(row, end, halo, INSIDE)
            columns = np.flatnonzero((state == what).any(axis=0))
            if not columns.size:
                continue
            low, high = max(columns[0] - 4, 0), min(columns[-1] + 5, frame.columns)
            state = state[:, low:high]
            depth = self.depth.read_around(row, end, halo, -np.inf)[:, low:high]
            top, bottom = halo - (row == 0), len(state) - halo + (end == frame.rows)
            # a ring of dry cells around the window closes the water at its edge, half a cell out
            pad = ((0, 0), (int(low == 0), int(high == frame.columns)))
            state = np.pad(state, pad, constant_values=INSIDE)
            depth = np.pad(depth, pad, constant_values=-np.inf)
            field = edge_field(depth, state, what, BESIDE)[top:bottom]
            first_row = row + frame.row - (row == 0)
            made = outlines(field, first_row, low - pad[1][0] + frame.column)
            # holes in a strip are whole: what crosses a seam is a bay there, not a hole
            made = made_valid(fill_small_holes(made, smallest))
            bounds = shapely.bounds(made).reshape(-1, 4)
            seam = (bounds[:, 1] <= first_row + 0.5) | (bounds[:, 3] >= first_row + len(field) - 0.5)
            seams.append(made[seam])
            whole.append(tidy(made[~seam], smallest))
        joined = polygons_of(shapely.union_all(np.concatenate(seams)))
        polygons = tidy([*np.concatenate(whole), *joined], smallest)
        if not polygons.size:
            return []
        shapely.prepare(self.region)
        within = shapely.contains_properly(self.region, polygons)
        cut = shapely.intersection(polygons[~within], self.region)
        return list(tidy([*polygons[within], *polygons_of(cut)], smallest))

    def levels_at(self, points: np.ndarray) -> np.ndarray:
        """Return the water's level at places in cells, anew from the lines; the highest of reaches."""
        levels = np.full(len(points), -np.inf)
        places = shapely.points(points)
        for piece in self.pieces:
            near = np.flatnonzero(shapely.dwithin(piece.reach.polygon, places, 1e-6))
            if not near.size:
                continue
            share = piece.reach.shares_at(points[near])
            labels = self._labels_at(piece, points[near])
            for label in np.unique(labels):
                mine = labels == label
                a, b = (w.level(int(label)) for w in piece.waters)
                level = a + share[mine] * (b - a)
                before = levels[near[mine]]
                if piece.least is not None:
                    level = np.where(np.isneginf(before), np.maximum(level, piece.least), level)
                levels[near[mine]] = np.maximum(before, level)
        levels[np.isneginf(levels)] = np.nan
        return levels

    def _labels_at(self, piece: FloodReach, points: np.ndarray) -> np.ndarray:
        """Label of the nearest joined cell."""
        labels = np.zeros(len(points), dtype=np.int64)
        if piece.labels is None:
            return labels
        reach, frame = piece.reach, self.frame
        best = np.full(len(points), np.inf)
        base = np.floor(points - 0.5).astype(np.int64)
        for step in ((0, 0), (1, 0), (0, 1), (1, 1)):
            cell = base + step
            row, column = cell[:, 1], cell[:, 0]
            ok = (row >= frame.row) & (row < frame.row + frame.rows)
            ok &= (column >= frame.column) & (column < frame.column + frame.columns)
            ok &= (row >= reach.row) & (row < reach.row + reach.rows)
            ok &= (column >= reach.column) & (column < reach.column + reach.columns)
            ok[ok] = self.state.pick(row[ok] - frame.row, column[ok] - frame.column) == JOINED
            away = np.hypot(*(points - cell - 0.5).T)
            ok &= away < best
            best[ok] = away[ok]
            labels[ok] = piece.labels[row[ok] - reach.row, column[ok] - reach.column]
        return labels


def _put(target: np.ndarray, flat: np.ndarray, values: np.ndarray) -> np.ndarray:
    """Return `target` (a view) with values at flat positions."""
    rows, columns = np.divmod(flat, target.shape[1])
    target[rows, columns] = values
    return target
