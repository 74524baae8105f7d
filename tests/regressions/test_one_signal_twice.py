"""One signal in both channels: psi is exactly zero, which once ended the program."""

from __future__ import annotations

import numpy as np

from fit.analysis import MeasureSettings, measure_pair
from rig.captures import Capture, CaptureChannel
from rig.channels import ChannelSetup, wire_channel


def test_a_capture_of_one_signal_in_both_channels_is_measured_and_doubted():
    """A loose cable that feeds both inputs must give a sentence, not a traceback."""
    time_s = np.arange(40_000) / 8000.0
    wave = np.round(0.5 * np.cos(2.0 * np.pi * 300.0 * time_s) * 2**23) / 2**23
    table = np.stack([wave, wave])

    def source(columns, block_frames, start_frame, stop_frame):
        for start in range(start_frame, stop_frame, block_frames):
            yield table[list(columns), start : min(start + block_frames, stop_frame)]

    capture = Capture(
        path="loop",
        format="made",
        rate_hz=8000.0,
        frame_count=table.shape[1],
        channels=(CaptureChannel(name="a"), CaptureChannel(name="b")),
        source=source,
    )
    channels = [wire_channel(capture, ChannelSetup(channel=name)) for name in ("a", "b")]
    found = measure_pair(*channels, settings=MeasureSettings())
    assert found.adler.coupling_hz.value is None
    assert found.adler.coupling_hz.reason
    assert found.jitter_rad.value == 0.0
    assert any("one signal in both channels" in note for note in found.notes)
