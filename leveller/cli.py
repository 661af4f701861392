"""The command line: one short function a command; nothing is computed or drawn here. The sole user of typer.

Commands import what they need when they run, so that `leveller --help` waits for nothing. An error is one line on the
standard error and an exit code of its kind (`errors`); 2 is a wrong command line, 130 an interruption: the first
Ctrl-C ends the work, further ones do not disturb the tidying up. `main` limits the linear algebra library to one thread
unless the environment says otherwise: the work is spread over tracks already.
"""

from __future__ import annotations

import contextlib
import os
import sys
import traceback
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Annotated, Any

import typer

from leveller import __version__, console
from leveller.errors import LevellerError
from leveller.interruptions import Keyboard
from leveller.lanes import THREAD_LIMITS, keep_heap

USAGE_EXIT, INTERRUPTED_EXIT, UNEXPECTED_EXIT = 2, 130, 1
INTERRUPTED = "interrupted; nothing was left half-written"

_UsageError: Any = typer.BadParameter.__mro__[1]  # by way of typer, which may carry a click of its own
_ClickError: Any = _UsageError.__mro__[1]

app = typer.Typer(
    name="leveller", rich_markup_mode=None, pretty_exceptions_enable=False, add_completion=False,
    context_settings={"help_option_names": ["-h", "--help"]})

Sources = Annotated[list[Path], typer.Argument(
    readable=False, metavar="SESSION...", show_default=False,
    help="A folder, a session.toml, or the audio files of one conversation.")]
Files = Annotated[list[Path], typer.Argument(
    readable=False, metavar="FILE...", help="Audio files of any kind.", show_default=False)]
Out = Annotated[Path | None, typer.Option(
    metavar="DIR", help="Folder to write; ./levelled/TITLE by default. It appears whole or not at all.")]
Replace = Annotated[bool, typer.Option("--replace", help="Replace DIR where it exists.")]
DeliveryName = Annotated[str | None, typer.Option(
    metavar="NAME", help="What the mix shall read, such as podcast-mono or r128; `leveller settings` lists them.")]
Stems = Annotated[str, typer.Option(
    metavar="LEVEL", help="before-limiter (32-bit float) or limited (24 bit; they add up to mix.wav).")]
Assignments = Annotated[list[str] | None, typer.Option(
    "--set", metavar="KEY=VALUE", help="A setting, such as expander.range_db=18; may be given again.")]
Corrections = Annotated[Path | None, typer.Option(
    readable=False, metavar="FILE", help="A corrections.csv, or an edited speech.csv.")]
AcceptShort = Annotated[bool, typer.Option(
    "--accept-short", help="Take what is there of a file that is shorter than its header says.")]
Align = Annotated[bool | None, typer.Option(
    "--align/--no-align", help="Line up tracks of separate recorders: start, clock and polarity.", show_default=False)]
Quiet = Annotated[bool, typer.Option("--quiet", "-q", help="Print nothing but errors and a delivery that is not met.")]
NoProgress = Annotated[bool, typer.Option("--quiet", "-q", help="Show no progress.")]
Debug = Annotated[bool, typer.Option("--debug", help="Show where in the program an error arose.")]


def _print_version(wanted: bool) -> None:
    """The version alone."""
    if wanted:
        typer.echo(f"leveller {__version__}")
        raise typer.Exit


@app.callback()
def _root(
    version: Annotated[bool, typer.Option(
        "--version", help="Show the version and leave.", callback=_print_version, is_eager=True)] = False,
) -> None:
    """Multitrack dialogue leveller: closes the microphones that only hear the others, levels the voices, delivers on
    target."""


@app.command()
def process(
    sources: Sources, out: Out = None, replace: Replace = False, delivery: DeliveryName = None,
    stems: Stems = "before-limiter", assignments: Assignments = None, corrections: Corrections = None,
    accept_short: AcceptShort = False, align: Align = None, quiet: Quiet = False, debug: Debug = False,
) -> None:
    """Level a conversation: write stems, mix, automation and reports."""
    with _reported(debug):
        from leveller import pipeline
        from leveller.settings import parse_assignments

        with console.progress(console.PROCESS_SHARES, quiet=quiet) as on_progress:
            result = pipeline.process(
                sources, out=out, replace=replace, delivery=delivery, stems=stems,
                settings=parse_assignments(assignments or []), corrections=corrections, accept_short=accept_short,
                align=align, on_progress=on_progress)
        _print_summary(result, quiet)


@app.command()
def render(
    sources: Sources,
    automation: Annotated[Path, typer.Option(
        readable=False, metavar="FILE", help="An automation.csv, as written or edited; its gains are what is heard.",
        show_default=False)],
    out: Out = None, replace: Replace = False, delivery: DeliveryName = None, stems: Stems = "before-limiter",
    assignments: Assignments = None, corrections: Corrections = None, accept_short: AcceptShort = False,
    align: Align = None, quiet: Quiet = False, debug: Debug = False,
) -> None:
    """Render a session again, from edited automation; the delivery is met again."""
    with _reported(debug):
        from leveller import pipeline
        from leveller.settings import parse_assignments

        with console.progress(console.PROCESS_SHARES, quiet=quiet) as on_progress:
            result = pipeline.render_again(
                sources, automation, out=out, replace=replace, delivery=delivery, stems=stems,
                settings=parse_assignments(assignments or []), corrections=corrections, accept_short=accept_short,
                align=align, on_progress=on_progress)
        _print_summary(result, quiet)


@app.command()
def finish(
    files: Annotated[list[Path], typer.Argument(
        readable=False, metavar="FILE...", show_default=False,
        help="The edited programme, or its stems and music: they are summed as they are.")],
    out: Annotated[Path | None, typer.Option(
        metavar="DIR", help="Folder to write; './levelled/TITLE finished' by default.")] = None,
    replace: Replace = False, delivery: DeliveryName = None,
    assignments: Annotated[list[str] | None, typer.Option(
        "--set", metavar="KEY=VALUE",
        help="A limiter setting, such as limiter.release_s=0.2; may be given again.")] = None,
    accept_short: AcceptShort = False, quiet: Quiet = False, debug: Debug = False,
) -> None:
    """Bring an edited programme to its delivery: make-up gain and limiter only."""
    with _reported(debug):
        from leveller import pipeline
        from leveller.report.finished import finished_figures
        from leveller.settings import parse_assignments
        from leveller.spots import spots_to_hear

        with console.progress(console.FINISH_SHARES, quiet=quiet) as on_progress:
            finished = pipeline.finish(
                files, out=out, replace=replace, delivery=delivery, settings=parse_assignments(assignments or []),
                accept_short=accept_short, on_progress=on_progress)
        _print_report(finished_figures(finished), finished.out, quiet, spots_to_hear(finished), "report.html")


@app.command()
def measure(
    files: Files,
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON.")] = False,
    accept_short: AcceptShort = False, quiet: NoProgress = False, debug: Debug = False,
) -> None:
    """Read the loudness and true peak of any files."""
    with _reported(debug):
        from leveller.reading import measure_files
        from leveller.report.tables import as_json as readable
        from leveller.report.text import format_readings

        with console.progress(console.READ_SHARES, quiet=quiet) as on_progress:
            readings = measure_files(files, accept_short=accept_short, on_progress=on_progress)
        if as_json:
            _print_json([readable(reading) for reading in readings])
        else:
            console.print_lines(format_readings(readings, width=console.terminal_width(sys.stdout)))


@app.command()
def inspect(
    sources: Sources,
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON.")] = False,
    picture: Annotated[Path | None, typer.Option(
        metavar="FILE", help="Draw the table and what each microphone hears, as SVG.", show_default=False)] = None,
    accept_short: AcceptShort = False, align: Align = None, quiet: NoProgress = False, debug: Debug = False,
) -> None:
    """Look at a session before anything is rendered: levels, faults, bleed, room tone, advice."""
    with _reported(debug):
        from leveller import inspection
        from leveller.report.inspection import format_inspection, inspection_json, write_picture
        from leveller.report.text import Line

        with console.progress(console.INSPECT_SHARES, quiet=quiet) as on_progress:
            found = inspection.inspect(sources, align=align, accept_short=accept_short, on_progress=on_progress)
        if picture is not None:
            write_picture(picture, found)
        if as_json:
            _print_json(inspection_json(found))
        else:
            console.print_lines([Line(text) for text in format_inspection(found)])


@app.command()
def batch(
    season: Annotated[Path, typer.Argument(
        metavar="SEASON", help="A folder of sessions or polyphonic files, or a list of them (.csv, .toml).",
        show_default=False)],
    out: Annotated[Path, typer.Option(
        metavar="DIR", help="Folder to write, one folder in it for each episode.", show_default=False)],
    jobs: Annotated[int | None, typer.Option(
        metavar="N", help="Episodes at once, each on one processor; by default as processors and memory allow.",
        show_default=False)] = None,
    again: Annotated[bool, typer.Option("--again", help="Process unchanged and edited episodes too.")] = False,
    delivery: DeliveryName = None,
    stems: Annotated[str | None, typer.Option(
        metavar="LEVEL", help="before-limiter (default) or limited, for all episodes.", show_default=False)] = None,
    assignments: Assignments = None, accept_short: AcceptShort = False, align: Align = None,
    cluster: Annotated[str | None, typer.Option(
        metavar="ADDRESS", help="Hand the episodes to a Dask scheduler, such as tcp://10.0.0.5:8786.",
        show_default=False)] = None,
    quiet: Quiet = False, debug: Debug = False,
) -> None:
    """Process a season: every episode, one failure stopping nothing, and a report on all."""
    with _reported(debug):
        from leveller.batch import batch as run_batch
        from leveller.report.season_files import SeasonUnwritten
        from leveller.report.season_text import format_season, last_lines
        from leveller.settings import parse_assignments

        with console.season_progress(quiet=quiet) as on_season:
            try:
                report, unwritten = run_batch(
                    season, out=out, jobs=jobs, again=again, delivery=delivery, stems=stems,
                    settings=parse_assignments(assignments or []), accept_short=accept_short, align=align,
                    cluster=cluster, on_season=on_season), None
            except SeasonUnwritten as error:
                report, unwritten = error.report, error
        width = console.terminal_width(sys.stdout)
        if not quiet:
            console.print_lines(format_season(report, out=_near(Path(os.path.abspath(out))), width=width))
        elif report.exit_code:
            console.print_lines(last_lines(report), sys.stderr)
        if unwritten is not None:
            raise unwritten
        raise typer.Exit(report.exit_code)


@app.command()
def settings(
    session: Annotated[Path | None, typer.Argument(
        metavar="SESSION", help="A folder or a session.toml whose values count.", show_default=False)] = None,
    assignments: Assignments = None, align: Align = None,
    why: Annotated[bool, typer.Option("--why", help="Say the reason for each default.")] = False,
    debug: Debug = False,
) -> None:
    """List every setting and where it came from."""
    with _reported(debug):
        from leveller.report.origins import delivery_in_force, settings_in_force
        from leveller.report.text import format_settings
        from leveller.settings import DELIVERIES, parse_assignments

        rows = settings_in_force(session, parse_assignments(assignments or []), align=align)
        lines = format_settings([row if why else (*row[:4], "") for row in rows], list(DELIVERIES.values()),
                                delivery_in_force(session), width=console.terminal_width(sys.stdout))
        console.print_lines(lines)


def main(arguments: Sequence[str] | None = None) -> None:
    """Run a command and leave with its exit code; by default the process's own command line, and its Ctrl-C."""
    for name in THREAD_LIMITS:
        os.environ.setdefault(name, "1")
    keep_heap()
    for stream in (sys.stdout, sys.stderr):
        with contextlib.suppress(AttributeError):  # not every stream can change its ways
            stream.reconfigure(errors="backslashreplace")  # type: ignore[union-attr]
    with Keyboard() if arguments is None else contextlib.nullcontext():
        code = _run(list(sys.argv[1:] if arguments is None else arguments))
    sys.exit(code)


def _run(arguments: list[str]) -> int:
    """The exit code of a command line; without any words it shows the help."""
    try:
        code = app(args=arguments or ["--help"], prog_name="leveller", standalone_mode=False)
        sys.stdout.flush()
    except _ClickError as error:
        command = error.ctx.command_path if getattr(error, "ctx", None) else "leveller"
        message = error.format_message()
        console.print_error(f"{message}{'' if message.endswith(('.', '?')) else '.'} See {command} --help")
        return USAGE_EXIT
    except (KeyboardInterrupt, typer.Abort):
        console.print_error(INTERRUPTED)
        return INTERRUPTED_EXIT
    except BrokenPipeError:  # the reader of a pipe has gone; nobody is left to tell
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return UNEXPECTED_EXIT
    return code if isinstance(code, int) else 0


@contextlib.contextmanager
def _reported(debug: bool) -> Iterator[None]:
    """Errors as one line and an exit code; with the way through the program where asked for."""
    try:
        yield
    except (typer.Exit, BrokenPipeError):
        raise
    except (Exception, KeyboardInterrupt) as error:
        if debug:
            traceback.print_exc()
        message, code = _told(error, debug)
        console.print_error(message)
        raise typer.Exit(code) from None


def _told(error: BaseException, debug: bool) -> tuple[str, int]:
    """What to say of an error, and the exit code."""
    if isinstance(error, LevellerError):
        return str(error), error.exit_code
    if isinstance(error, KeyboardInterrupt):
        return INTERRUPTED, INTERRUPTED_EXIT
    return f"unexpected {type(error).__name__}: {error}{'' if debug else '. --debug shows where'}", UNEXPECTED_EXIT


def _print_summary(result: Any, quiet: bool) -> None:
    """The summary of a run."""
    from leveller.report.figures import figures_of
    from leveller.report.text import LISTED_IN

    _print_report(figures_of(result), result.out, quiet, result.places, LISTED_IN)


def _print_report(report: Any, out: Path, quiet: bool, places: Sequence[Any], listed_in: str) -> None:
    """A report; a delivery that is not met is said in any case."""
    from leveller.report.text import format_summary

    if not quiet:
        width = console.terminal_width(sys.stdout)
        console.print_lines(format_summary(report, out=_near(out), places=places, listed_in=listed_in, width=width))
    elif not report.delivery.met:
        console.print_error(f"delivery not met: {report.delivery.why_not}")


def _near(path: Path) -> str:
    """A path as seen from here, where it lies below."""
    here = Path.cwd()
    return str(path.relative_to(here)) if path.is_relative_to(here) else str(path)


def _print_json(value: Any) -> None:
    """A value as JSON."""
    import json

    typer.echo(json.dumps(value, indent=1, ensure_ascii=False))
