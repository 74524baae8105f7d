"""The table of quantities that a limit may name: one row each, its picker in ``picking``.

Names end with the unit that the value is kept in. Quantities of the locking region are picked
by level and direction, those of single captures also by drive frequency or file; a limit on
several of them holds for the worst. Phase offset, jitter, pull-in and style concern captures
with a locked episode; captures without one are left out, which the reason says.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from reports import picking
from reports.budget import Kind
from reports.picking import Picker

Scope = Literal["level", "hysteresis", "run", "point", "capture"]

STYLES = ("in-phase", "anti-phase", "offset")
STATES = ("locked", "intermittent", "drifting")

# Keys that pick what a limit applies to, by what kind of thing the quantity belongs to.
SELECTORS: dict[Scope, tuple[str, ...]] = {
    "level": ("level", "direction"),
    "hysteresis": ("level",),
    "run": (),
    "point": ("level", "direction", "drive_hz", "file"),
    "capture": ("file",),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitedQuantity:
    """A quantity that limits may name.

    ``unit`` is the unit it is kept in, "" for the unit of the sensor or of the level axis;
    ``kind`` decides its budget; ``words`` are the words a limit may want, empty for a number.
    """

    unit: str
    meaning: str
    kind: Kind
    scope: Scope
    pick: Picker
    circular: bool = False
    words: tuple[str, ...] = ()


def _free_rows(role: str) -> dict[str, LimitedQuantity]:
    """Return the rows of one oscillator alone."""
    return {
        f"free_frequency_{role}_hz": LimitedQuantity(
            unit="Hz",
            meaning=f"frequency of the {role} oscillator alone",
            kind="free",
            scope="capture",
            pick=picking.of_free_runs(role, lambda run, limit: run.frequency_hz),
        ),
        f"free_drift_{role}_hz_s": LimitedQuantity(
            unit="Hz/s",
            meaning=f"drift of the {role} oscillator alone within a capture",
            kind="plain",
            scope="capture",
            pick=picking.of_free_runs(role, lambda run, limit: run.drift_hz_s),
        ),
        f"free_noise_{role}_rad2_s": LimitedQuantity(
            unit="rad2/s",
            meaning=f"phase diffusion D of the {role} oscillator alone",
            kind="plain",
            scope="capture",
            pick=picking.of_free_runs(role, lambda run, limit: run.noise_rad2_s),
        ),
        f"free_stability_{role}": LimitedQuantity(
            unit="1",
            meaning=f"Allan deviation of the {role} oscillator alone at averaging_s",
            kind="plain",
            scope="capture",
            pick=picking.of_free_runs(role, picking.stability),
        ),
    }


def _role_rows(role: str) -> dict[str, LimitedQuantity]:
    """Return the rows of one channel of the coupled pair."""
    return {
        f"frequency_{role}_hz": LimitedQuantity(
            unit="Hz",
            meaning=f"mean frequency of the {role} oscillator in the pair",
            kind="frequency",
            scope="point",
            pick=picking.of_points(picking.of_role(role, lambda summary: summary.frequency_hz)),
        ),
        f"amplitude_{role}": LimitedQuantity(
            unit="",
            meaning=f"amplitude of the {role} oscillator, in the unit of its channel",
            kind="amplitude",
            scope="point",
            pick=picking.of_points(picking.of_role(role, lambda summary: summary.amplitude)),
        ),
    }


LIMITED: dict[str, LimitedQuantity] = {
    "locking_width_hz": LimitedQuantity(
        unit="Hz",
        meaning="width of the locking range; its widest interval where it has holes",
        kind="width",
        scope="level",
        pick=picking.of_levels(lambda entries: picking.widest(entries).width_hz),
    ),
    "lower_edge_hz": LimitedQuantity(
        unit="Hz",
        meaning="lowest drive frequency of the locking range",
        kind="edge",
        scope="level",
        pick=picking.of_levels(lambda entries: entries[0].lower_hz),
    ),
    "upper_edge_hz": LimitedQuantity(
        unit="Hz",
        meaning="highest drive frequency of the locking range",
        kind="edge",
        scope="level",
        pick=picking.of_levels(lambda entries: entries[-1].upper_hz),
    ),
    "coupling_hz": LimitedQuantity(
        unit="Hz",
        meaning="coupling of the phase equation at a level",
        kind="width",
        scope="level",
        pick=picking.of_levels(lambda entries: picking.widest(entries).coupling_hz),
    ),
    "phase_offset_centre_rad": LimitedQuantity(
        unit="rad",
        meaning="phase offset at the centre of the range (ψ₀ of the phase equation)",
        kind="phase",
        scope="level",
        pick=picking.of_levels(lambda entries: picking.widest(entries).offset_rad),
        circular=True,
    ),
    "centre_hz": LimitedQuantity(
        unit="Hz",
        meaning="drive frequency of zero detuning",
        kind="edge",
        scope="run",
        pick=picking.of_run(picking.centre),
    ),
    "centre_offset_hz": LimitedQuantity(
        unit="Hz",
        meaning="centre of the range less n/m times the free frequency of the driven",
        kind="edge",
        scope="run",
        pick=picking.of_run(picking.centre_offset),
    ),
    "coupling_per_level": LimitedQuantity(
        unit="",
        meaning="coupling per unit of level amplitude",
        kind="law",
        scope="run",
        pick=picking.of_run(picking.coupling_per_level),
    ),
    "level_power": LimitedQuantity(
        unit="1",
        meaning="power of the level amplitude in the coupling",
        kind="law",
        scope="run",
        pick=picking.of_run(picking.level_power),
    ),
    "hysteresis_hz": LimitedQuantity(
        unit="Hz",
        meaning="either edge, drive up minus drive down",
        kind="width",
        scope="hysteresis",
        pick=picking.hysteresis("lower", "upper"),
    ),
    "hysteresis_lower_hz": LimitedQuantity(
        unit="Hz",
        meaning="lower edge, drive up minus drive down",
        kind="width",
        scope="hysteresis",
        pick=picking.hysteresis("lower"),
    ),
    "hysteresis_upper_hz": LimitedQuantity(
        unit="Hz",
        meaning="upper edge, drive up minus drive down",
        kind="width",
        scope="hysteresis",
        pick=picking.hysteresis("upper"),
    ),
    "phase_offset_rad": LimitedQuantity(
        unit="rad",
        meaning="mean phase difference of every locked episode across the range",
        kind="phase",
        scope="point",
        pick=picking.episode_offsets,
        circular=True,
    ),
    "phase_jitter_rad": LimitedQuantity(
        unit="rad",
        meaning="standard deviation of the phase difference while locked",
        kind="plain",
        scope="point",
        pick=picking.of_locked(lambda one: one.jitter_rad),
    ),
    "pull_in_s": LimitedQuantity(
        unit="s",
        meaning="time from the start of a capture until lock",
        kind="time",
        scope="point",
        pick=picking.pull_in_times,
    ),
    "slip_rate_hz": LimitedQuantity(
        unit="Hz",
        meaning="phase slips a second, of either sign",
        kind="rate",
        scope="point",
        pick=picking.of_points(lambda one: one.slip_rate_hz),
    ),
    "hold_time_s": LimitedQuantity(
        unit="s",
        meaning="longest locked episode of a capture",
        kind="time",
        scope="point",
        pick=picking.of_points(picking.hold_time),
    ),
    "locked_fraction": LimitedQuantity(
        unit="1",
        meaning="share of the valid time that is locked",
        kind="plain",
        scope="point",
        pick=picking.of_points(picking.locked_fraction),
    ),
    "mean_rate_hz": LimitedQuantity(
        unit="Hz",
        meaning="mean rate of the phase difference in turns a second",
        kind="rate",
        scope="point",
        pick=picking.of_points(lambda one: one.mean_rate_hz),
    ),
    "detuning_hz": LimitedQuantity(
        unit="Hz",
        meaning="detuning of a capture from its own estimate",
        kind="rate",
        scope="point",
        pick=picking.of_points(lambda one: one.adler.detuning_hz),
    ),
    "noise_rad2_s": LimitedQuantity(
        unit="rad2/s",
        meaning="phase noise D of a capture from its own estimate",
        kind="plain",
        scope="point",
        pick=picking.of_points(lambda one: one.adler.noise_rad2_s),
    ),
    "amplitude_ratio": LimitedQuantity(
        unit="1",
        meaning="amplitude of the driven over that of the reference",
        kind="amplitude",
        scope="point",
        pick=picking.of_points(picking.amplitude_ratio),
    ),
    **_role_rows("driven"),
    **_role_rows("reference"),
    **_free_rows("driven"),
    **_free_rows("reference"),
    "order": LimitedQuantity(
        unit="",
        meaning='locking order n:m that is reached and held, wanted = "n:m"',
        kind="plain",
        scope="point",
        pick=picking.orders,
        words=("n:m",),
    ),
    "lock_style": LimitedQuantity(
        unit="",
        meaning="in-phase, anti-phase or offset, of every locked episode",
        kind="phase",
        scope="point",
        pick=picking.styles,
        words=STYLES,
    ),
    "state": LimitedQuantity(
        unit="",
        meaning="locked, intermittent or drifting",
        kind="plain",
        scope="point",
        pick=picking.states,
        words=STATES,
    ),
}
