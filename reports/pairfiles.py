"""One pair measured from two captures that two recorders took."""

from __future__ import annotations

from collections.abc import Sequence

from fit.analysis import MeasureSettings
from fit.records import FreeRun, Measurement
from rig.captures import Capture
from rig.channels import Channel, ChannelSetup, wire_channel
from rig.recorders import ClockTie, on_first_clock, shared_tie, stated_tie
from rig.sweepfile import SecondRecorder


def measure_pair_of_files(
    captures: tuple[Capture, Capture],
    setups: tuple[ChannelSetup, ChannelSetup],
    second: SecondRecorder,
    *,
    settings: MeasureSettings,
    free_runs: Sequence[FreeRun],
) -> Measurement:
    """Return the measurement of a pair whose driven one was taken by another recorder.

    Parameters
    ----------
    captures : (that of the reference, that of the driven one)
    setups : (of the reference, of the driven one), each in its own capture
    second : SecondRecorder, what ties the two clocks
    settings : MeasureSettings
    free_runs : sequence of FreeRun

    Raises
    ------
    LockspanError
        If nothing ties the clocks, or a channel or its phase cannot be used.
    """
    from fit.recorders import measure_two_recorders

    tie = _tie(captures, second, settings)
    driven: Channel = wire_channel(on_first_clock(captures[1], tie), setups[1])
    return measure_two_recorders(
        wire_channel(captures[0], setups[0]),
        driven,
        tie=tie,
        settings=settings,
        free_runs=free_runs,
    )


def _tie(
    captures: tuple[Capture, Capture], second: SecondRecorder, settings: MeasureSettings
) -> ClockTie:
    if second.shared is None:
        return stated_tie(
            *captures,
            error_ppm=second.clock_error_ppm,
            error_u_ppm=second.clock_error_u_ppm,
            start_shift_s=second.start_shift_s,
        )
    setup = ChannelSetup(channel=second.shared)
    return shared_tie(
        wire_channel(captures[0], setup),
        wire_channel(captures[1], setup),
        settings=settings.phases.reference,
        start_shift_s=second.start_shift_s,
    )
