"""One pair on two recorders: measured on the first one's clock, with what the tie leaves open.

What an uncertain clock error does: it adds n f_driven u to the uncertainty of every rate of
psi, and where it can move psi by more than the locked band over the record, a slow drift
cannot be told from a lock. What an unknown start does: the angle is not known at all, and is
said not to be.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

from fit.analysis import MeasureSettings, estimate_all, prepare_tracks
from fit.records import FreeRun, Measurement
from rig.angles import TURN_RAD
from rig.channels import Channel
from rig.phases.estimate import track_one
from rig.phases.regrid import regridded
from rig.phases.track import PhaseComponent, PhaseTrack
from rig.quantities import Quantity, undetermined
from rig.recorders import PPM, ClockTie

NO_ANGLE = "when the second recorder started is not known, so the angle is not"
UNKNOWN_ANGLE_U_RAD = math.pi / math.sqrt(3.0)  # of an angle about which nothing is known


def measure_two_recorders(
    reference: Channel,
    driven: Channel,
    *,
    tie: ClockTie,
    settings: MeasureSettings,
    free_runs: Sequence[FreeRun] = (),
) -> Measurement:
    """Return what two captures of one pair, taken by two recorders, say together.

    Parameters
    ----------
    reference : Channel of the first recorder's capture
    driven : Channel of the second one's, its capture already on the first one's clock
    tie : ClockTie
    settings : MeasureSettings
    free_runs : sequence of FreeRun
        Those of the driven oscillator are taken as recorded by the second recorder.

    Raises
    ------
    PhaseError
        If a channel carries no usable phase, or the two share no time.

    Notes
    -----
    Each phase is found by itself, without knowledge of the other's beat, and the driven one
    is brought onto the grid of the reference. Faults of the signals that need both channels
    in one capture (a leak of the partner) are not looked for.
    """
    first = track_one(reference, settings=settings.phases.reference)
    own = track_one(driven, settings=settings.phases.driven)
    second = _with_clock(regridded(own, first, shift_s=tie.start_shift_s or 0.0), tie, first)
    runs = [_on_first_clock(run, tie) for run in free_runs]
    prepared = prepare_tracks(first, second, reference, settings=settings, free_runs=runs)
    measured = estimate_all([prepared], settings=settings)[0]
    return _widened(measured, tie, second)


def _with_clock(track: PhaseTrack, tie: ClockTie, first: PhaseTrack) -> PhaseTrack:
    """Return the driven track with what the tie leaves of its phase uncertain."""
    hz = abs(track.frequency_hz.value or 0.0)
    if tie.start_shift_s is None:
        part = PhaseComponent(
            name="start of the second recorder",
            correction_rad=0.0,
            u_rad=UNKNOWN_ANGLE_U_RAD,
            distribution="rectangular",
        )
    else:
        # The mean angle is that of the middle of the record.
        middle_s = 0.5 * first.phase_rad.size / first.rate_hz + abs(tie.start_shift_s)
        part = PhaseComponent(
            name="clock of the second recorder",
            correction_rad=0.0,
            u_rad=min(TURN_RAD * hz * tie.error_u_rel * middle_s, UNKNOWN_ANGLE_U_RAD),
        )
    return replace(
        track,
        frequency_hz=_wider(track.frequency_hz, hz * tie.error_u_rel),
        systematic=(*track.systematic, part),
        notes=(*track.notes, *tie.notes),
    )


def _on_first_clock(run: FreeRun, tie: ClockTie) -> FreeRun:
    """Return a free-running result of the second recorder on the first one's clock."""
    value = run.frequency_hz.value
    if run.role == "reference" or value is None:
        return run
    scaled = replace(run.frequency_hz, value=value * (1.0 + tie.error_rel))
    return replace(run, frequency_hz=_wider(scaled, value * tie.error_u_rel))


def _wider(quantity: Quantity, u: float) -> Quantity:
    """Return a quantity with an independent uncertainty added in quadrature."""
    if quantity.value is None or u == 0.0:
        return quantity
    wide = replace(quantity, u=math.hypot(quantity.u or 0.0, u))
    if wide.low is None or wide.high is None:
        return wide
    # Both ends move out as a normal law of the added part would move them.
    below, above = quantity.value - wide.low, wide.high - quantity.value
    return replace(
        wide,
        low=quantity.value - math.hypot(below, 1.96 * u),
        high=quantity.value + math.hypot(above, 1.96 * u),
    )


def _widened(measured: Measurement, tie: ClockTie, driven: PhaseTrack) -> Measurement:
    """Return the measurement with the clock's share in its rates, angle and state."""
    u_hz = measured.order.n * abs(driven.frequency_hz.value or 0.0) * tie.error_u_rel
    adler = replace(
        measured.adler,
        detuning_hz=_wider(measured.adler.detuning_hz, u_hz),
        detuning_mean_hz=_wider(measured.adler.detuning_mean_hz, u_hz),
    )
    if tie.start_shift_s is None:
        adler = replace(adler, offset_rad=undetermined("rad", NO_ANGLE))
    notes: tuple[str, ...] = (
        f"second recorder on the first one's clock, corrected by {tie.error_rel / PPM:+.4g} ppm; "
        f"its uncertainty is {u_hz:.2g} Hz of every detuning and rate",
    )
    if tie.start_shift_s is None:
        notes += (f"{NO_ANGLE}: neither in-phase nor anti-phase can be told",)
    widened = replace(
        measured,
        adler=adler,
        mean_rate_hz=_wider(measured.mean_rate_hz, u_hz),
        notes=measured.notes + notes,
    )
    return _doubted(widened, u_hz)


def _doubted(measured: Measurement, u_hz: float) -> Measurement:
    """Return the state as undecided where the clock could make a drift of a lock, or undo one.

    A rate within two of the clock's uncertainties counts, if these move psi over the record
    by more than a quarter turn: half of what a lock may move.
    """
    turns = 2.0 * u_hz * measured.duration_s
    rate_hz = measured.mean_rate_hz.value
    if turns <= 0.25 or rate_hz is None or abs(rate_hz) > 2.0 * u_hz:
        return measured
    reason = (
        f"the clock error is uncertain by {u_hz:.2g} Hz of psi ({turns:.2g} turns in "
        f"{measured.duration_s:.4g} s at k = 2): lock and slow drift look the same; tie the "
        "recorders by a shared channel"
    )
    return replace(measured, decision=replace(measured.decision, state="undecided", reason=reason))
