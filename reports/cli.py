"""Words, options, progress and exit codes; a command is parse, one call, print.

Results go to standard output, everything else to standard error. Exit codes: 0 done, all
limits met; 1 a limit failed; 2 the command line is wrong; 3 an input cannot be used;
4 undecided; 5 some captures of a sweep failed; 70 a fault of our own; 130 interrupted.
Nothing heavy is imported before a command runs, so that help answers at once.
"""

from __future__ import annotations

import os
import sys
from pathlib import Path
from typing import Annotated

import typer

from reports.cli_captures import measure, watch
from reports.cli_options import (
    ClusterOption,
    DatasetOption,
    DateOption,
    DecimalOption,
    DelimiterOption,
    FormatOption,
    JsonOption,
    NulOption,
    OrderOption,
    ProgressOption,
    QuietOption,
    RateFromOption,
    RateOption,
    SeedOption,
    SideOption,
    TimeColumnOption,
    TruncatedOption,
    TrustOption,
    WorkersOption,
)
from reports.cli_words import chosen_progress, emit, read_words, run_options, say, write_json
from reports.options import UsageError, parse_order, positive
from rig.errors import LockspanError

EXIT_DONE, EXIT_FAILED, EXIT_USAGE, EXIT_INPUT = 0, 1, 2, 3
EXIT_UNDECIDED, EXIT_PARTIAL, EXIT_FAULT, EXIT_INTERRUPTED = 4, 5, 70, 130
# The matrix products of the phase pass are small: a second thread inside them waits more than
# it works (measured 2 to 10 times slower on two cores). Read when numpy is first imported.
THREAD_VARIABLES = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")

app = typer.Typer(
    name="lockspan",
    help="Do two oscillators lock, over what range, how strongly, and does it meet the limits?",
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    no_args_is_help=True,
    context_settings={"help_option_names": ["-h", "--help"]},
)


def _version(wanted: bool) -> None:
    if wanted:
        from importlib.metadata import version

        emit(f"lockspan {version('lockspan')}")
        raise typer.Exit


@app.callback()
def _root(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Version.")
    ] = False,
    debug: Annotated[bool, typer.Option("--debug", help="Show tracebacks.")] = False,
) -> None:
    """Do two oscillators lock, over what range, how strongly, and does it meet the limits?"""


@app.command()
def inspect(
    files: Annotated[list[str], typer.Argument(help="Captures to look at.")],
    json: JsonOption = None,
    picture: Annotated[
        str | None, typer.Option("--picture", help="Write an overview figure to FILE.")
    ] = None,
    rate: RateOption = None,
    dataset: DatasetOption = None,
    format: FormatOption = None,
    trust_file_length: TrustOption = False,
    allow_truncated: TruncatedOption = False,
    delimiter: DelimiterOption = None,
    decimal: DecimalOption = None,
    time_column: TimeColumnOption = None,
    stop_at_nul: NulOption = False,
    rate_from: RateFromOption = None,
    transformer_side: SideOption = None,
) -> None:
    """Show what a capture is and what is wrong with it."""
    from reports.looking import inspect_files

    read = read_words(
        rate_hz=rate,
        dataset=dataset,
        format=format,
        trust_file_length=trust_file_length,
        allow_truncated=allow_truncated,
        delimiter=delimiter,
        decimal=decimal,
        time_column=time_column,
        stop_at_nul=stop_at_nul,
        rate_attribute=rate_from,
        transformer_side=transformer_side,
    )
    text, value, code = inspect_files(files, read=read, picture=picture)
    if json:
        write_json(value, json)
    if json != "-":
        emit(text)
    raise typer.Exit(code)


app.command()(measure)
app.command()(watch)


@app.command()
def sweep(
    file: Annotated[str, typer.Argument(metavar="SWEEP.toml", help="The sweep file.")],
    out: Annotated[str, typer.Option("--out", help="Folder for the results and the report.")],
    workers: WorkersOption = None,
    cluster: ClusterOption = None,
    date: DateOption = None,
    seed: SeedOption = 1,
    progress: ProgressOption = "auto",
    quiet: QuietOption = False,
    fresh: Annotated[bool, typer.Option("--fresh", help="Measure again what is stored.")] = False,
) -> None:
    """Measure every point of a sweep, map the locking region, judge the limits, report."""
    from reports.runs import run_sweep

    options = run_options(workers, cluster, date, seed, fresh)
    outcome = run_sweep(Path(file), Path(out), options, chosen_progress(progress, quiet))
    emit(outcome.text)
    raise typer.Exit(outcome.exit_code)


@app.command()
def report(
    folder: Annotated[str, typer.Argument(metavar="DIR", help="Folder of a finished sweep.")],
    sweep_file: Annotated[
        str | None, typer.Option("--sweep", help="Sweep file with changed limits.")
    ] = None,
    date: DateOption = None,
) -> None:
    """Judge and write again from the stored results, without measuring again."""
    from reports.provenance import date_text
    from reports.runs import report_again

    day = None if date is None else date_text(date, {})
    outcome = report_again(Path(folder), sweep_file=sweep_file, date=day)
    emit(outcome.text)
    raise typer.Exit(outcome.exit_code)


@app.command()
def draft(
    folder: Annotated[str, typer.Argument(metavar="FOLDER", help="Folder of captures.")],
) -> None:
    """Write a commented SWEEP.toml for the captures found in a folder."""
    from reports.draft import write_draft

    emit(write_draft(Path(folder)))


@app.command()
def simulate(
    rig: Annotated[str, typer.Argument(help="Simulated rig; 'list' names them all.")],
    out: Annotated[str, typer.Argument(help="Capture to write (.wav, .csv or .npy).")] = "",
    duration: Annotated[float | None, typer.Option("--duration", help="Seconds.")] = None,
    rate: RateOption = None,
    seed: SeedOption = 1,
    set_: Annotated[
        list[str] | None,
        typer.Option("--set", help="NAME=VALUE of the rig; a wrong name lists all."),
    ] = None,
    json: JsonOption = None,
) -> None:
    """Write a capture with known truth from a physical model of a rig."""
    from reports.simulating import simulate_file

    positive("--duration", duration)
    positive("--rate", rate)
    text, value = simulate_file(
        rig, out, duration_s=duration, rate_hz=rate, seed=seed, settings=set_ or []
    )
    if json:
        write_json(value, json)
    if json != "-":
        emit(text)


@app.command()
def demo(
    folder: Annotated[str, typer.Argument(metavar="[DIR]", help="Where to write.")] = "demo-run",
    faulty: Annotated[bool, typer.Option("--faulty", help="An item that fails.")] = False,
    overwrite: Annotated[bool, typer.Option("--overwrite", help="Replace an old demo.")] = False,
    workers: WorkersOption = None,
    date: DateOption = None,
    seed: SeedOption = 1,
    progress: ProgressOption = "auto",
    quiet: QuietOption = False,
) -> None:
    """Run the built-in campaign end to end: captures, sweep, region, limits, report."""
    from reports.demorun import run_demo

    outcome = run_demo(
        Path(folder),
        faulty=faulty,
        overwrite=overwrite,
        options=run_options(workers, None, date, seed, False),
        progress=chosen_progress(progress, quiet),
    )
    emit(outcome.text)
    raise typer.Exit(outcome.exit_code)


@app.command()
def plan(
    words: Annotated[
        list[str],
        typer.Argument(
            metavar="DIR | NAME=VALUE...", help="A run, or coupling=HZ noise=RAD2/S ..."
        ),
    ],
    within: Annotated[float, typer.Option("--within", help="Wanted standard uncertainty.")],
    want: Annotated[str, typer.Option("--want", help="edge, detuning, coupling, offset.")] = "edge",
    points: Annotated[int | None, typer.Option("--points", help="Points of a pass.")] = None,
    settle: Annotated[float, typer.Option("--settle", help="Seconds lost between points.")] = 0.0,
    order: OrderOption = "1:1",
    json: JsonOption = None,
) -> None:
    """Say how long to record and which points to take, for a wanted uncertainty."""
    from reports.planning import PlanGoal, plan_from

    goal = PlanGoal(want, within, points, settle, parse_order(order))
    text, value = plan_from(words, goal)
    if json:
        write_json(value, json)
    if json != "-":
        emit(text)


@app.command()
def verify(
    folder: Annotated[str, typer.Argument(metavar="DIR", help="Folder of a finished sweep.")],
) -> None:
    """Recompute digests and verdicts of a stored run and say what differs."""
    from reports.verify import verify_folder

    text, code = verify_folder(Path(folder))
    emit(text)
    raise typer.Exit(code)


@app.command()
def compare(
    first: Annotated[str, typer.Argument(metavar="DIR", help="Folder of a finished sweep.")],
    second: Annotated[str, typer.Argument(metavar="DIR", help="The other one.")],
    json: JsonOption = None,
) -> None:
    """Set two runs side by side, with the significance of each difference."""
    from reports.compare import compare_folders

    text, value = compare_folders(Path(first), Path(second))
    if json:
        write_json(value, json)
    if json != "-":
        emit(text)


def _on_one_line(what: object) -> str:
    """Return an error or a name in one line: a file's name may hold line breaks."""
    return "".join(mark if mark.isprintable() else ascii(mark)[1:-1] for mark in str(what))


def _exit_code(error: BaseException) -> int:
    """Return the exit code that an error stands for, after printing its one line."""
    if isinstance(error, KeyboardInterrupt):
        say("interrupted; what was finished is kept")
        return EXIT_INTERRUPTED
    if isinstance(error, UsageError):
        say(f"error: {_on_one_line(error)}")
        return EXIT_USAGE
    if isinstance(error, LockspanError):
        say(f"error: {_on_one_line(error)}")
        return EXIT_INPUT
    if isinstance(error, OSError):
        name = error.filename if error.filename is not None else "file"
        say(f"error: {_on_one_line(name)}: {error.strerror or error}")
        return EXIT_INPUT
    say(f"fault of lockspan itself: {type(error).__name__}: {error}")
    say("please report it with the command line; --debug shows where it happened")
    return EXIT_FAULT


def main() -> None:
    """Run the command line; every way out is one of the stated exit codes."""
    for name in THREAD_VARIABLES:
        os.environ.setdefault(name, "1")
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="backslashreplace")
    try:
        code = app(standalone_mode=False)
    except BrokenPipeError:
        # The reader of our output has gone: nothing more to say, and nothing went wrong.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        code = EXIT_DONE
    except Exception as error:
        if hasattr(error, "show") and hasattr(error, "exit_code"):
            error.show()
            code = EXIT_USAGE
        elif "--debug" in sys.argv:
            raise
        else:
            code = _exit_code(error)
    except KeyboardInterrupt as error:
        code = _exit_code(error)
    sys.exit(code if isinstance(code, int) else EXIT_DONE)
