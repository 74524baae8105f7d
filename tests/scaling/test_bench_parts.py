"""The parts of the benchmarks: honest inputs, and a script by hand that does the same job."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path

import numpy as np
import pytest

BENCH = Path(__file__).resolve().parents[2] / "bench"


@pytest.fixture(scope="module")
def bench():
    """Return a function that loads a module of the bench by its name."""

    def load(name: str):
        spec = importlib.util.spec_from_file_location(f"bench_{name}", BENCH / f"{name}.py")
        module = importlib.util.module_from_spec(spec)
        sys.modules[spec.name] = module
        spec.loader.exec_module(module)
        return module

    return load


def test_the_same_seed_gives_the_same_bytes(bench, tmp_path):
    """A ratio can be measured again only on the same capture."""
    inputs = bench("inputs")
    first, second, other = (tmp_path / name for name in ("a.wav", "b.wav", "c.wav"))
    inputs.write_capture(first, 30_000, seed=4)
    inputs.write_capture(second, 30_000, seed=4)
    inputs.write_capture(other, 30_000, seed=5)
    assert first.read_bytes() == second.read_bytes()
    assert first.read_bytes() != other.read_bytes()


def test_blocks_of_the_generator_join_without_a_step(bench, tmp_path, monkeypatch):
    """Captures of any length are made in blocks; a step at each would be a slip."""
    import soundfile

    inputs = bench("inputs")
    monkeypatch.setattr(inputs, "SNR_DB", 200.0)
    inputs.write_capture(tmp_path / "one.wav", 60_000, coding="FLOAT")
    monkeypatch.setattr(inputs, "BLOCK", 6_400)
    inputs.write_capture(tmp_path / "many.wav", 60_000, coding="FLOAT")
    one, many = (soundfile.read(tmp_path / name)[0] for name in ("one.wav", "many.wav"))
    # Float samples of half full scale: rounding of 3e-8.
    assert np.abs(one - many).max() < 1e-7


def test_by_hand_and_ours_do_the_same_job(bench, tmp_path):
    """A comparison of speed means something only if both find the same thing."""
    inputs, inside = bench("inputs"), bench("inside")
    path = tmp_path / "a.wav"
    inputs.write_capture(path, 600_000)
    _, locked, _ = bench("byhand").chain(path)
    # 11.7 s of the staircase: locked in its steps 1, 3 and 5, the last cut short at 1.7 s.
    assert len(locked) == inside.phases_and_episodes(path) == 3


def test_ratios_are_those_within_the_rounds(bench):
    """The median of ratios, not the ratio of medians: rounds differ, what they hold does not."""
    ratio = bench("measure").ratio_of([1.0, 10.0, 100.0], [2.0, 10.0, 400.0])
    assert (ratio.median, ratio.low, ratio.high, ratio.rounds) == (0.5, 0.25, 1.0, 3)
