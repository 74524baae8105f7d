"""The built-in scenario: an acceptance sweep of one bench item, written as real files.

A tone cell - an electronic oscillator of about 500 Hz that must follow an injected tone - is
integrated from its circuit equation and "recorded": 3 injection amplitudes, each swept up
and down over 21 frequencies, the cell alone and the generator alone. The folder holds what a
person at the bench would have: 24-bit WAV files, a table of points, a sweep file.
"""

from __future__ import annotations

import csv
import io
from dataclasses import dataclass, replace
from importlib.resources import files
from pathlib import Path
from string import Template

import numpy as np

from reports.simulations import write_sound
from rig.angles import TURN_RAD
from rig.arrays import FloatArray
from rig.synthetic.circuit import TankValues, integrate_tank
from rig.synthetic.generator import DriveStep, generator_phase_rad
from rig.synthetic.lanes import LaneGrid

RATE_HZ = 8000.0
DURATION_S = 12.5  # 77 relaxation times of the weakest drive
LEAD_S = 1.0  # at the previous frequency, not recorded: the pair is in lock or beating by then
LEVELS_V = (1.0, 2.0, 3.0)
DRIVES_HZ = tuple(round(495.5 + 0.45 * step, 2) for step in range(21))
GENERATOR_ALONE_V = 2.0
VOLTS_PER_FULL_SCALE = 10.0
TANK_PROBE_GAIN = 0.5  # a 2:1 divider between cell and recorder
RECORDER_NOISE_V = 1e-3

GOOD_CELL = TankValues()
# The generator reaches the cell through a resistor that has gone high, and the tank
# capacitor is out of tolerance: too narrow, and off centre.
FAULTY_CELL = replace(GOOD_CELL, injection_ohm=56e3, capacitor_f=1.0115e-6)


@dataclass(frozen=True, slots=True, kw_only=True)
class PlannedCapture:
    """One capture of the scenario; drive_v = 0 is the cell alone."""

    file: str
    step: DriveStep
    direction: str


def demo_cell(*, faulty: bool) -> TankValues:
    """Return the component values of the scenario's cell, good or faulty."""
    return FAULTY_CELL if faulty else GOOD_CELL


def plan_sweep() -> list[PlannedCapture]:
    """Return the captures of the sweep in the order in which they are taken."""
    planned = []
    for level_v in LEVELS_V:
        for direction, drives in (("up", DRIVES_HZ), ("down", DRIVES_HZ[::-1])):
            before_hz = drives[0] - (drives[1] - drives[0])
            for number, drive_hz in enumerate(drives, start=1):
                step = DriveStep(drive_v=level_v, drive_hz=drive_hz, before_hz=before_hz)
                file = f"captures/{level_v:.0f}V_{direction}_{number:02d}.wav"
                planned.append(PlannedCapture(file=file, step=step, direction=direction))
                before_hz = drive_hz
    return planned


def write_demo(folder: Path, *, faulty: bool, seed: int, date: str) -> Path:
    """Write the scenario's folder and return the path of its SWEEP.toml.

    Parameters
    ----------
    folder : Path, made when it is not there
    faulty : bool, whether the cell is the one that does not meet its limits
    seed : int, seed of every chance in it
    date : str, date of the campaign as it stands in the sweep file (YYYY-MM-DD)

    Raises
    ------
    CaptureError
        If a sample would clip.
    OSError
        If the folder cannot be written.
    """
    (folder / "captures").mkdir(parents=True, exist_ok=True)
    rng = np.random.default_rng(seed)
    sweep = plan_sweep()
    _write_captures(folder, sweep, demo_cell(faulty=faulty), rng)
    (folder / "points.csv").write_text(_points_table(sweep, rng), encoding="utf-8")
    template = files("reports") / "templates" / "demo_sweep.toml"
    text = Template(template.read_text(encoding="utf-8")).substitute(
        date=date, serial="0418" if faulty else "0417"
    )
    path = folder / "SWEEP.toml"
    path.write_text(text, encoding="utf-8")
    return path


def _write_captures(
    folder: Path, sweep: list[PlannedCapture], cell: TankValues, rng: np.random.Generator
) -> None:
    """Integrate all captures side by side and write one WAV file each."""
    alone = DriveStep(drive_v=0.0, drive_hz=500.0, before_hz=500.0)
    steps = [
        replace(step, phase_rad=float(phase_rad))
        for step, phase_rad in zip(
            [*(capture.step for capture in sweep), alone],
            rng.uniform(0.0, TURN_RAD, len(sweep) + 1),
            strict=True,
        )
    ]
    frames = round(DURATION_S * RATE_HZ)
    grid = LaneGrid(rate_hz=RATE_HZ, frames=frames, settle_frames=round(LEAD_S * RATE_HZ))
    start_rad = rng.uniform(0.0, TURN_RAD, len(steps))
    tank_v = integrate_tank(cell, steps, grid=grid, rng=rng, start_rad=start_rad)
    names = [*(capture.file for capture in sweep), "captures/cell_alone.wav"]
    for lane, (name, step) in enumerate(zip(names, steps, strict=True)):
        _record(folder / name, step, TANK_PROBE_GAIN * tank_v[:, lane], rng)
    generator_only = replace(alone, drive_v=GENERATOR_ALONE_V)
    _record(folder / "captures/generator_alone.wav", generator_only, np.zeros(frames), rng)


def _record(path: Path, step: DriveStep, probe_v: FloatArray, rng: np.random.Generator) -> None:
    """Write generator voltage and probe voltage, recorder noise added, as one capture."""
    time_s = np.arange(probe_v.size) / RATE_HZ
    generator_v = step.drive_v * np.cos(generator_phase_rad([step], time_s)[:, 0])
    samples = np.stack([generator_v, probe_v])
    samples += RECORDER_NOISE_V * rng.standard_normal(samples.shape)
    write_sound(path, samples, RATE_HZ, volts_per_full_scale=VOLTS_PER_FULL_SCALE)


def _points_table(sweep: list[PlannedCapture], rng: np.random.Generator) -> str:
    """Return the table of points as text, with the columns a person kept for himself."""
    out = io.StringIO()
    table = csv.writer(out, lineterminator="\n")
    table.writerow(["file", "drive_hz", "level", "direction", "taken_at", "room_c"])
    for number, capture in enumerate(sweep):
        minute = 9 * 60 + 12 + number * 20 // 60
        taken_at = f"{minute // 60:02d}:{minute % 60:02d}:{number * 20 % 60:02d}"
        room_c = 21.4 + 0.004 * number + 0.05 * rng.standard_normal()
        row = [capture.file, f"{capture.step.drive_hz:.2f}", f"{capture.step.drive_v:g}"]
        table.writerow([*row, capture.direction, taken_at, f"{room_c:.1f}"])
    return out.getvalue()
