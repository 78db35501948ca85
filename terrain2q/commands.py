"""The command line: options -> study -> jobs -> what is printed. No arithmetic.

Results go to stdout, as text or one JSON object; progress and errors go to stderr. Everything heavy
is imported inside the commands, so that help answers at once.
"""

# ruff: noqa: D301
# The backspaces in docstrings tell click to keep the lines of an example.

from __future__ import annotations

import atexit
import json
import math
import signal
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import click

from terrain2q import __version__
from terrain2q.columns import CAUTION
from terrain2q.errors import CATALOGUE, SEVERITIES, InputErrors, NoAnswerError, Terrain2qError
from terrain2q.study import NEEDED_TO_RUN, TABLES, Key, Study, Table, keys_of, load_study, shown_default

DONE, WRONG_INPUT, NO_ANSWER, INTERRUPTED = 0, 2, 3, 130

_TOLD_EVERY = 10.0
"""Seconds between lines that tell how far a step is, where there is no terminal for a bar."""
"""Exit codes."""

_METAVARS = {
    "text": "TEXT", "number": "NUMBER", "number or zero": "NUMBER", "count": "WHOLE NUMBER",
    "file": "FILE", "folder": "FOLDER",
    "table": "FILE|NAME", "layer": "FILE[|layer=NAME]", "rasters": "FILE", "events": "EVENT=DISCHARGE",
    "names": "NAME",
}  # fmt: skip


# --------------------------------------------------------------------------------------------------
# Parts of every command


class _Program(click.Group):
    """The group of commands, with this program's exit codes and its way of printing errors."""

    def main(self, args: Sequence[str] | None = None, *more: Any, standalone_mode: bool = True, **extra: Any):
        """Run a command and exit with its code.

        Wrong inputs are printed; our own bugs keep their traceback.
        """
        if not standalone_mode:
            return super().main(args, *more, standalone_mode=False, **extra)
        arguments = list(sys.argv[1:] if args is None else args)
        as_json = "--json" in arguments
        try:
            code = super().main(arguments, *more, standalone_mode=False, **extra)
        except click.ClickException as error:
            error.show(sys.stderr)
            code = WRONG_INPUT
            if as_json:
                _print_json({"errors": [_usage_error(error)]})
        except Terrain2qError as error:
            click.echo(f"Error: {error}", err=True)
            code = NO_ANSWER if isinstance(error, NoAnswerError) else WRONG_INPUT
            if as_json:
                each = error.problems if isinstance(error, InputErrors) else [error]
                _print_json({"errors": [one.as_dict() for one in each]})
        except (click.Abort, KeyboardInterrupt):
            click.echo("Interrupted; nothing is half-written.", err=True)
            _end_by_code()
            code = INTERRUPTED
        sys.exit(code or DONE)

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Return the commands in the order they are used."""
        return list(self.commands)


def _end_by_code() -> None:
    """Let this process end by its exit code after an interruption, not by the signal.

    ``python -m`` sends itself the signal at its end where an interruption, though caught, came while text was
    run as code, as the making of a named tuple does. A signal that is held back leaves the code to be said.
    """
    if hasattr(signal, "pthread_sigmask"):
        atexit.register(signal.pthread_sigmask, signal.SIG_BLOCK, {signal.SIGINT})


class _StudyCommand(click.Command):
    """A command whose options are the keys of the study file, shown by table in the help."""

    def __init__(self, *args: Any, params: Sequence[click.Parameter] = (), **more: Any) -> None:
        keys = [_KeyOption(table, TABLES[table], name, about) for table, name, about in _every_key()]
        super().__init__(*args, params=[*params, *keys], **more)

    def parse_args(self, ctx: click.Context, args: list[str]) -> list[str]:
        # A flag alone means true; a value may follow, which click would otherwise take for the study file.
        flags = {f"--{table}.{name}" for table, name, about in _every_key() if about.kind == "flag"}
        joined: list[str] = []
        waiting = iter(args)
        held = next(waiting, None)
        while held is not None:
            following = next(waiting, None)
            if held in flags:
                given = following if following in ("true", "false") else None
                joined.append(f"{held}={given or 'true'}")
                held = next(waiting, None) if given else following
            else:
                joined.append(held)
                held = following
        return super().parse_args(ctx, joined)

    def format_options(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """Write the command's own options, then the keys of each table."""
        groups: dict[str, list[tuple[str, str]]] = {"Options": []}
        for parameter in self.get_params(ctx):
            record = parameter.get_help_record(ctx)
            if record is not None and isinstance(parameter, click.Option):
                table = parameter.table if isinstance(parameter, _KeyOption) else ""
                groups.setdefault(f"[{table}]" if table else "Options", []).append(record)
        for title, records in groups.items():
            with formatter.section(title):
                formatter.write_dl(records)


class _KeyOption(click.Option):
    """One key of the study file as an option."""

    def __init__(self, table: str, cls: type[Table], name: str, about: Key) -> None:
        self.table = table
        self.key = f"{table}.{name}"
        several = about.kind in ("rasters", "events", "names")
        default = shown_default(cls, name)
        metavar = _METAVARS.get(about.kind) or "|".join(about.choices or ("true", "false"))
        notes = [
            note
            for note in ("repeat for several" if several else "", default and f"default {default}")
            if note
        ]
        super().__init__(
            [f"--{self.key}", f"{table}__{name}"],
            metavar=metavar,
            multiple=several,
            expose_value=False,
            callback=self._keep,
            help=about.help + (f" ({'; '.join(notes)})" if notes else ""),
        )

    def _keep(self, ctx: click.Context, parameter: click.Parameter, value: Any) -> None:
        if value is not None and value != ():
            ctx.ensure_object(dict)[self.key] = value


def _every_key() -> Iterator[tuple[str, str, Key]]:
    for table, cls in TABLES.items():
        for name, about in keys_of(cls).items():
            yield table, name, about


def _takes_study(command: Callable[..., Any]) -> Callable[..., Any]:
    """Give a command the argument STUDY.toml and the options --json and --strict."""
    for decorate in (
        click.option("--strict", is_flag=True, help="Exit with 3 when any feature is without an answer."),
        click.option("--json", "as_json", is_flag=True, help="Print one JSON object instead of text."),
        click.argument("study_path", metavar="[STUDY.toml]", required=False, type=click.Path(path_type=Path)),
    ):
        command = decorate(command)
    return command


def _works_together(command: Callable[..., Any]) -> Callable[..., Any]:
    """Give a command the options --jobs and --scheduler."""
    for decorate in (
        click.option(
            "--scheduler",
            metavar="ADDRESS",
            help="Work on many sections and crossings on the Dask cluster of this scheduler, "
            "such as tcp://10.0.0.5:8786.",
        ),
        click.option(
            "--jobs",
            metavar="WHOLE NUMBER",
            type=click.IntRange(min=1),
            help="Processes that work on many sections and crossings; one a core if left out.",
        ),
    ):
        command = decorate(command)
    return command


def _study(ctx: click.Context, study_path: Path | None, needs: Sequence[str] = NEEDED_TO_RUN) -> Study:
    options = ctx.obj or {}
    if study_path is None and not options:
        raise click.UsageError("give a study file, or its keys as options", ctx)
    return load_study(study_path, options, needs=needs)


def _usage_error(error: click.ClickException) -> dict[str, str]:
    code = "value-not-allowed"
    if isinstance(error, click.NoSuchOption):
        code = "key-unknown"
    elif isinstance(error, click.MissingParameter):
        code = "key-missing"
    return {
        "code": code,
        "what": error.format_message(),
        "where": "the command line",
        "fix": CATALOGUE[code].remedy
        if code != "value-not-allowed"
        else "`--help` shows what the command takes",
    }


def _print_json(value: object) -> None:
    click.echo(json.dumps(_json_ready(value), indent=2, ensure_ascii=False, allow_nan=False))


def _json_ready(value: Any) -> Any:
    """Return `value` as JSON can hold it: null for numbers that are not finite, text for paths."""
    if isinstance(value, dict):
        return {str(name): _json_ready(inner) for name, inner in value.items()}
    if isinstance(value, list | tuple):
        return [_json_ready(inner) for inner in value]
    if hasattr(value, "tolist"):  # an array or a number of NumPy
        return _json_ready(value.tolist())
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return str(value) if isinstance(value, Path) else value


@contextmanager
def _progress() -> Iterator[Callable[[int, int, str], None]]:
    """Yield `progress(done, total, label)`: a bar where stderr is a terminal, else a line a step.

    What follows a colon in the label tells how far the step is: beside the bar, or in a line now and then.
    """
    state: dict[str, Any] = {"label": None, "bar": None, "told": 0.0}
    terminal = sys.stderr.isatty()

    def close() -> None:
        if state["bar"] is not None:
            state["bar"].__exit__(None, None, None)
            state["bar"] = None

    def progress(done: int, total: int, label: str = "") -> None:
        step, _, how_far = label.partition(":")
        if step != state["label"]:
            close()
            state["label"], state["told"] = step, time.monotonic()
            if terminal:
                # how long is left is told by who works, where there is more to tell
                state["bar"] = click.progressbar(
                    length=max(total, 1), label=step, file=sys.stderr, show_pos=bool(how_far),
                    show_eta=not how_far,
                )  # fmt: skip
                state["bar"].__enter__()
            elif step:
                click.echo(step, err=True)
        if state["bar"] is not None:
            state["bar"].label = label
            state["bar"].update(done - state["bar"].pos)
        elif how_far and time.monotonic() - state["told"] >= _TOLD_EVERY:
            state["told"] = time.monotonic()
            click.echo(f"{step}: {done} of {total},{how_far}", err=True)

    try:
        yield progress
    finally:
        close()


# --------------------------------------------------------------------------------------------------
# The commands


@click.group(
    cls=_Program,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 110},
    epilog=CAUTION,
)
@click.version_option(__version__, prog_name="terrain2q")
def main() -> None:
    """How much water a stream carries, and how high it stands, from terrain.

    \b
    Examples:
      terrain2q start .                 write study.toml from the data found here
      terrain2q check study.toml        look at every input
      terrain2q layout study.toml       cut lines along the streams, to edit
      terrain2q run study.toml          sections, ratings and design stages

    Results go to stdout, progress and errors to stderr. Exit codes: 0 done; 2 the inputs are wrong and
    nothing was written; 3 no feature could be answered, or with --strict any was not; 130 interrupted.
    """


@main.command(epilog=CAUTION)
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object instead of text.")
def start(folder: Path, as_json: bool) -> None:
    """Write a study file to fill in, from the data found in FOLDER.

    Looks at the folder and one level below, recognises the terrain, the layers and the tables, and writes
    FOLDER/study.toml with a comment on every key. A guess is called a guess. An existing study file is kept.

    \b
    Example:
      terrain2q start mill_creek
    """
    from terrain2q.start import start_study

    found = start_study(folder)
    if as_json:
        _print_json(found.as_dict())
    else:
        click.echo(found.text())


@main.command(cls=_StudyCommand, epilog=CAUTION)
@_takes_study
@click.pass_context
def check(ctx: click.Context, study_path: Path | None, as_json: bool, strict: bool) -> int:
    """Look at every input and report findings; writes nothing.

    Every key of the study file is an option too, and goes before the file. Relative paths in options start
    at the current folder, those in the study file at the file.

    \b
    Example:
      terrain2q check study.toml
      terrain2q check study.toml --json --strict
    """
    study = _study(ctx, study_path)
    from terrain2q.process import check_study

    with _progress() as progress:
        findings = check_study(study, progress=progress)
    counts = {severity: sum(f.severity == severity for f in findings) for severity in SEVERITIES}
    if as_json:
        _print_json({"counts": counts, "findings": [_finding(f) for f in findings]})
    else:
        click.echo(_findings_text(findings, counts))
    return NO_ANSWER if strict and counts["failed"] else DONE


@main.command(cls=_StudyCommand, epilog=CAUTION)
@click.option(
    "--to",
    metavar="FILE",
    type=click.Path(path_type=Path),
    help="GeoPackage to write (default cut_lines.gpkg beside the study file).",
)
@click.option(
    "--at",
    type=click.Choice(["spacing", "crossings"]),
    help="Lines every so many feet or metres, or one up- and one downstream of each crossing (default: "
    "crossings for a study with [crossings] whose [cut_lines] has neither every nor path).",
)
@_takes_study
@click.pass_context
def layout(
    ctx: click.Context,
    study_path: Path | None,
    as_json: bool,
    strict: bool,
    to: Path | None,
    at: str | None,
) -> int:
    """Lay out cut lines along the streams, into a GeoPackage to edit.

    Lines stand square to the smoothed stream at every so many feet or metres ([cut_lines] every), reach up to
    ground that is `height` above the bed or half the `width` to each side, and never meet. Lines in the file
    that a person drew or edited are kept when lines are laid out again. --strict also counts places where no
    line could be laid out.

    At crossings, a line stands at the nearest place up- and downstream that is clear of the fill of every
    road; it needs no width.

    \b
    Examples:
      terrain2q layout study.toml
      terrain2q layout study.toml --at crossings
      terrain2q layout study.toml --cut_lines.every 250 --cut_lines.width 1500 --to lines.gpkg
    """
    where = "crossings" if at == "crossings" else "cut_lines"
    study = _study(ctx, study_path, ("terrain", "streams", where))
    from terrain2q.laying_out import lay_out_study

    with _progress() as progress:
        laid_out = lay_out_study(study, to, progress, at)
    findings = laid_out.findings
    if as_json:
        _print_json({**laid_out.summary(), "found": [_finding(f) for f in findings]})
    else:
        counts = {severity: sum(f.severity == severity for f in findings) for severity in SEVERITIES}
        click.echo(laid_out.summary_text() + "\n\n" + _findings_text(findings, counts))
    missing = any(f.code == "line-left-out" for f in findings)
    return NO_ANSWER if not len(laid_out.lines) or (strict and missing) else DONE


@main.command(cls=_StudyCommand, epilog=CAUTION)
@_takes_study
@_works_together
@click.pass_context
def run(
    ctx: click.Context,
    study_path: Path | None,
    as_json: bool,
    strict: bool,
    jobs: int | None,
    scheduler: str | None,
) -> int:
    """Do everything the study asks for, into its output folder.

    Every key of the study file is an option too, and goes before the file. Relative paths in options start
    at the current folder, those in the study file at the file.

    A large study that was interrupted goes on where it stopped when it is run again.

    \b
    Examples:
      terrain2q run study.toml
      terrain2q run study.toml --slope.value 0.003 --output.folder steeper
      terrain2q run --study.units us --terrain.dem dem.tif --cut_lines.path lines.gpkg \\
          --land_cover.default_n 0.05 --slope.value 0.002 --flows.events 10-year=850
    """
    study = _study(ctx, study_path)
    from terrain2q.process import run_study

    together = {k: v for k, v in (("jobs", jobs), ("scheduler", scheduler)) if v is not None}
    with _progress() as progress:
        results = run_study(study, progress=progress, **together)
    if as_json:
        _print_json(results.summary())
    else:
        click.echo(results.summary_text())
    answered = results.answered_sections + results.answered_crossings
    failed = results.failed_sections + results.failed_crossings + results.failed_widths
    if not answered or (strict and failed):
        return NO_ANSWER
    return DONE


@main.command(cls=_StudyCommand, epilog=CAUTION)
@_takes_study
@click.pass_context
def size(ctx: click.Context, study_path: Path | None, as_json: bool, strict: bool) -> int:
    """Find the widths of a bench required to pass each flow within a stage.

    Cuts the bench that [bench] describes into each section until the section passes the flow: the layer
    required_widths, and benches.pdf with each section before and after. It does all that `run` does, and
    prints the widths first.

    \b
    Examples:
      terrain2q size study.toml
      terrain2q size study.toml --bench.sides right --bench.event 100-year
    """
    study = _study(ctx, study_path, (*NEEDED_TO_RUN, "flows", "bench"))
    from terrain2q.output.benches import widths_records, widths_text
    from terrain2q.process import run_study

    with _progress() as progress:
        results = run_study(study, progress=progress, widths=True)
    widths = results.layers["required_widths"]
    if as_json:
        _print_json(results.summary() | {"required_widths": widths_records(widths)})
    else:
        click.echo("\n".join([widths_text(widths, results.units), "", results.summary_text()]))
    failed = int((widths["status"] == "failed").sum())
    return NO_ANSWER if failed == len(widths) or (strict and failed) else DONE


@main.command(cls=_StudyCommand, epilog=CAUTION)
@_takes_study
@click.pass_context
def fit(ctx: click.Context, study_path: Path | None, as_json: bool, strict: bool) -> int:
    """Find the roughness that reproduces observed stages and discharges.

    For each row of [observed]: the one factor on every n of the section, and the n of the channel alone,
    with which uniform flow carries the observed discharge at the observed stage; and the best for all.
    Writes fitted_roughness.csv into the output folder.

    \b
    Examples:
      terrain2q fit study.toml
      terrain2q fit study.toml --observed.path high_water_marks.csv --json
    """
    study = _study(ctx, study_path, (*NEEDED_TO_RUN, "observed"))
    from terrain2q.output.fitted import fit_summary, fit_text
    from terrain2q.process import fit_study

    with _progress() as progress:
        found, file = fit_study(study, progress=progress)
    if as_json:
        _print_json(fit_summary(found, study.system, file))
    else:
        click.echo(fit_text(found, study.system, file))
    return NO_ANSWER if not found.answered or (strict and found.answered < len(found.fitted)) else DONE


@main.command(epilog=CAUTION)
@click.argument("name", required=False)
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object instead of text or CSV.")
def tables(name: str | None, as_json: bool) -> None:
    """List the built-in roughness tables, or print the one called NAME as CSV.

    A study takes a table by its name, or a CSV file that was started from one.

    \b
    Examples:
      terrain2q tables                            list them
      terrain2q tables chow1959 > roughness.csv   start a table of your own
    """
    from terrain2q.roughness_tables import describe, table_names, table_rows, table_text

    if name is None:
        about = {each: describe(each) for each in table_names()}
        if as_json:
            _print_json({"tables": [{"name": each, "about": line} for each, line in about.items()]})
        else:
            width = max(map(len, about))
            click.echo("\n".join(f"{each:{width}}  {line}" for each, line in about.items()))
    elif as_json:
        _print_json({"name": name, "about": describe(name), "rows": table_rows(name)})
    else:
        click.echo(table_text(name), nl=False)


@main.command(epilog=CAUTION)
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object instead of text.")
def report(folder: Path, as_json: bool) -> None:
    """Write the report page and the calculation sheets of an output folder anew.

    Reads results.gpkg and run.json in FOLDER, and the terrain and the streams where they still are, and
    writes report.html and calculation_sheets.pdf. Results are left as they are.

    \b
    Example:
      terrain2q report output
    """
    from terrain2q.output.pages import write_pages

    written = write_pages(folder)
    if as_json:
        _print_json({"folder": str(folder), "files": written})
    else:
        click.echo(f"Written to {folder}: {', '.join(path.name for path in written)}")


def _finding(finding: Any) -> dict[str, object]:
    names = ("code", "severity", "layer", "feature_id", "message", "remedy", "x", "y")
    return {name: getattr(finding, name) for name in names}


def _findings_text(findings: Sequence[Any], counts: dict[str, int]) -> str:
    lines = []
    for severity in SEVERITIES:
        of_severity = [f for f in findings if f.severity == severity]
        if not of_severity:
            continue
        lines.append(f"{severity} ({counts[severity]})")
        for code in dict.fromkeys(f.code for f in of_severity):
            lines.append(f"  {CATALOGUE[code].title}  [{code}]")
            same = [f for f in of_severity if f.code == code]
            for one in same:
                place = " ".join(part for part in (one.layer, one.feature_id) if part)
                lines.append(f"    {place}: {one.message}" if place else f"    {one.message}")
            lines += [f"    fix: {remedy}" for remedy in dict.fromkeys(f.remedy for f in same)]
        lines.append("")
    if not findings:
        return "No findings: every input can be used."
    lines.append(", ".join(f"{counts[severity]} {severity}" for severity in SEVERITIES))
    return "\n".join(lines)


def commands_page() -> str:
    """Return the help of every command as Markdown, for the docs."""
    parts = [
        "# Commands",
        "",
        "This page is written by "
        "`python -c 'from terrain2q.commands import *; print(commands_page())' > docs/commands.md`.",
    ]
    settings = {**main.context_settings, "terminal_width": 100}
    with click.Context(main, info_name="terrain2q", **settings) as whole:
        pages = {"terrain2q": main.get_help(whole)}
        for name, command in main.commands.items():
            with click.Context(command, info_name=name, parent=whole, terminal_width=100) as ctx:
                pages[f"terrain2q {name}"] = command.get_help(ctx)
    for name, text in pages.items():
        parts += ["", f"## {name}", "", "```text", text, "```"]
    return "\n".join(parts)


if __name__ == "__main__":
    main()
