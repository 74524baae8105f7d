"""The fast survey and searches of the health pass against slow, obvious versions of them."""

from __future__ import annotations

import numpy as np
import pytest

from rig.captures import Capture, CaptureChannel
from rig.health.level_steps import SIDE, level_step, offset_step
from rig.health.survey import SlotLevels, survey_channels
from rig.spectrum import find_lines, measure_line, noise_floor, spectrum_of


def capture_of(samples: np.ndarray) -> Capture:
    """Return a capture in memory with one channel of full scale 1."""

    def source(columns, block_frames, start, stop):
        for first in range(start, stop, block_frames):
            yield samples[None, first : min(first + block_frames, stop)]

    return Capture(
        path="made",
        format="made",
        rate_hz=1000.0,
        frame_count=samples.size,
        channels=(CaptureChannel(name="a", full_scale=1.0),),
        source=source,
    )


def runs(holds: np.ndarray, shortest: int) -> list[tuple[int, int]]:
    """Return the runs of a mask, one sample at a time."""
    found, first = [], None
    for index, flag in enumerate([*holds.tolist(), False]):
        if flag and first is None:
            first = index
        elif not flag and first is not None:
            if index - first >= shortest:
                found.append((first, index))
            first = None
    return found


def sine(rng, frames):
    return 0.7 * np.sin(0.123 * np.arange(frames)) + 0.01 * rng.standard_normal(frames) + 3.0


def coarse(rng, frames):
    return np.round(sine(rng, frames) * 50.0) / 50.0


def with_gaps(rng, frames):
    samples = coarse(rng, frames)
    samples[100:5000] = np.nan
    samples[65_530:65_550] = np.inf
    return samples


def with_standstill(rng, frames):
    samples = sine(rng, frames)
    samples[60_000:70_000] = samples[60_000]  # over the boundary of a block
    samples[-20:] = 1.0
    return samples


def logic(rng, frames):
    return np.sign(np.sin(0.01 * np.arange(frames)))


def all_missing(rng, frames):
    return np.full(frames, np.nan)


SIGNALS = [sine, coarse, with_gaps, with_standstill, logic, all_missing]


@pytest.mark.parametrize("make", SIGNALS)
@pytest.mark.parametrize("frames", [17, 1300, 140_001])
@pytest.mark.parametrize("kind", [np.float32, np.float64])
def test_survey_agrees_with_the_whole_record_at_once(rng, make, frames, kind):
    """Block by block, with short cuts where nothing is missing: the numbers may not tell."""
    samples = make(rng, max(frames, 70_100)).astype(kind)[:frames]
    (survey,) = survey_channels(capture_of(samples), [0])
    whole = samples.astype(float)
    whole[~np.isfinite(whole)] = np.nan
    there = whole[np.isfinite(whole)]
    assert survey.finite_count == there.size
    assert [(s.start, s.stop) for s in survey.gaps] == runs(np.isnan(whole), 1)
    same = np.concatenate([[False], whole[1:] == whole[:-1]])
    expected = [(first - 1, stop) for first, stop in runs(same, 16)]
    assert [(s.start, s.stop) for s in survey.stills] == expected
    if there.size == 0:
        assert np.isnan(survey.mean)
        return
    centred = there - there.mean()
    # Sums of 1e5 doubles: rounding of 1e-11 at most.
    assert survey.mean == pytest.approx(there.mean(), rel=1e-11, abs=1e-12)
    assert survey.rms == pytest.approx(np.sqrt(np.mean(there**2)), rel=1e-11)
    kurtosis = np.mean(centred**4) / np.mean(centred**2) ** 2
    assert survey.kurtosis == pytest.approx(kurtosis, rel=1e-7)
    values, counts = np.unique(there, return_counts=True)
    assert (survey.top.value, survey.top.count) == (values[-1], counts[-1])
    assert (survey.bottom.value, survey.bottom.count) == (values[0], counts[0])
    assert (survey.top.next_count, survey.bottom.next_count) == (counts[-2], counts[1])
    assert survey.rail_count == np.sum(np.abs(there) >= 0.9999)


@pytest.mark.parametrize("make", [sine, with_gaps])
def test_slots_agree_with_the_whole_record_at_once(rng, make):
    """A figure and the checks of level steps are made from the slots."""
    samples = make(rng, 140_001)
    (survey,) = survey_channels(capture_of(samples), [0])
    slots = survey.slots
    for index in range(0, slots.mean.size, 37):
        part = samples[index * slots.frames : (index + 1) * slots.frames]
        part = part[np.isfinite(part)]
        found = [getattr(slots, n)[index] for n in ("lowest", "highest", "mean", "rms")]
        if part.size == 0:
            assert np.isnan(found).all()
        else:
            wanted = [part.min(), part.max(), part.mean(), part.std()]
            assert found == pytest.approx(wanted, rel=1e-9, abs=1e-12)


def slow_largest(values: np.ndarray) -> tuple[int, float]:
    """Return (cut, size) of the largest change by medians taken anew for each cut."""
    best = (0, -1.0)
    for cut in range(SIDE, values.size - SIDE + 1):
        near = np.median(values[cut : cut + SIDE]) - np.median(values[cut - SIDE : cut])
        whole = np.median(values[cut:]) - np.median(values[:cut])
        size = 0.0 if near * whole < 0 else min(abs(near), abs(whole))
        if size > best[1]:
            best = (cut, size)
    return best


@pytest.mark.parametrize("step", [0.0, 0.5, -2.0])
def test_level_steps_agree_with_medians_taken_anew(rng, step):
    """Medians of all before and after come from sorted insertion, at a hundredth of the cost."""
    level = 1.0 + 0.1 * rng.standard_normal(101)
    level[60:] += step
    rms = np.exp(level)
    slots = SlotLevels(frames=100, lowest=-rms, highest=rms, mean=level, rms=rms)
    cut, size = slow_largest(level)
    found = offset_step(slots, 1000.0, 40.0)
    assert (found.time_s, found.size) == pytest.approx((cut * 0.1, size), rel=1e-12)
    # The rms of a group of one slot is that of the slot itself.
    assert level_step(slots, 1000.0, 40.0).size == pytest.approx(np.exp(size), rel=1e-9)


def slow_extent(density: np.ndarray, top: int, floor: float) -> tuple[int, int]:
    """Return first and last bin of a line, the whole spectrum smoothed and looked through."""
    smooth = np.convolve(density, np.ones(3) / 3.0, mode="same")
    ends = []
    for outward in (smooth[top::-1], smooth[top:]):
        last, lowest = outward.size - 1, np.inf
        for index, value in enumerate(outward):
            lowest = min(lowest, value)
            if index > 2 and (value < 4.0 * floor or value > 6.0 * lowest):
                last = max(2, int(np.argmin(outward[: index + 1])))
                break
        ends.append(last)
    return max(1, top - ends[0]), min(density.size - 1, top + ends[1])


@pytest.mark.parametrize("wander", [0.0, 1e-3, 2e-2])
def test_extent_of_a_line_agrees_with_the_whole_spectrum_looked_through(rng, wander):
    """Lines are measured near their top only; a wide one must be followed as far as before."""
    time = np.arange(30_000)
    phase = 0.3 * time + wander * np.cumsum(rng.standard_normal(time.size))
    samples = np.sin(phase) + 0.01 * rng.standard_normal(time.size)
    spectrum = spectrum_of("a", [samples], 1000.0)
    for line in find_lines(spectrum, count=4, floor_db=3.0):
        top = round(line.frequency_hz / spectrum.resolution_hz)
        _, first, last = measure_line(spectrum, top)
        wanted = slow_extent(spectrum.density, top, noise_floor(spectrum, top))
        assert (first, last) == wanted
