"""The commands. The only module that prints and exits; it loads the heavy libraries late."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, NoReturn

import typer

from pipeline import __version__
from pipeline.errors import READY, WITHHELD, FirstgainError, UsageError

if TYPE_CHECKING:
    from pipeline.commission import Request
    from pipeline.loop.types import Kind
    from pipeline.settings import LoopSheet

#: Files that lie beside logs in a folder without being logs.
_NOT_LOGS = {".toml", ".md", ".json", ".py"}

#: Exit code of a fault in the program itself.
_UNEXPECTED = 1

app = typer.Typer(
    name="firstgain",
    help="From a bump-test log to a starting controller gain, with the evidence and a report to sign.",
    epilog="Exit codes: 0 settings given, 2 command line or loop sheet wrong, 3 log unreadable, "
    "4 settings withheld, 5 an internal check disagreed. With several logs, the largest.",
    add_completion=False,
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
)


class ControllerKind(StrEnum):
    """Controllers that can be asked for."""

    P = "P"
    I = "I"  # noqa: E741 - the trade's name
    PI = "PI"
    PD = "PD"
    PID = "PID"


Sheet = Annotated[
    Path | None,
    typer.Option("--loop", metavar="SHEET.toml", help="Loop sheet; else NAME.toml beside NAME.csv is taken."),
]
AsJson = Annotated[bool, typer.Option("--json", help="JSON to standard output, and nothing else there.")]


@dataclass(frozen=True, kw_only=True)
class _Wish:
    """What the command line asks of every log."""

    loop: Path | None
    controller: Kind | None = None
    pm: float | None = None
    gm: float | None = None
    ms: float | None = None
    overshoot: float | None = None


@dataclass(frozen=True, kw_only=True)
class _Job:
    """One log and where its files go."""

    log: Path
    wish: _Wish
    out: Path
    stem: str
    report: bool
    short: bool


@dataclass(frozen=True, kw_only=True)
class _Outcome:
    """What became of one log: text for people, JSON for programs, or an error sentence."""

    code: int
    text: str = ""
    record: str | None = None
    error: str | None = None


def _show_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"firstgain {__version__}")
        raise typer.Exit


@app.callback()
def _root(
    _version: Annotated[
        bool,
        typer.Option("--version", callback=_show_version, is_eager=True, help="Show the version and exit."),
    ] = False,
) -> None:
    """Hold what comes before the command."""


@app.command()
def read(
    log: Annotated[Path, typer.Argument(metavar="LOG", help="Log file.")],
    loop: Sheet = None,
    out: Annotated[Path, typer.Option(metavar="DIR", help="Folder for the plot.")] = Path("reports"),
    as_json: AsJson = False,
    no_report: Annotated[bool, typer.Option("--no-report", help="Draw no plot.")] = False,
) -> None:
    """Say what is understood of a log: columns, clock, units, gaps, bumps, test quality."""
    try:
        from pipeline.commission import inspect
        from pipeline.report.terminal import reading_data, reading_text

        found = inspect(log, request=_request(log, _Wish(loop=loop)))
        if as_json:
            data = reading_data(found.log, found.bumps, found.quality)
            typer.echo(json.dumps(data, ensure_ascii=False, indent=2, allow_nan=False).encode())
        else:
            typer.echo(reading_text(found.log, found.bumps, found.quality))
            if not no_report:
                from pipeline.report import write_plot

                typer.echo(f"Plot: {write_plot(found.log, found.bumps, out, log.stem)}")
    except Exception as error:
        _stop(_told(error, log))


@app.command()
def tune(
    logs: Annotated[list[Path], typer.Argument(metavar="LOG", help="Log files, or folders of them.")],
    loop: Sheet = None,
    controller: Annotated[
        ControllerKind | None,
        typer.Option(case_sensitive=False, metavar="P|I|PI|PD|PID", help="Controller to find settings for."),
    ] = None,
    pm: Annotated[float | None, typer.Option(metavar="DEG", help="Phase margin, at least.")] = None,
    gm: Annotated[float | None, typer.Option(metavar="RATIO", help="Gain margin, at least.")] = None,
    ms: Annotated[float | None, typer.Option(metavar="PEAK", help="Maximum sensitivity, at most.")] = None,
    overshoot: Annotated[float | None, typer.Option(metavar="PCT", help="Overshoot, at most.")] = None,
    out: Annotated[Path, typer.Option(metavar="DIR", help="Folder for records and reports.")] = Path(
        "reports"
    ),
    jobs: Annotated[
        int | None, typer.Option(metavar="N", min=1, help="Logs worked on at once; else one a processor.")
    ] = None,
    as_json: AsJson = False,
    no_report: Annotated[bool, typer.Option("--no-report", help="Write the record only.")] = False,
) -> None:
    """Turn bump-test logs into settings: per log a record, a report and a short text."""
    kind: Kind | None = None if controller is None else controller.value
    wish = _Wish(loop=loop, controller=kind, pm=pm, gm=gm, ms=ms, overshoot=overshoot)
    try:
        _check(wish)
        paths = _expanded(logs)
    except Exception as error:
        _stop(_told(error, None))
    stems = _distinct_stems(paths)
    several = len(paths) > 1
    work = [
        _Job(log=p, wish=wish, out=out, stem=s, report=not no_report, short=several)
        for p, s in zip(paths, stems, strict=True)
    ]
    outcomes: list[_Outcome] = []
    for outcome in _with_progress(_run(work, jobs), len(work)):
        outcomes.append(outcome)
        if outcome.error is not None:
            typer.echo(outcome.error, err=True)
        elif not as_json:
            typer.echo(outcome.text)
    if as_json:
        records = [o.record for o in outcomes if o.record is not None]
        alone = len(logs) == 1 and not logs[0].is_dir()
        typer.echo(("".join(records) if alone else _listed(records)).encode(), nl=False)
    raise typer.Exit(max(o.code for o in outcomes))


def _listed(records: list[str]) -> str:
    return "[\n" + ",\n".join(r.rstrip("\n") for r in records) + "\n]\n"


def _check(wish: _Wish) -> None:
    """Refuse numbers no loop can keep, and a loop sheet that cannot be read, before any work."""
    limits = (
        ("--pm", wish.pm, 0.0, 180.0, "between 0 and 180 degrees"),
        ("--gm", wish.gm, 1.0, float("inf"), "above 1"),
        ("--ms", wish.ms, 1.0, float("inf"), "above 1"),
    )
    for option, value, low, high, words in limits:
        if value is not None and not low < value < high:
            raise UsageError(f"{option} must lie {words}, not {value:g}.")
    if wish.overshoot is not None and not 0.0 <= wish.overshoot < float("inf"):
        raise UsageError(f"--overshoot must be zero percent or more, not {wish.overshoot:g}.")
    if wish.loop is not None:
        _sheet(wish.loop)


def _sheet(path: Path) -> LoopSheet:
    from pipeline.sheetfile import load_sheet

    return load_sheet(path)


def _request(log: Path, wish: _Wish) -> Request:
    from pipeline.commission import Request

    beside = log.with_suffix(".toml")
    chosen = wish.loop or (beside if beside != log and beside.is_file() else None)
    return Request(
        sheet=None if chosen is None else _sheet(chosen),
        controller=wish.controller,
        phase_margin=wish.pm,
        gain_margin=wish.gm,
        max_sensitivity=wish.ms,
        overshoot=wish.overshoot,
    )


def _expanded(paths: Iterable[Path]) -> list[Path]:
    """Put the logs of a folder in its place, by name."""
    found: list[Path] = []
    for path in paths:
        if not path.is_dir():
            found.append(path)
            continue
        inside = sorted(
            p
            for p in path.iterdir()
            if p.is_file() and p.suffix.lower() not in _NOT_LOGS and not p.name.startswith(".")
        )
        if not inside:
            raise UsageError("There is no log in this folder.", file=str(path), remedy="Name the log itself.")
        found += inside
    return found


def _distinct_stems(paths: list[Path]) -> list[str]:
    """Name each log's files; a stem met before gets a number, upper and lower case being one."""
    taken: set[str] = set()
    stems: list[str] = []
    for path in paths:
        stem, count = path.stem, 1
        while stem.casefold() in taken:
            count += 1
            stem = f"{path.stem}-{count}"
        taken.add(stem.casefold())
        stems.append(stem)
    return stems


def _run(work: list[_Job], jobs: int | None) -> Iterator[_Outcome]:
    """Work on every log, results in the order given."""
    workers = min(jobs or os.cpu_count() or 1, len(work))
    if workers == 1:
        yield from map(_work, work)
        return
    from joblib import Parallel, delayed

    yield from Parallel(n_jobs=workers, batch_size=1, return_as="generator")(delayed(_work)(j) for j in work)


def _work(job: _Job) -> _Outcome:
    """Do the main job on one log; whatever goes wrong becomes a sentence."""
    try:
        from pipeline.commission import commission
        from pipeline.record import to_json, write_record
        from pipeline.report import write_report
        from pipeline.report.outline import build_outline
        from pipeline.report.terminal import printable, summary_line, summary_text

        record = commission(job.log, request=_request(job.log, job.wish))
        written = [job.out / f"{job.stem}.json"]
        write_record(record, written[0])
        if job.report:
            written += write_report(record, job.out, job.stem)
        outline = build_outline(record)
        if job.short:
            text = printable(f"{job.log}: {summary_line(outline)}")
        else:
            text = f"{summary_text(outline)}\nWritten: {printable(', '.join(map(str, written)))}"
        code = WITHHELD if record.verdict == "withheld" else READY
        return _Outcome(code=code, text=text, record=to_json(record))
    except Exception as error:
        return _told(error, job.log)


def _told(error: Exception, log: Path | None) -> _Outcome:
    """Turn an error into a sentence and its exit code."""
    from pipeline.report.terminal import printable

    place = "" if log is None else f"{log}: "
    if isinstance(error, FirstgainError):
        return _Outcome(code=error.exit_code, error=printable(f"{'' if error.file else place}{error}"))
    cause = f"{type(error).__name__}: {error}" if str(error) else type(error).__name__
    return _Outcome(
        code=_UNEXPECTED,
        error=printable(
            f"{place}The program failed where it should not ({cause}). "
            f"Please report this{'' if log is None else f' with the log {log.name}'}."
        ),
    )


def _stop(outcome: _Outcome) -> NoReturn:
    typer.echo(outcome.error, err=True)
    raise typer.Exit(outcome.code)


def _with_progress(outcomes: Iterator[_Outcome], total: int) -> Iterator[_Outcome]:
    """Show a bar on standard error while several logs are worked on, on a terminal only."""
    if total < 2 or not sys.stderr.isatty():
        yield from outcomes
        return
    from rich.console import Console
    from rich.progress import track

    yield from track(outcomes, total=total, description="Logs", console=Console(stderr=True), transient=True)


def main() -> None:
    """Run the command line."""
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="replace")  # a console without the degree sign still shows the rest
    app()
