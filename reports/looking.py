"""One capture looked at or measured, as the commands ``inspect`` and ``measure`` do it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

from fit.analysis import MeasureSettings, measure_pair
from fit.records import FreeRun, Measurement
from reports.measuring import named_line, plan_free_run, plan_read_options, plan_settings
from reports.provenance import file_digest
from reports.record_json import measurement_json
from reports.record_text import measurement_text
from reports.stating import stated_plan
from reports.store import write_atomic
from rig.captures import Capture
from rig.channels import wire_channel
from rig.errors import LockspanError
from rig.readers.options import ReadOptions
from rig.readers.table import open_capture
from rig.sweepfile import SweepPlan

EXIT_DONE, EXIT_UNDECIDED = 0, 4
_PICTURE_FORMATS = ("png", "svg", "pdf")


def measure_file(
    file: str,
    *,
    words: Mapping[str, Any],
    read: Mapping[str, Any],
    picture: str | None,
    quiet: bool = False,
) -> tuple[str, dict[str, Any], int]:
    """Return (text, JSON value, exit code) of one measured capture.

    Parameters
    ----------
    file : path of the capture
    words : mapping of the measuring options that were given, parsed
    read : mapping of the reading options
    picture : path of a figure to write, or None
    quiet : bool, leave the notes out of the text; the JSON always has them

    Raises
    ------
    LockspanError
        If the capture, a channel or its phase cannot be used.
    """
    try:
        measurement = _measured(file, words, ReadOptions(**read))
    except LockspanError as error:
        # A log of hundreds is searched by file; a rule of phases or wiring knows none.
        known = str(error).startswith(_named_files(file, words))
        raise LockspanError(str(error) if known else named_line(file, error)) from error
    if picture is not None:
        from reports.figures.records import draw_record

        write_picture(draw_record(measurement), Path(picture))
    value = measurement_json(measurement, file_digest(Path(file)))
    undecided = measurement.decision.state == "undecided"
    text = measurement_text(measurement, with_notes=not quiet)
    return text, value, EXIT_UNDECIDED if undecided else EXIT_DONE


def _named_files(file: str, words: Mapping[str, Any]) -> tuple[str, ...]:
    """Return every file that the command line names; an error of one of them names no other."""
    free = [*words.get("free_driven", ()), *words.get("free_reference", ())]
    return (words.get("driven_file", file), words.get("sweep", file), *free)


def _measured(file: str, words: Mapping[str, Any], options: ReadOptions) -> Measurement:
    """Return the measurement of one capture by its sweep file and the options given."""
    plan = stated_plan(words)
    settings = plan_settings(plan)
    read = plan_read_options(plan, options)
    capture = open_capture(file, options=read)
    second = _second_capture(words, read)
    if second is not None and _is_the_only_channel(second, words):
        plan = replace(plan, driven=replace(plan.driven, channel="1"))
    free_runs = [plan_free_run(plan, entry, Path(entry.file), read) for entry in plan.free_running]
    if second is not None:
        measured = _two_recorders((capture, second), plan, settings, free_runs)
    else:
        measured = measure_pair(
            wire_channel(capture, plan.reference),
            wire_channel(capture, plan.driven),
            settings=settings,
            free_runs=free_runs,
        )
    return _sourced(measured, plan)


def _sourced(measured: Measurement, plan: SweepPlan) -> Measurement:
    """Return the measurement with the file its wiring and rules are from."""
    if not plan.path:
        return measured
    note = f"wiring and rules from {plan.path} where no option states them"
    return replace(measured, notes=(note, *measured.notes))


def _second_capture(words: Mapping[str, Any], read: ReadOptions) -> Capture | None:
    """Return the driven one's capture by another recorder, where one is named."""
    if "driven_file" not in words:
        return None
    # A stated rate is that of the first file; the second has its own.
    return open_capture(words["driven_file"], options=replace(read, rate_hz=None))


def _is_the_only_channel(second: Capture, words: Mapping[str, Any]) -> bool:
    """Return whether the driven one needs no naming: nothing states it, and there is no other."""
    return len(second.channels) == 1 and "driven" not in words and "sweep" not in words


def _two_recorders(
    captures: tuple[Capture, Capture],
    plan: SweepPlan,
    settings: MeasureSettings,
    free_runs: list[FreeRun],
) -> Measurement:
    """Return the measurement of a pair whose driven one was taken by another recorder."""
    from reports.pairfiles import measure_pair_of_files

    return measure_pair_of_files(
        captures,
        (plan.reference, plan.driven),
        plan.second_recorder,
        settings=settings,
        free_runs=free_runs,
    )


def inspect_files(
    files: Sequence[str], *, read: Mapping[str, Any], picture: str | None
) -> tuple[str, Any, int]:
    """Return (text, JSON value, exit code) of some captures looked at.

    Raises
    ------
    LockspanError
        If a capture cannot be read.
    """
    from reports.inspection import inspect_capture, inspection_json, inspection_text

    texts, values = [], []
    for file in files:
        capture = open_capture(file, options=ReadOptions(**read))
        inspection = inspect_capture(capture)
        texts.append(inspection_text(inspection))
        values.append(inspection_json(inspection))
        if picture is not None and len(files) == 1:
            from reports.figures.overview import draw_overview

            write_picture(draw_overview(capture, inspection), Path(picture))
    return "\n".join(texts), values[0] if len(values) == 1 else values, EXIT_DONE


def write_picture(figure: Any, path: Path) -> None:
    """Write a figure in the format of the file's suffix (png, svg or pdf).

    Raises
    ------
    UsageError
        If the suffix is another.
    """
    import io

    from reports.options import UsageError

    kind = path.suffix.lower().lstrip(".")
    if kind not in _PICTURE_FORMATS:
        raise UsageError(f"--picture {path}: needs a name ending in .png, .svg or .pdf")
    buffer = io.BytesIO()
    figure.savefig(buffer, format=kind, dpi=150, metadata=_no_date(kind))
    write_atomic(path, buffer.getvalue())


def _no_date(kind: str) -> dict[str, Any] | None:
    """Return metadata that keeps the time of writing out of the file."""
    return {"svg": {"Date": None}, "pdf": {"CreationDate": None}}.get(kind)
