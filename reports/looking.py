"""One capture looked at or measured, as the commands ``inspect`` and ``measure`` do it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from fit.analysis import MeasureSettings, measure_pair
from fit.records import FreeRun, Measurement
from reports.exports import measurement_json
from reports.measuring import measure_free_run, named_line, phase_settings, stated_rules
from reports.provenance import file_digest
from reports.store import write_atomic
from reports.summaries import measurement_text
from rig.channels import ChannelSetup, wire_channel
from rig.errors import LockspanError
from rig.phases.settings import PairSettings, PhaseSettings
from rig.readers.options import ReadOptions
from rig.readers.table import open_capture

EXIT_DONE, EXIT_UNDECIDED = 0, 4
_PICTURE_FORMATS = ("png", "svg", "pdf")


def measure_file(
    file: str, *, words: Mapping[str, Any], read: Mapping[str, Any], picture: str | None
) -> tuple[str, dict[str, Any], int]:
    """Return (text, JSON value, exit code) of one measured capture.

    Parameters
    ----------
    file : path of the capture
    words : mapping of the measuring options, parsed
    read : mapping of the reading options
    picture : path of a figure to write, or None

    Raises
    ------
    LockspanError
        If the capture, a channel or its phase cannot be used.
    """
    try:
        measurement = _measured(file, words, ReadOptions(**read))
    except LockspanError as error:
        # A log of hundreds is searched by file; a rule of phases or wiring knows none.
        raise LockspanError(named_line(file, error)) from error
    if picture is not None:
        from reports.figures.records import draw_record

        write_picture(draw_record(measurement), Path(picture))
    value = measurement_json(measurement, file_digest(Path(file)))
    undecided = measurement.decision.state == "undecided"
    return measurement_text(measurement), value, EXIT_UNDECIDED if undecided else EXIT_DONE


def _measured(file: str, words: Mapping[str, Any], options: ReadOptions) -> Measurement:
    """Return the measurement of one capture by the options of the command line."""
    setups = {role: ChannelSetup(channel=words[role]) for role in ("reference", "driven")}
    capture = open_capture(file, options=options)
    settings = _settings(words)
    return measure_pair(
        wire_channel(capture, setups["reference"]),
        wire_channel(capture, setups["driven"]),
        settings=settings,
        free_runs=_free_runs(words, setups, options, settings),
    )


def _settings(words: Mapping[str, Any]) -> MeasureSettings:
    """Return the measuring settings that the options state."""
    method = None if words["method"] == "auto" else words["method"]
    reference_band, driven_band = words["bands"]
    return MeasureSettings(
        order=words["order"],
        phases=PairSettings(
            reference=phase_settings(method, reference_band),
            driven=phase_settings(method, driven_band),
        ),
        rules=stated_rules(eps=words["eps"], hold=words["hold"], free_spread=words["free_spread"]),
        settle_s=words["settle_s"],
    )


def _free_runs(
    words: Mapping[str, Any],
    setups: Mapping[str, ChannelSetup],
    options: ReadOptions,
    settings: MeasureSettings,
) -> list[FreeRun]:
    """Return what the free-running captures named on the command line say."""
    phases: dict[str, PhaseSettings] = {
        "driven": settings.phases.driven,
        "reference": settings.phases.reference,
    }
    return [
        measure_free_run(
            file, setups[role], role=role, shown=file, options=options, phases=phases[role]
        )
        for role in ("driven", "reference")
        for file in words[f"free_{role}"]
    ]


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
