"""Answers of plain sections become rows of layers, as Arrow tables, without an object for any row."""

from __future__ import annotations

import numpy as np
import pyarrow as pa
import pyproj

from terrain2q.errors import DOUBTFUL
from terrain2q.jobs.design_flows import OK
from terrain2q.jobs.plain_sections import PlainAnswers
from terrain2q.output.arrow_tables import arrow_table, to_crs
from terrain2q.units import UnitSystem


def plain_layers(
    answers: PlainAnswers, units: UnitSystem, terrain_crs: pyproj.CRS, crs: pyproj.CRS
) -> tuple[dict[str, pa.Table], dict[str, np.ndarray]]:
    """Return the layers of plain sections, and for each row the number of its line.

    Parameters
    ----------
    answers : PlainAnswers
    units : UnitSystem
        The study's, in which the numbers are given.
    terrain_crs, crs : pyproj.CRS
        Of the answers, and of the layers.

    Returns
    -------
    layers : dict of str to pyarrow.Table
        As :func:`~terrain2q.output.arrow_tables.arrow_table` makes them; the column ``findings`` of
        ``sections`` counts those of `answers`.
    places : dict of str to ndarray of int
    """
    from terrain2q.hydraulics.compiled import COLUMNS as hydraulic
    from terrain2q.output.compiled_wkb import profile_lines, stretches

    profiles = answers.profiles
    kept = answers.answered[answers.places]
    sizes = np.array([len(p) for p in profiles])
    bounds = np.concatenate([[0], np.cumsum(sizes)])
    station, z, x, y = (
        np.concatenate([getattr(p, name) for p in profiles]) for name in ("stations", "elevations", "x", "y")
    )
    x, y = to_crs(x, y, terrain_crs, crs)
    factor = units.per_si("length")
    ids = pa.array([line.section_id for line in answers.lines], pa.string())

    def table(layer: str, owner: np.ndarray, columns: dict, geometry=None) -> pa.Table:
        columns = {"section_id": ids.take(pa.array(owner)), **columns}
        return arrow_table(layer, columns, units, geometry)

    layers, places = {}, {}

    # --- sections
    own = np.flatnonzero(kept)
    told = [len(a) + len(b) for a, b in zip(answers.built_findings, answers.answer_findings, strict=True)]
    own_sizes = sizes[own]
    points = np.repeat(bounds[own] - (np.cumsum(own_sizes) - own_sizes), own_sizes) + np.arange(
        own_sizes.sum()
    )
    places["sections"] = own
    layers["sections"] = table(
        "sections",
        own,
        {
            "stream": [answers.lines[i].stream for i in own],
            "stream_distance": np.array([answers.lines[i].stream_distance for i in own], dtype=float),
            "lowest_ground": answers.facts[own, 0],
            "slope": answers.slope[own],
            "slope_source": [answers.slope_source[i] for i in own],
            "length": station[bounds[own + 1] - 1] - station[bounds[own]],
            "points": own_sizes,
            "findings": np.array(told)[own],
        },
        profile_lines(
            np.concatenate([[0], np.cumsum(own_sizes)]),
            np.stack([x[points], y[points], z[points] * factor, station[points] * factor], axis=1),
        ),
    )

    # --- subareas
    owner = answers.subareas[0].astype(np.int64)
    places["subareas"] = owner
    each = np.arange(owner.size + 1)

    def of_spec(name: str) -> pa.Array:
        return pa.array([getattr(s, name) for s in answers.specs], pa.string()).take(pa.array(answers.spec))

    layers["subareas"] = table(
        "subareas",
        owner,
        {
            "subarea": _number_within(owner),
            "zone": of_spec("zone"),
            "land_class": of_spec("land_class"),
            "n": answers.subareas[3],
            "n_source": of_spec("n_source"),
            "start_station": answers.subareas[1],
            "end_station": answers.subareas[2],
        },
        stretches(bounds, station, x, y, owner, answers.subareas[1], answers.subareas[2], each, False),
    )

    # --- ratings
    owner = answers.ratings[0].astype(np.int64)
    places["ratings"] = owner
    layers["ratings"] = table(
        "ratings", owner, dict(zip(["stage", "depth", *hydraulic], answers.ratings[1:], strict=True))
    )

    # --- design stages
    count = len(answers.names)
    names = pa.array(list(answers.names), pa.string())
    owner = np.repeat(own, count)
    event = np.tile(np.arange(count), own.size)
    rows = answers.events[own].reshape(own.size * count, -1).T
    places["design_stages"] = owner
    path_owner, path_event, start, end = (answers.paths[i] for i in range(4))
    group = path_owner.astype(np.int64) * count + path_event.astype(np.int64)
    has_width = end > start
    group_bounds = np.append(
        np.searchsorted(group[has_width], owner * count + event), np.count_nonzero(has_width)
    )
    slope = answers.slope[owner]
    stage = rows[0]
    columns = {
        "event": names.take(pa.array(event)),
        "stage": stage,
        "depth": stage - answers.facts[owner, 0],
        **dict(zip(hydraulic, rows[7:], strict=True)),
        # the discharge that was asked for, not its image after solving
        "discharge": answers.discharge[own].ravel(),
        "slope": slope,
        "critical_stage": rows[1],
        "channel_share": rows[2],
        "status": pa.array([OK, DOUBTFUL]).take(pa.array(answers.doubtful[own].ravel().astype(np.int8))),
    }
    layers["design_stages"] = table(
        "design_stages",
        owner,
        columns,
        stretches(
            bounds, station, x, y, path_owner[has_width].astype(np.int64), start[has_width], end[has_width],
            group_bounds, True,
        ),
    )  # fmt: skip

    # --- flows of subareas
    owner, event, subarea = (answers.flows[i].astype(np.int64) for i in range(3))
    area, perimeter, conveyance, total = answers.flows[3:]
    discharge = conveyance * np.sqrt(answers.slope[owner])
    places["subarea_flows"] = owner
    layers["subarea_flows"] = table(
        "subarea_flows",
        owner,
        {
            "event": names.take(pa.array(event)),
            "subarea": subarea,
            "stage": answers.events[owner, event, 0],
            "flow_area": area,
            "wetted_perimeter": perimeter,
            "conveyance": conveyance,
            "discharge": discharge,
            "mean_velocity": discharge / area,
            "share": conveyance / total,
        },
    )
    return layers, {name: answers.places[rows] for name, rows in places.items()}


def _number_within(owner: np.ndarray) -> np.ndarray:
    """Return 1, 2, ... for the rows of each owner, which stand together."""
    first = np.flatnonzero(np.diff(owner, prepend=-1))
    return np.arange(1, owner.size + 1) - np.repeat(first, np.diff(np.append(first, owner.size)))
