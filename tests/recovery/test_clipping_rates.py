"""Clipping: found where a wave was cut off, not alleged where the wave is flat by itself."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence

import numpy as np
import pytest

from rig.captures import Capture, CaptureChannel
from rig.health import examine_signals

FRAMES = 20_000
DRAWS = 12
CODE = 1.0 / 32768.0

Rng = np.random.Generator


def found_in(samples: np.ndarray, full_scale: float | None = None) -> set[str]:
    """Return what is said of flat tops: "clipped fault", "flat tops warning" or nothing."""

    def source(
        columns: Sequence[int], block_frames: int, start: int, stop: int
    ) -> Iterator[np.ndarray]:
        for first in range(start, stop, block_frames):
            yield samples[None, first : min(first + block_frames, stop)]

    capture = Capture(
        path="made.wav",
        format="made",
        rate_hz=1000.0,
        frame_count=samples.size,
        channels=(CaptureChannel(name="x", full_scale=full_scale, unit="V"),),
        source=source,
    )
    faults = examine_signals(capture)[0].faults
    return {f"{one.name} {one.severity}" for one in faults if one.name in ("clipped", "flat tops")}


def turns(rng: Rng) -> np.ndarray:
    """Return the turns of an oscillation of 12 to 500 samples a cycle, wandering in half."""
    wander = np.cumsum(rng.standard_normal(FRAMES)) * rng.choice([0.0, 2e-4])
    return np.arange(FRAMES) / 10 ** rng.uniform(1.08, 2.7) + wander + rng.random()


def sine(rng: Rng) -> np.ndarray:
    """Return a sine of amplitude 1."""
    return np.sin(2 * np.pi * turns(rng))


def with_harmonics(rng: Rng) -> np.ndarray:
    """Return a wave with two harmonics."""
    angle = 2 * np.pi * turns(rng)
    second = 0.4 * rng.random() * np.sin(2 * angle + 6 * rng.random())
    return np.sin(angle) + second + 0.2 * rng.random() * np.sin(3 * angle)


def half_wave(rng: Rng) -> np.ndarray:
    """Return a half-wave rectified sine."""
    return np.maximum(0.0, sine(rng))


def square(rng: Rng) -> np.ndarray:
    """Return a logic signal."""
    return np.where(sine(rng) > 0, 1.0, 0.0)


def tacho(rng: Rng) -> np.ndarray:
    """Return pulses of 5 to 50 % duty."""
    return np.where(turns(rng) % 1.0 < rng.uniform(0.05, 0.5), 1.0, 0.0)


def trapezoid(rng: Rng) -> np.ndarray:
    """Return a trapezoid whose flanks take a tenth to two fifths of half a cycle."""
    return np.clip((4 * np.abs(turns(rng) % 1.0 - 0.5) - 1) / rng.uniform(0.1, 0.4), -1, 1)


def noise(rng: Rng) -> np.ndarray:
    """Return white noise."""
    return 0.2 * rng.standard_normal(FRAMES)


def as_int16(samples: np.ndarray, rng: Rng) -> np.ndarray:
    """Return samples as a 16-bit recorder gives them, with little noise or none."""
    noisy = 0.5 * samples + rng.choice([0.0, 5e-5, 5e-4]) * rng.standard_normal(samples.size)
    return np.round(noisy / CODE) * CODE


def as_few_codes(samples: np.ndarray, rng: Rng) -> np.ndarray:
    """Return samples that move a recorder by a few codes."""
    noisy = samples * rng.uniform(1.2, 12) + rng.choice([0.0, 0.3]) * rng.standard_normal(FRAMES)
    return np.round(noisy) * CODE


WAVES: tuple[Callable[[Rng], np.ndarray], ...] = (
    sine,
    with_harmonics,
    half_wave,
    square,
    tacho,
    trapezoid,
    noise,
)


@pytest.mark.parametrize("wave", WAVES)
def test_a_wave_that_was_not_cut_off_is_not_called_clipped(
    wave: Callable[[Rng], np.ndarray],
) -> None:
    """A fault on every tacho teaches people to ignore faults. 36 draws a wave, none allowed."""
    rng = np.random.default_rng(17)
    for _ in range(DRAWS):
        samples = wave(rng)
        assert "clipped fault" not in found_in(samples)
        assert "clipped fault" not in found_in(as_int16(samples, rng), 1.0)
        assert "clipped fault" not in found_in(as_few_codes(samples, rng), 1.0)


@pytest.mark.parametrize("wave", [sine, with_harmonics, square, tacho, noise])
def test_waves_without_a_doubt_get_no_note_either(wave: Callable[[Rng], np.ndarray]) -> None:
    """Logic levels are meant, and a round top is no flat one."""
    rng = np.random.default_rng(18)
    for _ in range(DRAWS):
        samples = wave(rng)
        assert not found_in(samples)
        assert not found_in(as_int16(samples, rng), 1.0)


@pytest.mark.parametrize("form", ["float", "noisy float", "int16"])
@pytest.mark.parametrize("kept", [0.99, 0.95, 0.9, 0.7])
def test_a_sine_cut_off_at_a_rail_below_full_scale_is_found(kept: float, form: str) -> None:
    """The preamplifier clips before the recorder does: nothing reaches the file's full scale.

    Below 28 samples a cycle a sine cut at 0.7 is only said to have flat tops.
    """
    rng = np.random.default_rng(19)
    found = []
    for _ in range(DRAWS):
        rail = rng.uniform(0.3, 0.9)
        samples = rail / kept * sine(rng)
        if form != "float":
            samples += rail * 10 ** rng.uniform(-4, -2) * rng.standard_normal(FRAMES)
        samples = np.clip(samples, -rail, rail)
        if form == "int16":
            samples = np.round(samples / CODE) * CODE
        found.append(found_in(samples, 1.0 if form == "int16" else None))
    assert all(found)
    assert sum("clipped fault" in one for one in found) >= (8 if kept < 0.9 else 11)


def test_a_square_at_full_scale_is_left_open() -> None:
    """Which of the two it is no shape can say: a note, not a fault."""
    rng = np.random.default_rng(20)
    assert found_in(2 * square(rng) - 1, 1.0) == {"flat tops warning"}
    assert found_in(np.clip(1.2 * sine(rng), -1, 1), 1.0) == {"clipped fault"}
