"""Recordings that no one here made, from packages on the registry, pinned in the test extra.

- astropy-iers-data (BSD-3-Clause), astropy_iers_data/data/eopc04.1962-now: the pole of the
  Earth's rotation, x and y in arc seconds, once a day since 1962.
- peakdet (Apache-2.0), peakdet/tests/data/PPG.csv and RESP.csv: pulse of a finger and
  breathing of one person, 40 samples a second, 600 s.

The captures are opened by the tool's own reader and measured by its own stages. Times of
the pole are years: a rate of 365.25 samples a year makes "Hz" cycles a year.
"""

from __future__ import annotations

from importlib.resources import as_file, files

import numpy as np
import pytest

from fit.analysis import MeasureSettings, measure_pair
from fit.difference import Order, form_difference
from fit.rates import mean_rate
from fit.slips import find_slips
from rig.angles import circular_mean_rad, deg_from_rad, resultant_length
from rig.channels import Channel, ChannelSetup, wire_channel
from rig.phases.estimate import track_pair
from rig.phases.settings import PairSettings, PhaseSettings
from rig.readers import ReadOptions, open_capture

POLE_X, POLE_Y = "6", "7"  # columns: year, month, day, hour, MJD, x, y, ...
DAYS_A_YEAR = 365.25


@pytest.fixture(scope="module")
def pole() -> dict[str, Channel]:
    """The two coordinates of the pole, as channels of one capture."""
    options = ReadOptions(rate_hz=DAYS_A_YEAR, time_column="none")
    source = files("astropy_iers_data") / "data" / "eopc04.1962-now"
    with as_file(source) as path:
        capture = open_capture(path, options=options)
        yield {name: wire_channel(capture, ChannelSetup(channel=name)) for name in (POLE_X, POLE_Y)}


@pytest.fixture(scope="module")
def pulse_and_breath(tmp_path_factory) -> tuple[Channel, Channel]:
    """Breathing and pulse of one person, the two files side by side in one capture."""
    folder = files("peakdet") / "tests" / "data"
    columns = [
        np.array((folder / name).read_text(encoding="utf-8").split(), dtype=float)
        for name in ("RESP.csv", "PPG.csv")
    ]
    path = tmp_path_factory.mktemp("pulse") / "pulse_and_breath.csv"
    np.savetxt(path, np.stack(columns, axis=1), delimiter=",", header="breath,pulse", comments="")
    capture = open_capture(path, options=ReadOptions(rate_hz=40.0))
    breath, pulse = (
        wire_channel(capture, ChannelSetup(channel=name)) for name in ("breath", "pulse")
    )
    return breath, pulse


def both(low_hz: float, high_hz: float) -> PairSettings:
    """The same band for both roles."""
    band = PhaseSettings(band_hz=(low_hz, high_hz))
    return PairSettings(reference=band, driven=band, order=(1, 1))


# Source: Paris Observatory, series EOP 20 C04, file eopc04.1962-now of the package
#     astropy-iers-data 0.2026.11.2.0.34.55 (BSD-3-Clause)
# Read: in the source (the file itself)
# Printed: the pole turns anticlockwise seen from above the x axis towards -y, so that the
#     phase of x less the phase of y is a quarter turn behind, -90 degrees
# Converted: circular mean and resultant length of psi, driven x, reference y, 0.5 to 1.5
#     cycles a year
# Tolerance: 1 degree and 0.99: two coordinates of one slightly flattened motion; this is a
#     check of phase and sign, not evidence of locking
def test_the_two_coordinates_of_the_pole_stay_a_quarter_turn_apart(pole):
    """A sign error anywhere in the chain turns -90 into +90 degrees."""
    tracks = track_pair(pole[POLE_Y], pole[POLE_X], settings=both(0.5, 1.5))
    difference = form_difference(tracks[1], tracks[0], Order())
    psi_rad = difference.psi_rad[difference.valid]
    assert deg_from_rad(circular_mean_rad(psi_rad)) == pytest.approx(-90.0, abs=1.0)
    assert resultant_length(psi_rad) > 0.99


def free_and_forced_motion() -> PairSettings:
    """The 433-day line of x as driven, its annual line as reference: two bands of a column.

    The bands lie to the outer side of their lines: between 0.87 and 0.98 cycles a year
    neither passes, else the stronger line would leak into the band of the weaker one.
    """
    return PairSettings(
        reference=PhaseSettings(band_hz=(0.98, 1.40)),
        driven=PhaseSettings(band_hz=(0.45, 0.87)),
        order=(1, 1),
    )


# Source: as above; the free motion of the pole has a period of about 433 days, the seasons
#     force the annual one
# Read: in the source (the file itself); 433 days is common knowledge of geodesy
# Printed: 365.25 / 433 = 0.8435 cycles a year; less 1 a year is one turn in 6.4 years
# Converted: mean rate of psi in turns a year; filter ends take 16 years off each end, so the
#     years after 2017, in which the 433-day line all but vanishes, are not in it
# Tolerance: 0.02 turns a year: the free line is broad and wanders by its own width in the
#     33 years that are left
def test_the_free_motion_of_the_pole_is_not_locked_to_the_seasons(pole):
    """Two steady lines of one column, 16 % apart, must drift, and at the right rate."""
    settings = free_and_forced_motion()
    tracks = track_pair(pole[POLE_X], pole[POLE_X], settings=settings)
    difference = form_difference(tracks[1], tracks[0], Order())
    rate = mean_rate(difference)
    assert rate.value == pytest.approx(365.25 / 433.0 - 1.0, abs=0.02)
    assert 1.0 / abs(rate.value) == pytest.approx(6.4, abs=0.5)
    assert all(slip.turns == -1 for slip in find_slips(difference))
    assert resultant_length(difference.psi_rad[difference.valid]) < 0.3


def test_the_free_motion_of_the_pole_is_called_drifting(pole):
    """The whole pipeline comes to the same answer in words."""
    settings = MeasureSettings(phases=free_and_forced_motion())
    measured = measure_pair(pole[POLE_X], pole[POLE_X], settings=settings)
    assert measured.decision.state == "drifting"
    assert measured.episodes == ()


# Source: peakdet 0.6.1 (Apache-2.0), tests/data/PPG.csv and RESP.csv, 40 samples a second
# Read: in the source (the files themselves)
# Printed: pulse 1.1375 Hz, breathing about 0.23 Hz, ratio near 5; not locked 1:5
# Converted: resultant length of psi = pulse phase less five times breathing phase
# Tolerance: 0.1; with the 130 breaths as independent values chance alone gives 0.08
def test_a_pulse_at_five_times_the_breathing_is_not_a_lock(pulse_and_breath):
    """A whole ratio of mean frequencies is a coincidence, and the tool must not be fooled."""
    settings = PairSettings(order=(1, 5))
    tracks = track_pair(*pulse_and_breath, settings=settings)
    assert tracks[1].frequency_hz.value == pytest.approx(1.1375, abs=0.01)
    difference = form_difference(tracks[1], tracks[0], Order(n=1, m=5))
    assert resultant_length(difference.psi_rad[difference.valid]) < 0.1


def test_a_pulse_at_five_times_the_breathing_is_not_called_locked(pulse_and_breath):
    """Nor does the pipeline call the record locked, wholly or for long."""
    measured = measure_pair(*pulse_and_breath, settings=MeasureSettings(order=(1, 5)))
    assert measured.decision.state != "locked"
    assert measured.decision.locked_fraction < 0.2
