"""The sweep axis of tables and pictures, and residuals against the laws."""

from __future__ import annotations

import math
from dataclasses import replace
from types import ModuleType

import pytest

from reports.gallery import typical_row, worst_row
from reports.records import SweepRun
from reports.residuals import phase_residuals, rate_residuals
from reports.rows import (
    centre_at,
    directions_of,
    longest_episode,
    near_rad,
    shown_levels,
    usable_rows,
)
from rig.quantities import undetermined


@pytest.fixture(scope="module")
def run(made: ModuleType) -> SweepRun:
    """A run of 28 points at two levels, up and down."""
    return made.make_run()


def test_detuning_falls_as_the_drive_rises(run: SweepRun) -> None:
    """The sign convention of the whole package: n f_driven - m f_reference."""
    rows = [row for row in usable_rows(run) if row.point.direction == "up"][:7]
    detunings = [row.detuning_hz for row in rows]
    assert detunings == sorted(detunings, reverse=True)
    assert detunings[3] == pytest.approx(0.0, abs=1e-9)  # driven at its own frequency


def test_the_centre_of_a_level_is_the_middle_of_its_edges(run: SweepRun) -> None:
    """Where a level is open, the centre of the whole region serves."""
    assert run.region is not None
    assert centre_at(run.region, 1.0) == pytest.approx(25.1)
    opened = tuple(
        replace(level, upper_hz=undetermined("Hz", "open")) for level in run.region.levels
    )
    moved = replace(run.region.centre_hz, value=25.3)
    assert centre_at(replace(run.region, levels=opened, centre_hz=moved), 1.0) == 25.3
    assert centre_at(None, 1.0) is None


def test_levels_shown_are_spread_from_the_lowest_to_the_highest() -> None:
    """With ten levels the first four would hide the strongest drive."""
    assert shown_levels([1.0, 2.0], 4) == [1.0, 2.0]
    assert shown_levels([float(i) for i in range(10)], 4) == [0.0, 3.0, 6.0, 9.0]


def test_directions_come_in_a_fixed_order(run: SweepRun) -> None:
    """Panels must not trade places with the order of the table of points."""
    assert directions_of(replace(run, points=run.points[::-1])) == ["up", "down"]


def test_angles_are_brought_near_a_centre_across_the_cut() -> None:
    """A phase of -179 deg beside a centre of 179 deg is 2 deg away and not 358."""
    assert near_rad(math.radians(-179), math.radians(179)) == pytest.approx(math.radians(181))


def test_residuals_vanish_for_points_that_follow_the_laws(made: ModuleType, run: SweepRun) -> None:
    """The made points follow the noise-free laws exactly."""
    bare = tuple(
        replace(
            point,
            measurement=replace(
                point.measurement,
                adler=replace(
                    point.measurement.adler, noise_rad2_s=undetermined("rad2/s", "not asked")
                ),
            ),
        )
        for point in run.points
    )
    quiet = replace(run, points=bare)
    rates, phases = rate_residuals(quiet), phase_residuals(quiet)
    assert len(rates) + len(phases) == len(run.points)
    assert [one.value for one in (*rates, *phases)] == pytest.approx([0.0] * 28, abs=1e-6)
    assert all(abs(one.across) > 1.0 for one in rates)
    assert all(abs(one.across) <= 1.0 + 1e-9 for one in phases)


def _shifted(run: SweepRun, law_u_rad: float | None) -> list[float]:
    """Residuals of the locked phases when one is moved by three u of its record.

    All of the law is exact but its offset.
    """
    index = next(row.index for row in usable_rows(run) if row.state == "locked")
    point = run.points[index]
    episode = longest_episode(point.measurement)
    assert episode is not None
    off = replace(episode, offset_rad=episode.offset_rad + 3 * episode.offset_u_rad)
    moved = replace(point, measurement=replace(point.measurement, episodes=(off,)))
    levels = tuple(
        replace(
            entry,
            **{
                name: replace(getattr(entry, name), u=None)
                for name in ("lower_hz", "upper_hz", "width_hz", "coupling_hz")
            },
            offset_rad=replace(entry.offset_rad, u=law_u_rad),
        )
        for entry in run.region.levels
    )
    points = (*run.points[:index], moved, *run.points[index + 1 :])
    region = replace(run.region, levels=levels)
    return [one.value for one in phase_residuals(replace(run, points=points, region=region))]


def test_a_residual_is_measured_in_the_uncertainty_of_its_record(run: SweepRun) -> None:
    """Three standard uncertainties off must read as three where the law is exact."""
    assert max(_shifted(run, None)) == pytest.approx(3.0, abs=1e-6)


def test_a_residual_counts_the_uncertainty_of_the_law(run: SweepRun) -> None:
    """A law as uncertain as the record makes the same distance sqrt(2) times less surprising."""
    row = next(row for row in usable_rows(run) if row.state == "locked")
    episode = longest_episode(row.measurement)
    assert episode is not None
    found = max(_shifted(run, episode.offset_u_rad))
    assert found == pytest.approx(3.0 / math.sqrt(2.0), abs=1e-6)


def test_worst_and_typical_records_are_locked_ones(run: SweepRun) -> None:
    """A drifting record says nothing of how well lock is held."""
    worst, typical = worst_row(run), typical_row(run)
    assert worst is not None
    assert typical is not None
    assert {worst.state, typical.state} <= {"locked", "intermittent"}
    drifting = tuple(p for p in run.points if p.measurement.decision.state == "drifting")
    assert worst_row(replace(run, points=drifting)) is None
