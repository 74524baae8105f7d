"""Captures for the benchmarks: two oscillators near 1 kHz, one pulled by the other.

The detuning climbs a staircase of eight steps, locked and drifting in turn, so that every
stage has something to do: 0, 1.5, 0.5, -1.3, 0.2, 1.1, -0.8, 2.5 times the coupling of 5 Hz,
2.5 s a step, over and over. Both channels share a slow wander of phase, carry noise 40 dB
below the tone and an offset. The same seed gives the same bytes; any length is made in
blocks. The files are made in a folder of the caller's and are never part of the project.
"""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import soundfile
from numpy.typing import NDArray

RATE_HZ = 51_200
LINE_HZ = 1000.0
COUPLING_HZ = 5.0
STAIRCASE = (0.0, 1.5, 0.5, -1.3, 0.2, 1.1, -0.8, 2.5)  # detuning over coupling
STEP_S = 2.5
AMPLITUDE = 0.5  # of full scale
OFFSET = 0.03
SNR_DB = 40.0  # tone against noise over half the rate, each channel
WANDER_RAD = 0.3
WANDER_HZ = 0.07
BLOCK = 512_000  # frames made at a time: a whole number of 64
COARSE = 64  # frames between two points of the integrated phase difference
CODINGS = ("PCM_16", "PCM_24", "FLOAT")


def staircase_psi_rad(frames: int) -> NDArray[np.float64]:
    """Return the phase difference every 64 frames, integrated along the staircase.

    Parameters
    ----------
    frames : int, length of the capture

    Notes
    -----
    Fourth-order Runge-Kutta at 800 steps a second: the local error is far below the noise.
    """
    count = frames // COARSE + 2
    step_s = COARSE / RATE_HZ
    coupling = 2.0 * math.pi * COUPLING_HZ
    psi = [0.3]
    for index in range(count - 1):
        stair = int(index * step_s / STEP_S) % len(STAIRCASE)
        psi.append(_advance(psi[-1], STAIRCASE[stair] * coupling, coupling, step_s))
    return np.array(psi)


def _advance(psi: float, detuning: float, coupling: float, step_s: float) -> float:
    """Return psi one step on, by psi' = detuning - coupling sin psi."""
    first = detuning - coupling * math.sin(psi)
    second = detuning - coupling * math.sin(psi + 0.5 * step_s * first)
    third = detuning - coupling * math.sin(psi + 0.5 * step_s * second)
    fourth = detuning - coupling * math.sin(psi + step_s * third)
    return psi + step_s * (first + 2.0 * second + 2.0 * third + fourth) / 6.0


def write_capture(path: Path, frames: int, *, coding: str = "PCM_16", seed: int = 1) -> None:
    """Write a two-channel WAV file: reference in channel 1, driven in channel 2.

    Parameters
    ----------
    path : Path
    frames : int
    coding : str, one of ``CODINGS``
    seed : int
    """
    rng = np.random.default_rng(seed)
    psi = staircase_psi_rad(frames)
    kind = {"samplerate": RATE_HZ, "channels": 2, "subtype": coding}
    with soundfile.SoundFile(path, "w", **kind) as file:
        for first in range(0, frames, BLOCK):
            file.write(_block(psi, first, min(BLOCK, frames - first), rng))


def _block(
    psi: NDArray[np.float64], first: int, count: int, rng: np.random.Generator
) -> NDArray[np.float32]:
    """Return frames first ... first + count, shape (count, 2)."""
    index = first + np.arange(count)
    wander = WANDER_RAD * np.sin(2.0 * math.pi * WANDER_HZ * index / RATE_HZ)
    turns = np.mod(index * (LINE_HZ / RATE_HZ), 1.0)
    common = 2.0 * math.pi * turns + wander
    difference = np.interp(index / COARSE, np.arange(psi.size), psi)
    noise = AMPLITUDE / math.sqrt(2.0) * 10.0 ** (-SNR_DB / 20.0)
    samples = rng.standard_normal((count, 2), dtype=np.float32) * np.float32(noise)
    samples[:, 0] += (OFFSET + AMPLITUDE * np.cos(common)).astype(np.float32)
    samples[:, 1] += (OFFSET + AMPLITUDE * np.cos(common + difference)).astype(np.float32)
    return samples


def repeat_capture(source: Path, target: Path, times: int) -> None:
    """Write a 16-bit capture whose samples are those of another, some times over.

    For lengths at which making the samples would cost more than measuring them; the phase
    jumps where the pieces meet. The file stays below the 4 GiB of its format.

    Parameters
    ----------
    source, target : Path
    times : int
    """
    frames = soundfile.info(source).frames
    with (
        soundfile.SoundFile(source) as piece,
        soundfile.SoundFile(target, "w", samplerate=RATE_HZ, channels=2, subtype="PCM_16") as file,
    ):
        for _ in range(times):
            piece.seek(0)
            for first in range(0, frames, BLOCK):
                file.write(piece.read(min(BLOCK, frames - first), dtype="int16"))
