"""Simulated rigs as captures in memory, for tests that recover what is true of them."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from fit.analysis import MeasureSettings, measure_pair
from fit.records import FreeRun, Measurement, RegionPoint
from rig.captures import Capture, CaptureChannel
from rig.channels import Channel, ChannelSetup, wire_channel
from rig.synthetic.records import SimulatedCapture


def channels_of(simulated: SimulatedCapture) -> list[Channel]:
    """Return one wired channel for each row of a simulated capture."""
    table = simulated.samples

    def source(columns, block_frames, start_frame, stop_frame):
        for start in range(start_frame, stop_frame, block_frames):
            yield table[list(columns), start : min(start + block_frames, stop_frame)]

    capture = Capture(
        path=simulated.rig,
        format="simulated",
        rate_hz=simulated.rate_hz,
        frame_count=table.shape[1],
        channels=tuple(
            CaptureChannel(name=name, unit=unit)
            for name, unit in zip(simulated.channels, simulated.units, strict=True)
        ),
        source=source,
    )
    return [wire_channel(capture, ChannelSetup(channel=name)) for name in simulated.channels]


def pair_of(rows: np.ndarray, rate_hz: float) -> SimulatedCapture:
    """Return two rows of samples (reference, driven) as a simulated capture."""
    return SimulatedCapture(
        rig="pair",
        samples=rows,
        rate_hz=rate_hz,
        channels=("reference", "driven"),
        units=("V", "V"),
    )


def measured(
    simulated: SimulatedCapture,
    settings: MeasureSettings | None = None,
    free_runs: Sequence[FreeRun] = (),
) -> Measurement:
    """Return the measurement of the first (reference) and second (driven) channel."""
    channels = channels_of(simulated)
    return measure_pair(
        channels[0], channels[1], settings=settings or MeasureSettings(), free_runs=free_runs
    )


def region_point(key: str, level: float, measurement: Measurement) -> RegionPoint:
    """Return a measurement as a point of a locking region, its drive as measured."""
    drive = measurement.reference.frequency_hz
    return RegionPoint(
        key=key,
        drive_hz=drive.value,
        drive_u_hz=drive.u or 0.0,
        detuning_hz=None,
        level=level,
        amplitude=level,
        direction="up",
        state=measurement.decision.state,
        mean_rate_hz=measurement.mean_rate_hz.value,
        mean_rate_u_hz=measurement.mean_rate_hz.u,
        adler=measurement.adler,
        series=measurement.series,
    )
