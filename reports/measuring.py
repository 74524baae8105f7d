"""One capture measured in a process of its own: plain dictionaries in, plain ones out.

A task holds paths and encoded settings, never samples, so that it can be sent to another
process or machine; whatever goes wrong comes back as a status and one line.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any, cast

from fit.analysis import MeasureSettings, PreparedPair, estimate_all, prepare_pair
from fit.episodes import EpisodeRules, parse_hold
from fit.freerun import estimate_free_run
from fit.records import FreeRun, Measurement
from reports.pairfiles import measure_pair_of_files
from reports.store import decode_record, encode_record
from rig.captures import Capture
from rig.channels import Channel, ChannelSetup, wire_channel
from rig.errors import LockspanError
from rig.phases.estimate import track_one
from rig.phases.settings import MethodName, PairSettings, PhaseSettings
from rig.readers.options import DEFAULTS, ReadOptions
from rig.readers.table import open_capture
from rig.sweepfile import FreeRunEntry, SecondRecorder, SweepPlan

ALGORITHM = "2"  # part of every stored result's key; raised when a number would change


def plan_settings(plan: SweepPlan) -> MeasureSettings:
    """Return how the captures of a sweep are measured; what it does not state is default."""
    table = plan.measure
    rules = stated_rules(
        eps=table.eps_turns, hold=table.hold, free_spread=table.free_spread, style=table.style_deg
    )
    phases = PairSettings(
        reference=phase_settings(table.method_reference, table.band_reference_hz),
        driven=phase_settings(table.method_driven, table.band_driven_hz),
    )
    return MeasureSettings(
        order=plan.order,
        phases=phases,
        rules=rules,
        settle_s=table.settle_s,
        one_way=plan.coupling == "one-way",
    )


def phase_settings(method: str | None, band_hz: tuple[float, float] | None) -> PhaseSettings:
    """Return the phase settings of one role.

    Raises
    ------
    PhaseError
        If the method is not one of the known ones, or the band is upside down.
    """
    # The record itself refuses a word that is no method.
    return PhaseSettings(method=cast(MethodName, method or "auto"), band_hz=band_hz)


def stated_rules(
    *,
    eps: float | None = None,
    hold: str | None = None,
    free_spread: float | None = None,
    style: float | None = None,
) -> EpisodeRules:
    """Return the episode rules with what was stated in place of their defaults.

    Raises
    ------
    FitError
        If a stated value breaks its rule.
    """
    stated = {"eps_turns": eps, "free_spread": free_spread, "style_deg": style}
    known = {name: value for name, value in stated.items() if value is not None}
    rules = EpisodeRules(**known)
    return rules if hold is None else parse_hold(hold, rules)


def plan_read_options(plan: SweepPlan, options: ReadOptions = DEFAULTS) -> ReadOptions:
    """Return how the captures of a sweep are read; what the options state wins."""
    return replace(
        options,
        rate_hz=options.rate_hz or plan.measure.rate_hz,
        dataset=options.dataset or plan.measure.dataset,
    )


def pair_task(
    captures: Sequence[Sequence[tuple[Path, str]]],
    plan_parts: Mapping[str, Any],
    free_runs: tuple[FreeRun, ...],
) -> dict[str, Any]:
    """Return the task that measures a few captures of a pair.

    Parameters
    ----------
    captures : for each point one (file, its name as results show it), or two where another
        recorder took the driven one
    plan_parts : mapping with encoded "settings", "read", "reference", "driven", and
        "second_recorder" where there is one
    free_runs : tuple of FreeRun
    """
    return {
        "captures": [[[str(path), shown] for path, shown in point] for point in captures],
        "free_runs": [encode_record(run) for run in free_runs],
        **plan_parts,
    }


def plan_task_parts(plan: SweepPlan) -> dict[str, Any]:
    """Return the parts of a task that all captures of a sweep share."""
    parts = {
        "settings": encode_record(plan_settings(plan)),
        "read": encode_record(plan_read_options(plan)),
        "reference": encode_record(plan.reference),
        "driven": encode_record(plan.driven),
    }
    if any(point.driven_file for point in plan.points):
        # Left out otherwise: it would change the key of results that it does not touch.
        parts["second_recorder"] = encode_record(plan.second_recorder)
    return parts


def measure_task(task: Mapping[str, Any]) -> dict[str, Any]:
    """Return {"outcomes": [{"status", "message", "measurement"}, ...]}, one for each capture.

    Status is "ok", "undecided" or "invalid"; the measurement is encoded, None when invalid.
    Never raises for bad input. The estimates of all captures of a task are made as one array
    of lanes, which costs far less than one after another and gives the same numbers.
    """
    settings = decode_record(MeasureSettings, task["settings"])
    free_runs = [decode_record(FreeRun, run) for run in task["free_runs"]]
    found = [_prepare(files, task, settings, free_runs) for files in task["captures"]]
    prepared = [part for part in found if isinstance(part, PreparedPair)]
    finished = iter(estimate_all(prepared, settings=settings))
    outcomes = []
    for part in found:
        if isinstance(part, str):
            outcomes.append(_invalid(part))
        else:
            outcomes.append(_outcome(next(finished) if isinstance(part, PreparedPair) else part))
    return {"outcomes": outcomes}


def _prepare(
    files: Sequence[Sequence[str]],
    task: Mapping[str, Any],
    settings: MeasureSettings,
    free_runs: Sequence[FreeRun],
) -> PreparedPair | Measurement | str:
    """Return the prepared capture, the result of a pair of files, or the line that bars it."""
    shown = " + ".join(name for _, name in files)
    try:
        read = decode_record(ReadOptions, task["read"])
        captures = [open_named(path, name, read) for path, name in files]
        reference, driven = (
            decode_record(ChannelSetup, task[role]) for role in ("reference", "driven")
        )
        if len(files) == 1:
            channels = [wire_channel(captures[0], setup) for setup in (reference, driven)]
            return prepare_pair(channels[0], channels[1], settings=settings, free_runs=free_runs)
        return measure_pair_of_files(
            (captures[0], captures[1]),
            (reference, driven),
            decode_record(SecondRecorder, task["second_recorder"]),
            settings=settings,
            free_runs=free_runs,
        )
    except LockspanError as error:
        return named_line(shown, error)
    except OSError as error:
        return os_line(shown, error)


def named_line(shown: str, error: LockspanError) -> str:
    """Return the line of an error with the name of the capture in front where it lacks it."""
    text = str(error)
    return text if text.startswith(tuple(shown.split(" + "))) else f"{shown}: {text}"


def _invalid(message: str) -> dict[str, Any]:
    return {"status": "invalid", "message": message, "measurement": None}


def _outcome(measurement: Measurement) -> dict[str, Any]:
    undecided = measurement.decision.state == "undecided"
    return {
        "status": "undecided" if undecided else "ok",
        "message": measurement.decision.reason if undecided else "",
        "measurement": encode_record(measurement),
    }


def open_named(path: str, shown: str, options: ReadOptions) -> Capture:
    """Return a capture under the name that results show.

    Raises
    ------
    CaptureError
        If the file cannot be used; the message starts with the shown name.
    """
    return replace(open_capture(path, options=options), path=shown)


def plan_free_run(
    plan: SweepPlan, entry: FreeRunEntry, path: Path, options: ReadOptions = DEFAULTS
) -> FreeRun:
    """Return what one free-running capture of a sweep says, by the rules of its role.

    Raises
    ------
    LockspanError
        If the capture, the channel or its phase cannot be used.
    """
    setup = plan.driven if entry.role == "driven" else plan.reference
    if entry.channel is not None:
        setup = replace(setup, channel=entry.channel)
    settings = plan_settings(plan).phases
    return measure_free_run(
        str(path),
        setup,
        role=entry.role,
        shown=entry.file,
        options=plan_read_options(plan, options),
        phases=settings.driven if entry.role == "driven" else settings.reference,
    )


def measure_free_run(
    path: str,
    setup: ChannelSetup,
    *,
    role: str,
    shown: str,
    options: ReadOptions,
    phases: PhaseSettings,
) -> FreeRun:
    """Return frequency, drift and noise of one oscillator recorded alone.

    Raises
    ------
    LockspanError
        If the capture, the channel or its phase cannot be used.
    """
    channel: Channel = wire_channel(open_named(path, shown, options), setup)
    track = track_one(channel, settings=phases)
    return estimate_free_run(track, "driven" if role == "driven" else "reference", file=shown)


def os_line(shown: str, error: OSError) -> str:
    """Return the one line for a file that the system refuses."""
    return f"{shown}: {error.strerror or error}"
