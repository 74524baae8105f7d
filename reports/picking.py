"""Pickers: from a run and a limit to the values that the limit applies to.

Each gives candidates with the place where they were found; ``reports.limited`` says which
quantity uses which. A capture that could not be measured stays a candidate without a value,
so that a limit on it cannot pass.
"""

from __future__ import annotations

import math
from collections.abc import Callable

from fit.records import Episode, FreeRun, Measurement, RegionLevel, RoleSummary
from reports.budget import rectangular_u
from reports.numbers import one_line, plain_number
from reports.records import Limit
from reports.selection import (
    Candidate,
    Picked,
    RunParts,
    chosen_levels,
    chosen_points,
    level_name,
    point_name,
    same_level,
)
from rig.quantities import Quantity, undetermined

Picker = Callable[[RunParts, Limit], Picked]

_STABILITY_REACH = 1.5  # averaging times within this factor count as the one asked for


# ---- quantities of the region ---------------------------------------------------------------


def of_levels(get: Callable[[list[RegionLevel]], Quantity]) -> Picker:
    """Return a picker of one value per level and direction, from its intervals."""

    def pick(parts: RunParts, limit: Limit) -> Picked:
        found, holes = [], 0
        for entries in chosen_levels(parts, limit):
            holes += len(entries) - 1
            where = level_name(entries[0].level, entries[0].direction, parts.plan)
            found.append(Candidate(where=where, value=get(entries)))
        note = f"the region has {holes} hole{'s' * (holes > 1)}" if holes else ""
        return Picked(candidates=tuple(found), note=note or _no_region(parts, found))

    return pick


def _no_region(parts: RunParts, found: list[Candidate]) -> str:
    if found:
        return ""
    if parts.region is None:
        return "the sweep gave no locking region"
    return "no level of the region matches"


def widest(entries: list[RegionLevel]) -> RegionLevel:
    """Return the widest interval of a level."""
    return max(entries, key=lambda entry: entry.width_hz.value or 0.0)


def of_run(get: Callable[[RunParts], Quantity]) -> Picker:
    """Return a picker of the one value of a whole sweep."""

    def pick(parts: RunParts, limit: Limit) -> Picked:
        if parts.region is None:
            return Picked(note="the sweep gave no locking region")
        return Picked(candidates=(Candidate(where="whole sweep", value=get(parts)),))

    return pick


def centre(parts: RunParts) -> Quantity:
    """Return the drive frequency of zero detuning."""
    assert parts.region is not None
    return parts.region.centre_hz


def coupling_per_level(parts: RunParts) -> Quantity:
    """Return the coupling per unit of level amplitude."""
    assert parts.region is not None
    return parts.region.coupling_per_level


def level_power(parts: RunParts) -> Quantity:
    """Return the power of the level amplitude in the coupling."""
    assert parts.region is not None
    return parts.region.level_power


def centre_offset(parts: RunParts) -> Quantity:
    """Return the centre less the drive frequency that the driven oscillator alone asks for."""
    middle = centre(parts)
    alone = [run.frequency_hz for run in parts.free_runs if run.role == "driven"]
    known = [one for one in alone if one.value is not None]
    if middle.value is None:
        return middle
    if not known:
        return undetermined("Hz", "no free-running capture of the driven oscillator")
    ratio = parts.order.n / parts.order.m
    free_hz = ratio * math.fsum(one.value or 0.0 for one in known) / len(known)
    free_u_hz = ratio * math.hypot(*(one.u or 0.0 for one in known)) / len(known)
    return Quantity(
        value=middle.value - free_hz, u=math.hypot(middle.u or 0.0, free_u_hz), unit="Hz"
    )


def hysteresis(*edges: str) -> Picker:
    """Return a picker of the hysteresis of the named edges."""

    def pick(parts: RunParts, limit: Limit) -> Picked:
        entries = parts.region.hysteresis if parts.region is not None else ()
        found = [
            Candidate(
                where=f"{entry.edge} edge, {level_name(entry.level, 'none', parts.plan)}",
                value=entry.value_hz,
            )
            for entry in entries
            if entry.edge in edges and (limit.level is None or same_level(entry.level, limit.level))
        ]
        note = "" if found else "no level was swept both up and down"
        return Picked(candidates=tuple(found), note=note)

    return pick


# ---- quantities of single captures -----------------------------------------------------------


def of_points(get: Callable[[Measurement], Quantity]) -> Picker:
    """Pick a value from every chosen capture."""

    def pick(parts: RunParts, limit: Limit) -> Picked:
        return _gather(parts, limit, lambda one: [(get(one), None)])

    return pick


def of_locked(get: Callable[[Measurement], Quantity]) -> Picker:
    """Pick a value from every chosen capture that holds a locked episode."""

    def pick(parts: RunParts, limit: Limit) -> Picked:
        return _gather(parts, limit, lambda one: [(get(one), None)] if one.episodes else [])

    return pick


def _gather(
    parts: RunParts,
    limit: Limit,
    values: Callable[[Measurement], list[tuple[Quantity, str | None]]],
) -> Picked:
    chosen = chosen_points(parts, limit)
    found: list[Candidate] = []
    skipped = 0
    for point in chosen:
        where = point_name(point, parts.plan)
        if point.measurement is None:
            told = one_line(point.message) or point.status
            value = undetermined("", f"the capture could not be measured: {told}")
            found.append(Candidate(where=where, value=value, point=point))
            continue
        here = values(point.measurement)
        skipped += not here
        found += [
            Candidate(where=where, value=value, words=words, point=point) for value, words in here
        ]
    return Picked(candidates=tuple(found), note=_points_note(len(chosen), skipped))


def _points_note(chosen: int, skipped: int) -> str:
    if not chosen:
        return "no point of the sweep matches"
    if skipped == chosen:
        return f"none of {chosen} points holds a locked episode"
    return f"{skipped} of {chosen} points hold no locked episode" if skipped else ""


def episode_offsets(parts: RunParts, limit: Limit) -> Picked:
    """Pick the mean phase difference of every locked episode."""
    return _gather(parts, limit, lambda one: [(_offset(episode), None) for episode in one.episodes])


def _offset(episode: Episode) -> Quantity:
    return Quantity(value=episode.offset_rad, u=episode.offset_u_rad, unit="rad")


def pull_in_times(parts: RunParts, limit: Limit) -> Picked:
    """Pick the pull-in times; a record that starts locked shows none and is left out."""
    picked = _gather(parts, limit, lambda one: [(one.pull_in_s, None)] if one.episodes else [])
    seen = [
        one
        for one in picked.candidates
        if one.value.value is not None or one.point is None or one.point.measurement is None
    ]
    silent = len(picked.candidates) - len(seen)
    if not silent or not any(one.value.value is not None for one in seen):
        return picked
    told = f"{silent} of {len(picked.candidates)} locked points show no pull-in"
    return Picked(candidates=tuple(seen), note="; ".join(filter(None, (picked.note, told))))


def hold_time(one: Measurement) -> Quantity:
    """Return the longest locked stretch; a record without one held for 0 s."""
    if not one.episodes and one.decision.state == "undecided":
        return undetermined("s", one.decision.reason)
    longest = max((part.stop_s - part.start_s for part in one.episodes), default=0.0)
    return Quantity(value=longest, u=_stretch_u_s(one), unit="s")


def locked_fraction(one: Measurement) -> Quantity:
    """Return the locked share of the valid time."""
    if one.decision.state == "undecided":
        return undetermined("1", one.decision.reason)
    u_s = _stretch_u_s(one) * math.sqrt(len(one.episodes))
    return Quantity(value=one.decision.locked_fraction, u=u_s / one.duration_s, unit="1")


def _stretch_u_s(one: Measurement) -> float:
    """Return the resolution of a stretch: each end lies within one step of psi either way."""
    return rectangular_u(one.series.step_s) * math.sqrt(2.0)


def amplitude_ratio(one: Measurement) -> Quantity:
    """Return the amplitude of the driven over that of the reference."""
    top, base = one.driven, one.reference
    if top.unit != base.unit:
        return undetermined("1", f"the channels differ in unit: '{top.unit}' and '{base.unit}'")
    over, under = top.amplitude, base.amplitude
    if over.value is None or under.value is None:
        silent = over if over.value is None else under
        return undetermined("1", silent.reason or "an amplitude is not known")
    if under.value == 0.0:
        return undetermined("1", "the reference has no amplitude")
    ratio = over.value / under.value
    if over.u is None or under.u is None or over.value == 0.0:
        return Quantity(value=ratio, u=None, unit="1")
    u = ratio * math.hypot(over.u / over.value, under.u / under.value)
    return Quantity(value=ratio, u=abs(u), unit="1")


# ---- words ---------------------------------------------------------------------------------


def orders(parts: RunParts, limit: Limit) -> Picked:
    """Pick the locking order of every capture with its state."""
    return _gather(
        parts,
        limit,
        lambda one: [(_no_number(one), f"{one.order.n}:{one.order.m} {one.decision.state}")],
    )


def states(parts: RunParts, limit: Limit) -> Picked:
    """Pick the state of every capture."""
    return _gather(parts, limit, lambda one: [(_no_number(one), one.decision.state)])


def styles(parts: RunParts, limit: Limit) -> Picked:
    """Pick the style of every locked episode with its phase offset."""
    return _gather(
        parts,
        limit,
        lambda one: [(_offset(episode), episode.style) for episode in one.episodes],
    )


def _no_number(one: Measurement) -> Quantity:
    return undetermined("1", one.decision.reason or one.decision.state)


# ---- one oscillator alone --------------------------------------------------------------------


def of_free_runs(role: str, get: Callable[[FreeRun, Limit], Quantity]) -> Picker:
    """Return a picker of one value per free-running capture of a role."""

    def pick(parts: RunParts, limit: Limit) -> Picked:
        found = [
            Candidate(where=run.file or f"{role} alone", value=get(run, limit))
            for run in parts.free_runs
            if run.role == role and (limit.file is None or run.file == limit.file)
        ]
        note = "" if found else f"no free-running capture of the {role} oscillator matches"
        return Picked(candidates=tuple(found), note=note)

    return pick


def stability(run: FreeRun, limit: Limit) -> Quantity:
    """Return the Allan deviation at the averaging time nearest to the one asked for."""
    wanted_s = limit.averaging_s or 1.0
    if not run.allan:
        return undetermined("1", "no Allan deviation was computed")
    tau_s, deviation, low, high = min(run.allan, key=lambda row: abs(math.log(row[0] / wanted_s)))
    if not 1 / _STABILITY_REACH <= tau_s / wanted_s <= _STABILITY_REACH:
        return undetermined("1", f"the nearest averaging time is {plain_number(tau_s)} s")
    return Quantity(value=deviation, u=None, unit="1", low=low, high=high, level=0.95)


def of_role(name: str, get: Callable[[RoleSummary], Quantity]) -> Callable[[Measurement], Quantity]:
    """Return a getter of what one role's channel says."""
    return lambda one: get(one.driven if name == "driven" else one.reference)
