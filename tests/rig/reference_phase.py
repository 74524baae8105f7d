"""Slow, obvious 64-bit versions of the phase estimators, and captures held in memory."""

from __future__ import annotations

import math

import numpy as np

from rig.captures import Capture, CaptureChannel
from rig.channels import Channel, ChannelSetup, wire_channel
from rig.phases.demodulate import SPLIT, TURN_STEPS, DemodulationPlan, stage_one_taps
from rig.phases.taps import low_pass_taps


def memory_capture(samples: np.ndarray, rate_hz: float) -> Capture:
    """Return a capture that serves rows of an array as its channels."""
    table = np.atleast_2d(samples)

    def source(columns, block_frames, start_frame, stop_frame):
        for start in range(start_frame, stop_frame, block_frames):
            yield table[list(columns), start : min(start + block_frames, stop_frame)]

    return Capture(
        path="memory",
        format="memory",
        rate_hz=rate_hz,
        frame_count=table.shape[1],
        channels=tuple(CaptureChannel(name=f"ch{i + 1}") for i in range(len(table))),
        source=source,
    )


def memory_channels(samples: np.ndarray, rate_hz: float, **setup) -> list[Channel]:
    """Return one wired channel a row."""
    capture = memory_capture(samples, rate_hz)
    return [
        wire_channel(capture, ChannelSetup(channel=i + 1, **setup))
        for i in range(len(capture.channels))
    ]


def base_band(samples: np.ndarray, plan: DemodulationPlan) -> np.ndarray:
    """Return the base band of a whole record by two plain convolutions in 64 bit."""
    middle = SPLIT // 2 * plan.rows
    taps = stage_one_taps(plan)
    padded = np.concatenate(
        [np.zeros(middle), samples.astype(float), np.zeros(2 * SPLIT * plan.rows)]
    )
    count = -(-samples.size // plan.rows) + SPLIT
    inner = np.array(
        [padded[j * plan.rows : j * plan.rows + taps.size] @ taps for j in range(count)]
    )
    turns = plan.carrier_steps * np.arange(count) / TURN_STEPS
    inner = inner * np.exp(-2j * math.pi * turns)
    sharp = low_pass_taps(
        plan.half_hz * (1.0 + plan.transition / 2.0) / plan.inner_rate_hz,
        plan.stage_half,
        plan.stop_db,
    )
    return 2.0 * np.convolve(inner, sharp)[plan.stage_half :][:count:2]


def schmitt_markers(samples: np.ndarray, level: float, half_zone: float):
    """Return marker frames and directions by a loop over the samples, one by one."""
    kind = samples.dtype.type
    level, high, low = kind(level), kind(level + half_zone), kind(level - half_zone)
    side, found = 0, []
    oldest, newest = {}, {}
    for k in range(samples.size):
        if k and (samples[k] > level) != (samples[k - 1] > level):
            before, after = float(samples[k - 1]), float(samples[k])
            at = (k - 1) + (before - float(level)) / (before - after)
            direction = 1 if samples[k] > level else -1
            newest[direction] = at
            oldest.setdefault(direction, at)
        now = 1 if samples[k] > high else -1 if samples[k] < low else 0
        if now and side and now != side:
            found.append(((oldest[now] + newest[now]) / 2.0, now > 0))
        if now:
            oldest, newest = {}, {}
        side = now or side
    frames = np.array([frame for frame, _ in found])
    return frames, np.array([up for _, up in found], dtype=bool)


def true_errors_rad(track, phase_rad: np.ndarray) -> np.ndarray:
    """Return track minus truth at its valid samples, whole turns taken off once."""
    error = (track.phase_rad - phase_rad)[track.valid]
    return error - 2.0 * math.pi * np.round(np.median(error) / (2.0 * math.pi))
