"""Small valid records for tests of the reports room: numbers are chosen, not measured."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np

from fit.difference import Order
from fit.records import (
    AdequacyTest,
    AdlerEstimate,
    Episode,
    FreeRun,
    Hysteresis,
    LockingRegion,
    Measurement,
    PsiSeries,
    RegionLevel,
    RoleSummary,
    Slip,
    StateDecision,
    SyncIndex,
)
from reports.records import InputFile, Limit, PointResult, Provenance, SweepRun, Verdict
from rig.channels import ChannelSetup
from rig.quantities import Quantity, undetermined
from rig.sweepfile import LevelAxis, PointEntry, SweepPlan

FREE_HZ = 25.1  # the driven oscillator alone
DRIVES_HZ = (24.6, 24.9, 25.0, 25.1, 25.2, 25.3, 25.6)
LEVELS = (0.5, 1.0)
KAPPA_HZ = 0.3  # coupling at level 1
OFFSET_RAD = 0.2
DIGEST = "5f" * 32


def q(value: float, u: float | None, unit: str, **more: Any) -> Quantity:
    """A quantity in one short call."""
    return Quantity(value=value, u=u, unit=unit, **more)


def make_adler(detuning_hz: float, coupling_hz: float) -> AdlerEstimate:
    """An estimate with plausible uncertainties."""
    return AdlerEstimate(
        detuning_hz=q(detuning_hz, 0.003, "Hz"),
        coupling_hz=q(coupling_hz, 0.004, "Hz", low=coupling_hz - 0.009, high=coupling_hz + 0.008),
        offset_rad=q(OFFSET_RAD, 0.01, "rad"),
        noise_rad2_s=q(0.02, 0.004, "rad2/s"),
        measurement_noise_rad=q(0.01, 0.001, "rad"),
        relaxation_rate_hz=undetermined("Hz", "the pair drifts"),
        detuning_mean_hz=q(detuning_hz, 0.003, "Hz"),
        adequate=True,
        method="likelihood",
        notes=("20 beats in the record",),
        checks=(("two-number inversion", q(coupling_hz * 1.01, 0.008, "Hz")),),
        tests=(
            AdequacyTest(
                name="second harmonic", statistic=0.8, threshold=6.6, fired=False, size=0.01
            ),
        ),
    )


def _episodes(state: str, psi_rad: float) -> tuple[Episode, ...]:
    if state == "drifting":
        return ()
    angle = abs(math.atan2(math.sin(psi_rad), math.cos(psi_rad)))
    style = "in-phase" if angle < 0.5 else "anti-phase" if angle > 2.6 else "offset"
    return (
        Episode(
            start_s=0.5,
            stop_s=60.0,
            offset_rad=psi_rad,
            offset_u_rad=0.01,
            spread_rad=0.05,
            style=style,
        ),
    )


def _rate_hz(detuning_hz: float, coupling_hz: float) -> float:
    gap = detuning_hz**2 - coupling_hz**2
    return 0.0 if gap <= 0 else math.copysign(math.sqrt(gap), detuning_hz)


def make_measurement(
    *,
    detuning_hz: float = 0.0,
    coupling_hz: float = 0.3,
    path: str = "captures/point.wav",
    **changes: Any,
) -> Measurement:
    """One capture at a chosen detuning and coupling; any field can be changed by name."""
    rate_hz = _rate_hz(detuning_hz, coupling_hz)
    locked = rate_hz == 0.0
    state = "locked" if locked else "drifting"
    psi_rad = OFFSET_RAD + (math.asin(detuning_hz / coupling_hz) if locked else 0.0)
    time_s = np.linspace(0.0, 60.0, 121)
    trace = psi_rad + 2 * math.pi * rate_hz * time_s
    with_gap = trace.copy()
    with_gap[0] = np.nan
    measurement = Measurement(
        path=path,
        format="wav",
        rate_hz=2000.0,
        duration_s=60.0,
        capture_notes=("rate from the header",),
        reference=make_role("drive", FREE_HZ - detuning_hz),
        driven=make_role("rotor", FREE_HZ - detuning_hz + rate_hz),
        order=Order(n=1, m=1),
        decision=StateDecision(
            state=state,
            reason="one episode over all valid time" if locked else "no episode of 2 beats",
            locked_fraction=1.0 if locked else 0.0,
            hold_s=2.0,
        ),
        episodes=_episodes(state, psi_rad),
        slips=() if locked else (Slip(time_s=3.0, turns=1), Slip(time_s=7.5, turns=1)),
        mean_rate_hz=q(rate_hz, 0.002, "Hz"),
        adler=make_adler(detuning_hz, coupling_hz),
        jitter_rad=q(0.05, 0.004, "rad") if locked else undetermined("rad", "no episode"),
        pull_in_s=q(0.5, 0.05, "s") if locked else undetermined("s", "lock was not reached"),
        slip_rate_hz=q(abs(rate_hz), 0.01, "1/s", low=0.0, high=abs(rate_hz) + 0.05, level=0.95),
        indices=(SyncIndex(name="resultant length", value=0.98, expected_free=0.05, p_value=0.0),),
        notes=("first 0.5 s dropped",),
        series=PsiSeries(step_s=0.5, segments=(trace[1:60], trace[61:]), start_s=(0.5, 30.5)),
        trace_s=time_s,
        trace_psi_rad=with_gap,
    )
    return replace(measurement, **changes)


def make_role(channel: str, frequency_hz: float) -> RoleSummary:
    """What is said of one channel."""
    return RoleSummary(
        channel=channel,
        unit="m/s2",
        frequency_hz=q(frequency_hz, 0.0005, "Hz"),
        amplitude=q(9.81, 0.12, "m/s2"),
        snr_db=41.5,
        method="analytic",
        components=(
            ("acceleration to displacement", -math.pi, 0.0, "normal"),
            ("skew", 0.0, 0.0002, "normal"),
            ("sensor phase", 0.0, 0.004, "normal"),
        ),
    )


def make_region() -> LockingRegion:
    """A region of two levels without hysteresis, true to the constants above."""
    return LockingRegion(
        levels=tuple(_region_level(level, way) for level in LEVELS for way in ("up", "down")),
        coupling_per_level=q(KAPPA_HZ, 0.003, "Hz"),
        level_power=q(1.0, 0.02, "1"),
        centre_hz=q(FREE_HZ, 0.001, "Hz"),
        centre_slope_hz=q(0.0, 0.002, "Hz"),
        hysteresis=tuple(
            Hysteresis(level=level, edge=edge, value_hz=q(0.001, 0.004, "Hz"), p_value=0.8)
            for level in LEVELS
            for edge in ("lower", "upper")
        ),
        adler_holds=True,
        notes=("power 1 was not rejected",),
    )


def _region_level(level: float, direction: str) -> RegionLevel:
    half = KAPPA_HZ * level
    return RegionLevel(
        level=level,
        amplitude=level,
        direction=direction,
        interval=1,
        lower_hz=q(FREE_HZ - half, 0.004, "Hz"),
        upper_hz=q(FREE_HZ + half, 0.004, "Hz"),
        width_hz=q(2 * half, 0.006, "Hz"),
        coupling_hz=q(half, 0.003, "Hz"),
        offset_rad=q(OFFSET_RAD, 0.008, "rad"),
        method="joint likelihood",
        bracket_lower_hz=q(FREE_HZ - half, 0.05, "Hz"),
        bracket_upper_hz=q(FREE_HZ + half, 0.05, "Hz"),
    )


def make_point(drive_hz: float, level: float = 1.0, direction: str = "up") -> PointResult:
    """One measured row of the sweep."""
    name = f"captures/{direction}_{level:g}_{drive_hz:g}.wav"
    measured = make_measurement(
        detuning_hz=FREE_HZ - drive_hz, coupling_hz=KAPPA_HZ * level, path=name
    )
    return PointResult(
        file=name,
        drive_hz=drive_hz,
        level=level,
        direction=direction,
        status="ok",
        message="",
        sha256=DIGEST,
        extras=(("operator", "B"),),
        measurement=measured,
    )


def make_plan(limits: tuple[dict[str, Any], ...] = (), **changes: Any) -> SweepPlan:
    """A plan with the points of ``make_run``."""
    plan = SweepPlan(
        path="rig/sweep.toml",
        folder="rig",
        item=(("description", "twin exciters on a frame"), ("serial", "F-07")),
        lab=(("title", "Locking of the twin exciters"), ("report_id", "R-001")),
        reference=ChannelSetup(
            channel=1,
            unit="m/s2",
            quantity="acceleration",
            skew_u_s=1e-6,
            phase_u_rad=0.004,
            ac_corner_hz=0.5,
            ac_corner_u_hz=0.05,
        ),
        driven=ChannelSetup(
            channel=2,
            unit="m/s2",
            quantity="acceleration",
            sensitivity=1.0,
            sensitivity_u=0.01,
            phase_u_rad=0.004,
        ),
        level=LevelAxis(name="drive current", unit="A"),
        points=tuple(
            PointEntry(file=point.file, drive_hz=point.drive_hz, level=point.level, direction=way)
            for way in ("up", "down")
            for level in LEVELS
            for point in (make_point(drive, level, way) for drive in DRIVES_HZ)
        ),
        limits=limits,
        text_sha256="ab" * 32,
    )
    return replace(plan, **changes)


def make_free_runs() -> tuple[FreeRun, ...]:
    """Two captures of the driven oscillator alone, before and after the sweep."""
    return tuple(
        FreeRun(
            role="driven",
            frequency_hz=q(FREE_HZ + shift, 0.0004, "Hz"),
            drift_hz_s=q(1e-6, 2e-6, "Hz/s"),
            noise_rad2_s=q(0.02, 0.003, "rad2/s"),
            duration_s=120.0,
            file=name,
            allan=((1.0, 1e-3, 9e-4, 1.1e-3), (10.0, 3e-4, 2.5e-4, 4e-4)),
            noise_type="white frequency noise",
        )
        for shift, name in (
            (-0.001, "captures/free_before.wav"),
            (0.001, "captures/free_after.wav"),
        )
    )


def make_provenance() -> Provenance:
    """A provenance with a fixed date."""
    return Provenance(
        version="0.1.0",
        date_text="2026-12-01",
        packages=(("numpy", "2.4.6"), ("scipy", "1.17.1")),
        inputs=(InputFile(file="captures/up_1_25.wav", sha256=DIGEST, size_bytes=240044),),
        settings=(("eps_turns", "0.25"), ("hold", "2beats")),
        seed=20261201,
    )


def make_verdict(word: str = "pass", *, name: str = "locking width") -> Verdict:
    """A judged limit with a chosen word."""
    value = {"pass": 0.6, "fail": 0.3, "undecided": 0.505}[word]
    return Verdict(
        limit=Limit(name=name, quantity="locking_width_hz", unit="Hz", lower=0.5, level=1.0),
        value=q(value, 0.006, "Hz"),
        expanded_u=0.012,
        coverage_factor=2.0,
        probability_met={"pass": 1.0, "fail": 0.0, "undecided": 0.8}[word],
        verdict=word,
        reason="drive up, level 1",
    )


def make_run(
    *, limits: tuple[dict[str, Any], ...] = (), verdicts: tuple[Verdict, ...] = (), **changes: Any
) -> SweepRun:
    """A whole run of 28 points at two levels, up and down; any field can be changed by name."""
    run = SweepRun(
        plan=make_plan(limits),
        points=tuple(
            make_point(drive, level, way)
            for way in ("up", "down")
            for level in LEVELS
            for drive in DRIVES_HZ
        ),
        free_runs=make_free_runs(),
        region=make_region(),
        verdicts=verdicts,
        verdict="pass",
        provenance=make_provenance(),
        notes=("1 capture had a gap",),
    )
    return replace(run, **changes)
