"""A sweep with every point locked used to give a tight coupling, 0.21 where 0.30 was true."""

from __future__ import annotations

from fit.difference import Order
from fit.records import AdlerEstimate, PsiSeries, RegionPoint
from fit.region import RegionRules, fit_region
from rig.quantities import undetermined


def quiet_point(number: int, drive_hz: float, psi_rad) -> RegionPoint:
    """A locked point without an estimate of its own."""
    names = ("detuning_hz", "coupling_hz", "relaxation_rate_hz", "detuning_mean_hz")
    hz = {name: undetermined("Hz", "steady lock") for name in names}
    adler = AdlerEstimate(
        **hz,
        offset_rad=undetermined("rad", "steady lock"),
        noise_rad2_s=undetermined("rad2/s", "steady lock"),
        measurement_noise_rad=undetermined("rad", "steady lock"),
    )
    return RegionPoint(
        key=f"{number:03d}",
        drive_hz=drive_hz,
        drive_u_hz=0.0,
        detuning_hz=None,
        level=1.0,
        amplitude=1.0,
        direction="up",
        state="locked",
        mean_rate_hz=0.0,
        mean_rate_u_hz=1e-4,
        adler=adler,
        series=PsiSeries(step_s=0.1, segments=(psi_rad,), start_s=(0.0,)),
    )


def test_points_that_are_all_locked_leave_both_sides_open_and_the_coupling_unknown(rng) -> None:
    """The edges are bounded by the points, nothing more is claimed."""
    points = [
        quiet_point(number, 19.8 + 0.05 * number, 0.02 * rng.standard_normal(400))
        for number in range(9)
    ]
    region = fit_region(points, RegionRules(order=Order()))
    (level,) = region.levels
    assert level.coupling_hz.value is None
    assert level.lower_hz.value is None
    assert level.lower_hz.high == 19.8
    assert abs((level.upper_hz.low or 0.0) - 20.2) < 1e-9  # rounding of the drives
    assert "every point is locked" in (level.width_hz.reason or "")
    assert region.coupling_per_level.value is None
