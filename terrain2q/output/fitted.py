"""Fitted roughness as a CSV, as text and as plain values."""

from __future__ import annotations

import csv
import math
from pathlib import Path

from terrain2q.columns import CAUTION
from terrain2q.errors import SEVERITIES, InputError
from terrain2q.jobs.fitting import Best, Fit, Fitted
from terrain2q.output.whole_file import whole_file
from terrain2q.units import UnitSystem

CSV_NAME = "fitted_roughness.csv"

COLUMNS = (
    "section", "place", "stage", "discharge", "stage_computed", "discharge_computed", "factor",
    "channel_n_used", "channel_n", "status",
)  # fmt: skip


def fitted_rows(fit: Fit, units: UnitSystem) -> list[dict[str, str | float]]:
    """Return a row for each observation, in the study's units; NaN where a number is not known.

    `stage_computed` and `discharge_computed` are those of the study's own roughness; `factor` on every n,
    or `channel_n` for the channel alone, reproduces the observation.
    """
    return [_row(one, units) for one in fit.fitted]


def _row(one: Fitted, units: UnitSystem) -> dict[str, str | float]:
    length, flow = units.per_si("length"), units.per_si("flow")
    return {
        "section": one.observation.section_id,
        "place": one.observation.place,
        "stage": one.observation.stage * length,
        "discharge": one.observation.discharge * flow,
        "stage_computed": one.stage * length,
        "discharge_computed": one.discharge * flow,
        "factor": one.factor,
        "channel_n_used": one.channel_n_used,
        "channel_n": one.channel_n,
        "status": one.status,
    }


def check_table(folder: Path, overwrite: bool) -> None:
    """Say no where the table is there already and may not be replaced.

    Raises
    ------
    InputError
        ``output-exists``.
    """
    path = folder / CSV_NAME
    if path.exists() and not overwrite:
        raise InputError("output-exists", f"{path} is there already", where="[output] folder")


def write_table(folder: Path, fit: Fit, units: UnitSystem) -> Path:
    """Write ``fitted_roughness.csv`` and return its path."""
    path = folder / CSV_NAME
    with whole_file(path) as temporary, temporary.open("w", encoding="utf-8", newline="") as file:
        writer = csv.DictWriter(file, COLUMNS, lineterminator="\n")
        writer.writeheader()
        for row in fitted_rows(fit, units):
            writer.writerow({name: _cell(value) for name, value in row.items()})
    return path


def _cell(value: str | float) -> str:
    if isinstance(value, str):
        return value
    return f"{value:.10g}" if math.isfinite(value) else ""


def _best(best: Best | None) -> dict[str, float] | None:
    return None if best is None else dict(vars(best))


def fit_summary(fit: Fit, units: UnitSystem, file: Path) -> dict[str, object]:
    """Return what a fit gives as plain values, for ``--json``."""
    return {
        "observations": len(fit.fitted),
        "answered": fit.answered,
        "units": units.name,
        "factor": _best(fit.factor),
        "channel_n": _best(fit.channel_n),
        "fitted": fitted_rows(fit, units),
        "findings": [
            {
                name: getattr(f, name)
                for name in ("code", "severity", "layer", "feature_id", "message", "remedy")
            }
            for f in fit.findings
        ],
        "files": [str(file)],
        "caution": CAUTION,
    }


def fit_text(fit: Fit, units: UnitSystem, file: Path) -> str:
    """Return what a fit prints: a line for each observation, the best for all, findings, the file."""
    length, flow = units.symbol("length"), units.symbol("flow")
    head = [
        "section", "place", f"stage [{length}]", f"computed [{length}]", f"discharge [{flow}]",
        f"computed [{flow}]", "factor", "channel n", "status",
    ]  # fmt: skip
    lines = []
    for row in fitted_rows(fit, units):
        lines.append([
            row["section"], row["place"], _shown(row["stage"], ".2f"), _shown(row["stage_computed"], ".2f"),
            _shown(row["discharge"], ",.4g"), _shown(row["discharge_computed"], ",.4g"),
            _shown(row["factor"], ".3f"), _shown(row["channel_n"], ".4f"), row["status"],
        ])  # fmt: skip
    widths = [max(len(str(line[i])) for line in [head, *lines]) for i in range(len(head))]
    text = ["Roughness that reproduces each observation:"]
    for one in [head, *lines]:
        cells = [
            c.ljust(w) if i < 2 else c.rjust(w) for i, (c, w) in enumerate(zip(one, widths, strict=True))
        ]
        text.append("  " + "  ".join(cells).rstrip())
    text.append("")
    text.append(_best_text("Factor on every n", fit.factor))
    text.append(_best_text("n of the channel alone", fit.channel_n))
    counts = {severity: sum(f.severity == severity for f in fit.findings) for severity in SEVERITIES}
    text += ["", "Findings: " + ", ".join(f"{n} {severity}" for severity, n in counts.items())]
    text += [f"  {f.severity}: {f.layer} {f.feature_id}: {f.message}  [{f.code}]" for f in fit.findings]
    return "\n".join([*text, "", f"Written to {file}", "", CAUTION])


def _shown(value: float, form: str) -> str:
    if not math.isfinite(value):
        return "-"
    # four figures of a large flow are not shown as a power of ten
    return f"{value:,.0f}" if form == ",.4g" and value >= 1000 else format(value, form)


def _best_text(title: str, best: Best | None) -> str:
    if best is None:
        return f"{title}: no observation has an answer"
    spread = "" if math.isnan(best.spread) else f", times or over {best.spread:.3f}"
    return (
        f"{title}: {best.value:.4g}{spread} (median {best.median:.4g}, "
        f"{best.least:.4g} to {best.greatest:.4g}, {best.count} observation{'s' if best.count > 1 else ''})"
    )
