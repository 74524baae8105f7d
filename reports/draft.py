"""A sweep file drafted from a folder of captures; every guess is marked as a guess.

What is guessed, and from what: roles from channel names, else from the spread of the
frequencies; drive frequency from the reference channel, held against the file name; level
from the file name, else from the amplitude of the reference; direction from the name, else
from the order in time; free-running captures by one channel that is quiet, or by name.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from reports.draftpairs import PAIR_ROLES, ending_role, pair_names, together
from reports.filenames import NameHints, escaped, is_text, level_kind, name_hints
from reports.sequence import guess_directions
from reports.store import write_atomic
from rig.channels import ChannelSetup
from rig.errors import CaptureError, SweepFileError
from rig.readers import READERS, open_capture
from rig.readers.refusals import printable
from rig.roles import (
    Glance,
    Roles,
    glance_at,
    guess_order,
    guess_quantity,
    guess_roles,
    is_running,
    usual_amplitude,
)
from rig.sweepfile import (
    FreeRunEntry,
    LevelAxis,
    PointEntry,
    SweepPlan,
    render_points_csv,
    render_sweep_toml,
)

NOTE_LETTERS = 500  # names of files may hold line ends: a note keeps to its line
SWEEP_NAME, TABLE_NAME = "SWEEP.toml", "points.csv"
DEEPEST = 2  # folders below the one given that are looked into
NAME_REACH = 0.01  # relative distance within which a measured frequency confirms a name's
LEVEL_REACH = 0.03  # relative distance of amplitudes that are taken for one level
# A run without limits is "undecided": the draft shows what a limit looks like.
LIMIT_HINT = """
# Limits: what the item must do. Without one the verdict is "undecided".
# [[limit]]
# name = "locking width"
# quantity = "locking_width_hz"  # or lower_edge_hz, upper_edge_hz, state, slip_rate_hz ...
# level = ?  # the level it applies to; every level when left out
# lower = ?  # Hz; upper = ? likewise
# rule = "guard"  # pass only when the value clears the limit by its expanded uncertainty
"""
SOUND_FORMATS = ("wav", "rf64", "w64", "aiff", "caf", "flac")


@dataclass(frozen=True, slots=True, kw_only=True)
class DraftResult:
    """A drafted plan, its text and table, and what a person should know about it."""

    plan: SweepPlan
    toml: str
    table: str
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Seen:
    """A capture as seen: its glance, what its name says, and when it was written.

    ``driven_file`` is the file of the driven one where a second recorder took it.
    """

    glance: Glance
    hints: NameHints
    time_key: tuple[str, int]
    driven_file: str = ""


_Free = tuple[FreeRunEntry, str]  # and what the guess rests on


def draft_sweep(folder: Path) -> DraftResult:
    """Return a draft of the sweep file for the captures in a folder; nothing is written.

    Parameters
    ----------
    folder : Path, looked into two folders deep

    Raises
    ------
    SweepFileError
        If the folder cannot be read or holds no capture to make a point of.
    """
    seen, refused = _look(folder)
    if not seen:
        reasons = f"; {refused[0]}" if refused else ""
        raise SweepFileError(
            f"{folder}: no capture that can be read ({len(refused)} tried{reasons}). "
            "Name a folder of captures."
        )
    seen, alone = _paired(seen)
    seen, odd = _same_channels(seen)
    is_paired = any(part.driven_file for part in seen)
    roles = PAIR_ROLES if is_paired else guess_roles([part.glance for part in seen])
    points, free, quiet = _sorted_out(seen, roles)
    free = [*free, *alone]
    if not points:
        raise SweepFileError(
            f"{folder}: none of {len(seen)} captures shows both oscillators. "
            "Check the channels with lockspan inspect."
        )
    notes = (*refused, *odd, *quiet)
    return _result(folder, points, free, roles, notes)


def write_draft(folder: Path) -> str:
    """Write SWEEP.toml and points.csv for a folder of captures; return what to print.

    Raises
    ------
    SweepFileError
        If one of the two is there already, or the folder holds no capture.
    """
    for name in (SWEEP_NAME, TABLE_NAME):
        if (folder / name).exists():
            raise SweepFileError(
                f"{folder / name}: is there already; a draft overwrites nothing. Move it away."
            )
    result = draft_sweep(folder)
    write_atomic(folder / TABLE_NAME, result.table.encode("utf-8"))
    write_atomic(folder / SWEEP_NAME, result.toml.encode("utf-8"))
    return draft_text(folder, result)


def draft_text(folder: Path, result: DraftResult) -> str:
    """Return what was drafted, what was left out, and what to do next."""
    plan = result.plan
    lines = [
        f"{folder / SWEEP_NAME}: {len(plan.points)} points, {len(plan.free_running)} free-running",
        *(f"left out: {printable(note, NOTE_LETTERS)}" for note in result.notes),
        *_clock_line(plan),
        "Check every line marked 'guess:' and state limits, item and laboratory.",
        f"Then run: lockspan sweep {folder / SWEEP_NAME} --out DIR",
    ]
    return "\n".join(lines)


def _clock_line(plan: SweepPlan) -> list[str]:
    """Return what two recorders still need: a tie of their clocks."""
    if not any(point.driven_file for point in plan.points):
        return []
    return ["guess: pairs of files by two recorders. State what ties their clocks."]


def _look(folder: Path) -> tuple[list[_Seen], list[str]]:
    """Return the captures of a folder that can be read, and why others cannot."""
    seen, refused = [], []
    for path in _candidates(folder):
        name = path.relative_to(folder).as_posix()
        if not is_text(name):
            refused.append(
                f"{escaped(name)}: its name is not UTF-8 and cannot be stated; rename it"
            )
            continue
        try:
            glance = glance_at(open_capture(path), name)
        except CaptureError as error:
            refused.append(str(error).replace(str(path), name))
            continue
        time_key = (glance.start_text or "", path.stat().st_mtime_ns)
        seen.append(_Seen(glance=glance, hints=name_hints(name), time_key=time_key))
    return seen, refused


def _candidates(folder: Path) -> list[Path]:
    """Return the files that may be captures, by suffix, in the order of their names."""
    suffixes = {suffix for reader in READERS.values() for suffix in reader.suffixes}
    if not folder.is_dir():
        raise SweepFileError(f"{folder}: is not a folder. Name the folder that holds the captures.")
    found = [
        path
        for path in folder.rglob("*")
        if path.suffix.lower() in suffixes
        and len(path.relative_to(folder).parts) <= DEEPEST + 1
        and not any(part.startswith(".") for part in path.relative_to(folder).parts)
        and path.is_file()
    ]
    return sorted(found, key=lambda path: path.relative_to(folder).parts)


def _paired(seen: list[_Seen]) -> tuple[list[_Seen], list[_Free]]:
    """Bring together the one-channel captures of two recorders; others of a role run alone."""
    single = {part.glance.file: part for part in seen if len(part.glance.names) == 1}
    pairs = pair_names(list(single))
    if not pairs:
        return seen, []
    halves = {*pairs, *pairs.values()}
    found = [
        replace(
            single[first],
            glance=together(single[first].glance, single[second].glance),
            driven_file=second,
        )
        for first, second in pairs.items()
    ]
    free: list[_Free] = []
    for part in seen:
        role = ending_role(part.glance.file)
        if part.glance.file in single and part.glance.file not in halves and role:
            entry = FreeRunEntry(
                file=part.glance.file, role="driven" if role == "driven" else "reference"
            )
            free.append((entry, "the ending of its name, and it has no partner file"))
        elif part.glance.file not in halves:
            found.append(part)
    return found, free


def _same_channels(seen: list[_Seen]) -> tuple[list[_Seen], list[str]]:
    """Keep the captures that have the commonest count of channels."""
    counts = [len(part.glance.names) for part in seen]
    usual = max(sorted(set(counts)), key=counts.count)
    odd = [
        f"{part.glance.file}: {count} channels, {usual} usual here"
        for part, count in zip(seen, counts, strict=True)
        if count != usual
    ]
    return [part for part, count in zip(seen, counts, strict=True) if count == usual], odd


def _sorted_out(seen: list[_Seen], roles: Roles) -> tuple[list[_Seen], list[_Free], list[str]]:
    """Part captures into points, free-running ones, and those in which nothing runs."""
    glances = [part.glance for part in seen]
    usual = {column: usual_amplitude(glances, column) for column in (roles.reference, roles.driven)}
    points: list[_Seen] = []
    free: list[_Free] = []
    quiet: list[str] = []
    for part in seen:
        drives = is_running(part.glance, roles.reference, usual[roles.reference])
        follows = is_running(part.glance, roles.driven, usual[roles.driven])
        file = part.glance.file
        if follows and (not drives or part.hints.is_free):
            reason = "its name" if drives else "the reference channel is quiet"
            alone = part.driven_file or file  # by two recorders it is on the second
            free.append((FreeRunEntry(file=alone, role="driven"), reason))
        elif drives and not follows:
            entry = FreeRunEntry(file=file, role="reference")
            free.append((entry, "the driven channel is quiet"))
        elif drives and follows:
            points.append(part)
        else:
            quiet.append(f"{file}: neither channel has a line above its noise")
    return points, free, quiet


def _result(
    folder: Path,
    seen: list[_Seen],
    free: list[_Free],
    roles: Roles,
    notes: tuple[str, ...],
) -> DraftResult:
    axis, points = _points(seen, roles)
    order = _order(seen, roles)
    plan = SweepPlan(
        path=str(folder / SWEEP_NAME),
        folder=str(folder),
        order=order,
        reference=_setup(seen, roles.reference),
        driven=_setup(seen, roles.driven),
        level=axis,
        free_running=tuple(entry for entry, _ in free),
        points=points,
    )
    comments = _comments(seen, free, roles, plan, notes)
    toml = render_sweep_toml(plan, table=TABLE_NAME, comments=comments) + LIMIT_HINT
    return DraftResult(plan=plan, toml=toml, table=render_points_csv(points), notes=notes)


def _setup(seen: Sequence[_Seen], column: int) -> ChannelSetup:
    glance = seen[0].glance
    name, unit = glance.names[column], glance.units[column]
    is_own = name and glance.names.count(name) == 1 and not name.isdigit()
    number = 1 if seen[0].driven_file else column + 1
    return ChannelSetup(
        channel=name if is_own else number, unit=unit, quantity=guess_quantity(unit)
    )


def _order(seen: Sequence[_Seen], roles: Roles) -> tuple[int, int] | None:
    if roles.reference == roles.driven:
        return None
    glances = [part.glance for part in seen]
    reference, driven = (_median_hz(glances, column) for column in (roles.reference, roles.driven))
    return guess_order(reference, driven)


def _median_hz(glances: Sequence[Glance], column: int) -> float:
    hz = sorted(line.frequency_hz for glance in glances if (line := glance.lines[column]))
    return hz[len(hz) // 2]


def _points(seen: Sequence[_Seen], roles: Roles) -> tuple[LevelAxis, tuple[PointEntry, ...]]:
    axis, levels, level_from = _levels(seen, roles)
    drives = [_drive(part, roles) for part in seen]
    hz = [drive for drive, _ in drives]
    directions, direction_from = guess_directions(
        levels, hz, [part.hints for part in seen], [part.time_key for part in seen]
    )
    points = tuple(
        PointEntry(
            file=part.glance.file,
            driven_file=part.driven_file,
            drive_hz=drive,
            level=level,
            direction=direction,
            extras=(("guess", f"drive {source}; level {level_from}; direction {direction_from}"),),
        )
        for part, (drive, source), level, direction in zip(
            seen, drives, levels, directions, strict=True
        )
    )
    return axis, points


def _drive(part: _Seen, roles: Roles) -> tuple[float, str]:
    """Return the drive frequency in Hz, and what it rests on."""
    line = part.glance.lines[roles.reference]
    assert line is not None  # a point is a capture in which both run
    named_hz = part.hints.frequency_hz
    if named_hz and abs(named_hz / line.frequency_hz - 1.0) < NAME_REACH:
        return named_hz, "from the file name, measured the same"
    digits = max(0, 1 - math.floor(math.log10(0.1 * line.resolution_hz)))
    said = "" if named_hz is None else f", though the file name says {named_hz:g} Hz"
    return round(line.frequency_hz, digits), f"measured{said}"


def _levels(seen: Sequence[_Seen], roles: Roles) -> tuple[LevelAxis, list[float], str]:
    """Return the level axis, the level of each capture, and what they rest on."""
    named = [part.hints.level for part in seen]
    units = {level[1] for level in named if level is not None}
    if None not in named and len(units) == 1:
        unit = units.pop()
        numbers = [level[0] for level in named if level is not None]
        kind = level_kind(unit)
        if kind == "decibel" or min(numbers) > 0:
            return LevelAxis(unit=unit, kind=kind), numbers, "from the file name"
    lines = [part.glance.lines[roles.reference] for part in seen]
    amplitudes = [line.amplitude for line in lines if line is not None]
    unit = seen[0].glance.units[roles.reference]
    return LevelAxis(unit=unit), _gathered(amplitudes), "measured at the reference"


def _gathered(amplitudes: Sequence[float]) -> list[float]:
    """Return amplitudes brought together: close ones share the middle one, three digits."""
    groups: list[list[float]] = []
    for value in sorted(amplitudes):
        if groups and value <= groups[-1][-1] * (1.0 + LEVEL_REACH):
            groups[-1].append(value)
        else:
            groups.append([value])
    shared = {value: float(f"{group[len(group) // 2]:.3g}") for group in groups for value in group}
    return [shared[value] for value in amplitudes]


def _comments(
    seen: Sequence[_Seen],
    free: Sequence[_Free],
    roles: Roles,
    plan: SweepPlan,
    notes: Sequence[str],
) -> dict[str, str]:
    glance = seen[0].glance
    is_paired = bool(seen[0].driven_file)
    head = [
        "Drafted from the captures found here. Every line marked 'guess:' is a guess:",
        "confirm it or mend it, then take the mark away. Keys after '#' are not stated yet.",
        *(f"left out: {printable(note, NOTE_LETTERS)}" for note in notes),
    ]
    comments = {
        "file": "\n".join(head),
        "points.table": "guess: drive_hz, level and direction; its column 'guess' says from what",
        "reference.channel": f"guess: {roles.reason}",
        "driven.channel": f"guess: {roles.reason if is_paired else 'the other one'}",
        "pair.coupling": "guess: not to be seen here; if mutual, empty the column drive_hz too",
        "pair.order": "guess: from the ratio of the two frequencies",
        "second_recorder": "guess: pairs of files, by the endings of their names. Two clocks: "
        "state shared or clock_error_ppm,\nelse the sweep is refused",
        "level.kind": "guess: from the unit",
        "level.unit": "guess: from names or channel; state what the level is",
        "reference.quantity": "guess: from the unit",
        "driven.quantity": "guess: from the unit",
    }
    for number, (_, reason) in enumerate(free, start=1):
        comments[f"free_running.{number}.role"] = f"guess: {reason}"
    if glance.format.lower().startswith(SOUND_FORMATS):
        hint = "a sound file holds no volts: state volts_per_full_scale and sensitivity"
        comments["reference"] = comments["driven"] = hint
    return comments
