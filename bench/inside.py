"""Comparisons made inside one process: each prints its numbers as JSON for ``run.py``.

    python bench/inside.py NAME ARGUMENTS...

Every name is a row of ``COMPARISONS``. What only the comparisons need (scipy, soundfile) is
imported by them: the peak of memory of "ours" is that of the work alone.
"""

from __future__ import annotations

import json
import math
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

import numpy as np
from numpy.typing import NDArray

from bench.measure import time_rounds
from fit.difference import Order, form_difference
from fit.episodes import EpisodeRules, find_episodes
from rig.captures import Capture
from rig.channels import Channel, ChannelSetup, wire_channel
from rig.health import examine_pair
from rig.phases.analytic import AnalyticFollower
from rig.phases.bands import choose_band
from rig.phases.demodulate import rows_for
from rig.phases.estimate import track_pair
from rig.phases.grid import Grid, run_pass
from rig.phases.lines import follow_line
from rig.phases.settings import PhaseSettings
from rig.readers import open_capture

BUFFER_BYTES = 1 << 20
HOLD_S = 1.0  # as by hand
# The record of one drifting pair that the estimators are compared on.
DIFFUSION_RAD2_S = 0.01
NOISE_RAD = 0.003
INNER_STEPS = 20


def wired(path: str | Path) -> tuple[Capture, Channel, Channel]:
    """Return a capture with its reference and its driven channel."""
    capture = open_capture(str(path))
    reference, driven = (wire_channel(capture, ChannelSetup(channel=name)) for name in ("1", "2"))
    return capture, reference, driven


def phases_and_episodes(path: str | Path) -> int:
    """Return how many episodes are found: all of the work from the file to them."""
    _, reference, driven = wired(path)
    tracks = track_pair(reference, driven)
    difference = form_difference(tracks[1], tracks[0], Order(n=1, m=1, source="given"))
    return len(find_episodes(difference, EpisodeRules(), HOLD_S))


def only_pass(path: str | Path) -> Callable[[], object]:
    """Return the phase pass alone: read, filter, phases; lines and bands are found before."""
    capture, *channels = wired(path)
    rule = PhaseSettings(method="analytic")
    lines = [follow_line(channel, rule) for channel in channels]
    shape = {"rate_hz": capture.rate_hz, "duration_s": capture.duration_s}
    bands = [choose_band(line, None, rule, **shape) for line in lines]
    grid = Grid(
        rate_hz=capture.rate_hz,
        first_frame=0,
        frame_count=capture.frame_count,
        rows=min(rows_for(capture.rate_hz, band.half_hz) for band in bands),
    )

    def once() -> object:
        followers = [
            AnalyticFollower(channel, line, band, grid=grid, settings=rule)
            for channel, line, band in zip(channels, lines, bands, strict=True)
        ]
        run_pass(capture, [0, 1], followers, grid=grid)
        return [follower.finish() for follower in followers]

    return once


def read_bare(path: str | Path) -> None:
    """Read all bytes of a file into one buffer."""
    buffer = bytearray(BUFFER_BYTES)
    with Path(path).open("rb", buffering=0) as file:
        while file.readinto(buffer):
            pass


def two_transforms(path: str | Path) -> Callable[[], object]:
    """Return two real transforms of the length of the file, in single precision."""
    import soundfile
    from scipy.fft import rfft

    samples = np.ascontiguousarray(soundfile.read(path, dtype="float32")[0].T)
    return lambda: [rfft(channel) for channel in samples]


def compare_pass(path: str, rounds: str, with_hand: str) -> dict[str, list[float]]:
    """Compare capture to episodes with reading, transforming, health, and the chain by hand."""
    import soundfile

    from bench import byhand

    actions: dict[str, Callable[[], object]] = {
        "ours": lambda: phases_and_episodes(path),
        "pass": only_pass(path),
        "health": lambda: examine_pair(*wired(path)[1:]),
        "bytes": lambda: read_bare(path),
        "read": lambda: soundfile.read(path),
        "transforms": two_transforms(path),
    }
    if with_hand == "hand":
        actions["hand"] = lambda: byhand.chain(Path(path))
    return time_rounds(actions, int(rounds))


def compare_codings(folder: str, frames: str, rounds: str) -> dict[str, list[float]]:
    """Compare the passes over one capture in each coding."""
    from bench.inputs import CODINGS, write_capture

    actions = {}
    for coding in CODINGS:
        path = Path(folder, f"{coding}.wav")
        if not path.exists():
            write_capture(path, int(frames), coding=coding)
        actions[coding] = only_pass(path)
    return time_rounds(actions, int(rounds))


def time_pass(path: str, rounds: str) -> list[float]:
    """Time the phase pass alone on one length."""
    return time_rounds({"pass": only_pass(path)}, int(rounds))["pass"]


def compare_start(rounds: str, points: str) -> dict[str, Any]:
    """Compare the start value of the likelihood, and the likelihood, with a fit by hand.

    The record is one drifting stretch; the error of each in coupling is told as well.
    """
    from bench import byhand
    from fit.adler import estimate_adler
    from fit.likelihood_start import start_candidates
    from fit.records import PsiSeries

    truth, step_s = (2.0 * np.pi * 7.5, 2.0 * np.pi * 5.0), 2.5e-3
    noisy = _drifting(int(points), step_s, truth)
    series = PsiSeries(
        step_s=step_s, segments=(noisy,), start_s=(0.0,), noise_start_rad2=NOISE_RAD**2
    )
    found: dict[str, Any] = {}

    def keep(name: str, value: Any) -> None:
        found[name] = value

    spent = time_rounds(
        {
            "start": lambda: keep("start", start_candidates(series)),
            "likelihood": lambda: keep("likelihood", estimate_adler([series])),
            "hand": lambda: keep("hand", byhand.fit_stretch(noisy, 1.0 / step_s)),
        },
        int(rounds),
    )
    coupling = [float(np.hypot(*point[1:3])) for point in found["start"]]
    nearest = min((abs(value / truth[1] - 1.0) for value in coupling), default=np.nan)
    fitted = found["likelihood"][0].coupling_hz.value
    by_hand = found["hand"]
    errors = {
        "start": nearest,
        "likelihood": abs(fitted / 5.0 - 1.0) if fitted is not None else None,
        "hand": float(abs(by_hand[1] / truth[1] - 1.0)) if by_hand is not None else None,
    }
    return {"spent": spent, "errors": errors}


def _drifting(points: int, step_s: float, truth: tuple[float, float]) -> NDArray[np.float64]:
    """Return psi of a drifting pair with a little diffusion and measurement noise."""
    rng = np.random.default_rng(3)
    inner_s = step_s / INNER_STEPS
    kicks = math.sqrt(2.0 * DIFFUSION_RAD2_S * inner_s) * rng.standard_normal(points * INNER_STEPS)
    psi = [0.3]
    for kick in kicks.tolist():
        psi.append(psi[-1] + (truth[0] - truth[1] * math.sin(psi[-1])) * inner_s + kick)
    return np.array(psi[:-1:INNER_STEPS]) + NOISE_RAD * rng.standard_normal(points)


def make(path: str, frames: str, coding: str = "PCM_16") -> None:
    """Write a capture."""
    from bench.inputs import write_capture

    write_capture(Path(path), int(frames), coding=coding)


def repeat(source: str, target: str, times: str) -> None:
    """Write a capture some times over."""
    from bench.inputs import repeat_capture

    repeat_capture(Path(source), Path(target), int(times))


def fits_by_hand(path: str, most: str) -> dict[str, Any]:
    """Time some fits by hand, and say how many the whole capture asks for."""
    import time

    from bench import byhand

    psi, locked, rate_hz = byhand.chain(Path(path))
    stretches = byhand.between(locked, len(psi), int(byhand.HOLD_S * rate_hz))
    began = time.process_time()
    for first, stop in stretches[: int(most)]:
        byhand.fit_stretch(psi[first:stop], rate_hz)
    timed = min(len(stretches), int(most))
    return {"spent_s": time.process_time() - began, "timed": timed, "stretches": len(stretches)}


def versions() -> dict[str, str]:
    """Return the versions that speed depends on."""
    import platform

    import scipy

    return {
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
        "machine": platform.machine(),
    }


COMPARISONS: dict[str, Callable[..., Any]] = {
    "codings": compare_codings,
    "fits": fits_by_hand,
    "make": make,
    "ours": phases_and_episodes,
    "pass": compare_pass,
    "repeat": repeat,
    "start": compare_start,
    "time": time_pass,
    "versions": versions,
}

if __name__ == "__main__":
    print(json.dumps(COMPARISONS[sys.argv[1]](*sys.argv[2:])))
