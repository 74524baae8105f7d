"""The files of the built-in scenario, and simulated captures as files."""

from __future__ import annotations

import csv
import itertools
import json

import numpy as np
import pytest
import soundfile

from reports import demo
from reports.simulations import SAMPLE_WRITERS, write_simulation, write_sound
from rig.errors import CaptureError
from rig.sweepfile.read import read_sweep_file
from rig.synthetic.circuit import tank_lock_edges


@pytest.fixture
def short_demo(monkeypatch):
    """Shorten the captures: names, steps and files stay those of the scenario."""
    monkeypatch.setattr(demo, "DURATION_S", 0.02)
    monkeypatch.setattr(demo, "LEAD_S", 0.01)


def test_the_scenario_has_its_captures_in_the_order_they_are_taken():
    """Three levels, up and down, 21 frequencies, each starting from the one before."""
    planned = demo.plan_sweep()
    assert len(planned) == 126
    assert len({capture.file for capture in planned}) == 126
    for direction, sign in (("up", 1), ("down", -1)):
        run = [capture.step for capture in planned if capture.direction == direction][:21]
        assert all((step.drive_hz - step.before_hz) * sign > 0 for step in run)
        assert all(a.drive_hz == b.before_hz for a, b in itertools.pairwise(run))


def test_the_span_covers_the_widest_region_by_half_again():
    """Edges can only be found where the sweep reaches beyond them."""
    half_hz = demo.demo_cell(faulty=False).small_signal_coupling_hz(demo.LEVELS_V[-1])
    span_hz = (demo.DRIVES_HZ[-1] - demo.DRIVES_HZ[0]) / 2
    assert span_hz == pytest.approx(1.5 * half_hz, rel=0.03)


def test_the_weakest_level_lasts_long_enough_for_its_coupling():
    """At least 75 relaxation times: what the precision of edges was measured with."""
    coupling = 2 * np.pi * demo.demo_cell(faulty=False).small_signal_coupling_hz(demo.LEVELS_V[0])
    assert coupling * demo.DURATION_S > 75


@pytest.mark.usefixtures("short_demo")
def test_the_folder_is_a_sweep_that_a_person_could_have_made(tmp_path):
    """Sweep file, table and files agree, and every file is a real 24-bit recording."""
    path = demo.write_demo(tmp_path / "run", faulty=False, seed=1, date="2026-03-02")
    plan = read_sweep_file(path)
    assert dict(plan.lab)["performed"] == "2026-03-02"
    named = [point.file for point in plan.points] + [entry.file for entry in plan.free_running]
    assert len(named) == 128
    for name in named:
        info = soundfile.info(path.parent / name)
        assert (info.subtype, info.channels, info.samplerate) == ("PCM_24", 2, 8000)
    assert len(plan.limits) == 11


@pytest.mark.usefixtures("short_demo")
def test_the_same_seed_writes_the_same_bytes(tmp_path):
    """A scenario that differs from run to run cannot be compared."""
    paths = [
        demo.write_demo(tmp_path / name, faulty=True, seed=4, date="2026-03-02").parent
        for name in ("a", "b")
    ]
    for name in ("SWEEP.toml", "points.csv", "captures/1V_up_07.wav", "captures/cell_alone.wav"):
        assert (paths[0] / name).read_bytes() == (paths[1] / name).read_bytes()


@pytest.mark.usefixtures("short_demo")
def test_a_recorded_level_is_the_generators(tmp_path):
    """Volts per full scale in the sweep file must turn samples back into volts."""
    demo.write_demo(tmp_path, faulty=False, seed=1, date="2026-03-02")
    samples, _ = soundfile.read(tmp_path / "captures" / "3V_up_05.wav")
    assert 10.0 * np.max(np.abs(samples[:, 0])) == pytest.approx(3.0, abs=0.05)
    with (tmp_path / "points.csv").open(encoding="utf-8") as table:
        rows = list(csv.DictReader(table))
    assert rows[4]["drive_hz"] == "497.30"
    assert rows[4]["direction"] == "up"


def test_the_faulty_cell_is_weaker_and_off_centre():
    """It must fail for two reasons that the report can tell apart."""
    good, faulty = demo.demo_cell(faulty=False), demo.demo_cell(faulty=True)
    ratio = faulty.small_signal_coupling_hz(1.0) / good.small_signal_coupling_hz(1.0)
    assert ratio < 0.75
    assert faulty.tank_hz < good.tank_hz - 0.7


@pytest.mark.parametrize("suffix", SAMPLE_WRITERS)
def test_a_simulation_is_written_with_its_truth_beside_it(tmp_path, suffix):
    """Every format carries the same samples, the truth names what they mean."""
    path = tmp_path / f"pair{suffix}"
    truth = write_simulation(
        "clocks", path, duration_s=2.0, rate_hz=50.0, seed=5, options={"delta": 0.002}
    )
    assert path.stat().st_size > 0
    stored = json.loads((tmp_path / f"pair{suffix}.truth.json").read_text(encoding="utf-8"))
    assert stored == truth
    assert stored["seed"] == 5
    facts = {fact["name"]: fact["value"] for fact in stored["truth"]}
    assert facts["delta"] == 0.002


def test_an_unknown_format_is_refused_with_the_known_ones(tmp_path):
    """No file may be written under a suffix that says something else."""
    with pytest.raises(CaptureError, match=r"cannot write '\.mp3'; formats are \.wav, \.csv"):
        write_simulation(
            "clocks", tmp_path / "x.mp3", duration_s=1.0, rate_hz=None, seed=1, options={}
        )
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("suffix", SAMPLE_WRITERS)
def test_a_folder_that_is_not_there_is_refused(tmp_path, suffix):
    """One line that names the folder, before any time is spent on simulating."""
    path = tmp_path / "absent" / f"x{suffix}"
    with pytest.raises(CaptureError, match="absent' is not there"):
        write_simulation("clocks", path, duration_s=1.0, rate_hz=None, seed=1, options={})


@pytest.mark.parametrize(
    ("samples", "rate_hz", "message"),
    [
        (np.full((2, 4), 1.5), 100.0, "samples reach 1.5, full scale is 1"),
        (np.zeros((2, 4)), 99.5, "needs a whole rate in Hz, got 99.5"),
    ],
)
def test_a_sound_file_that_would_lie_is_not_written(tmp_path, samples, rate_hz, message):
    """Clipped samples or a rounded rate would be believed later."""
    with pytest.raises(CaptureError, match=message):
        write_sound(tmp_path / "x.wav", samples, rate_hz, volts_per_full_scale=1.0)
    assert not (tmp_path / "x.wav").exists()


@pytest.mark.usefixtures("short_demo")
@pytest.mark.parametrize("faulty", [False, True])
def test_the_true_edges_clear_or_miss_the_limits_by_far(tmp_path, faulty):
    """The verdict must follow from the cell, not from the luck of the noise."""
    path = demo.write_demo(tmp_path, faulty=faulty, seed=1, date="2026-03-02")
    limits = {limit["name"]: limit for limit in read_sweep_file(path).limits}
    cell = demo.demo_cell(faulty=faulty)
    edges = tank_lock_edges(cell, drive_v=3.0, rate_hz=demo.RATE_HZ)
    spare_hz = edges.width_hz - limits["Locking range at 3 V"]["lower"]
    assert (spare_hz < -0.5) if faulty else (spare_hz > 0.5)
    middle_hz = 0.5 * (edges.lower_hz + edges.upper_hz)
    centre = limits["Centre of the locking range"]
    assert (centre["lower"] + 0.2 < middle_hz < centre["upper"] - 0.2) is not faulty
