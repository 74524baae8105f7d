"""What a run says about the sources of uncertainty of one judged value."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from statistics import median

from fit.records import Measurement, RoleSummary
from reports.budget import Facts, GainSource, PhaseSource, Repeats
from reports.limited import LimitedQuantity
from reports.selection import Candidate, RunParts, drive_of
from rig.angles import wrap_angle_rad
from rig.channels import ChannelSetup

Setting = tuple[float | None, float, str]

_DOUBTS = {
    True: "",
    False: "error of the phase equation, which the tests reject for this sweep",
    None: "error of the phase equation, which could not be tested",
}


def gather_facts(
    name: str, spec: LimitedQuantity, candidates: Sequence[Candidate], parts: RunParts
) -> Callable[[Candidate], Facts]:
    """Return a function of a candidate: what is known about the sources that bear on it.

    Parameters
    ----------
    name : str, name of the quantity
    spec : LimitedQuantity, its row
    candidates : all candidates of the limit, among which repeats are looked for
    parts : RunParts

    Notes
    -----
    What all candidates share is found once, so that a thousand captures take a thousand steps.
    """
    ppm = parts.plan.measure.clock_u_ppm
    groups = group_by_setting(candidates)
    pooled = pooled_repeats(groups, circular=spec.circular)
    phasic = spec.kind == "phase"
    middle = _middle_measurement(parts) if phasic else None
    shared = Facts(
        gains=_gains(name, parts) if spec.kind == "amplitude" else (),
        clock_rel=None if ppm is None else ppm * 1e-6,
        drift_hz=half_range_hz(parts, "reference" if "_reference" in name else "driven"),
        drift_weight=_drift_weight(name, parts),
        reference_u_hz=_reference_u_hz(parts),
        model_doubt=_model_doubt(name, spec, parts),
    )

    def of(candidate: Candidate) -> Facts:
        own = {setting_of(candidate): groups.get(setting_of(candidate), [])}
        repeats = pooled_repeats(own, circular=spec.circular) or pooled
        if not phasic:
            return replace(shared, repeats=repeats)
        measured = candidate.point.measurement if candidate.point is not None else middle
        return replace(
            shared,
            repeats=repeats,
            phases=() if measured is None else _phases(measured),
            # an episode's offset holds the systematic phases, a fitted psi0 only its noise
            phases_within=candidate.point is not None,
        )

    return of


def half_range_hz(parts: RunParts, role: str) -> float | None:
    """Return half the range of the free frequency over the captures of a role, Hz."""
    known = [run.frequency_hz.value for run in parts.free_runs if run.role == role]
    values = [value for value in known if value is not None]
    return (max(values) - min(values)) / 2 if len(values) > 1 else None


def pooled_repeats(
    groups: Mapping[Setting, Sequence[float]], *, circular: bool = False
) -> Repeats | None:
    """Return the pooled scatter of values taken at one setting, None where none was repeated.

    Parameters
    ----------
    groups : mapping of a setting to its values
    circular : True for angles in rad, whose differences are taken on the circle

    Notes
    -----
    The pooled variance is sum (n_i - 1) s_i^2 / sum (n_i - 1).
    """
    used = [values for values in groups.values() if len(values) > 1]
    if not used:
        return None
    squares = math.fsum(_square_sum(values, circular) for values in used)
    freedom = sum(len(values) - 1 for values in used)
    count = sum(len(values) for values in used)
    return Repeats(scatter=math.sqrt(squares / freedom), count=count, freedom=freedom)


def setting_of(candidate: Candidate) -> Setting:
    """Return the setting of a candidate: stated drive frequency, level and direction."""
    point = candidate.point
    if point is None:
        return (None, 0.0, "")
    return (point.drive_hz, point.level, point.direction)


def group_by_setting(candidates: Sequence[Candidate]) -> dict[Setting, list[float]]:
    """Return the values of each stated setting, one a capture."""
    groups: dict[Setting, list[float]] = {}
    files: set[str] = set()
    for one in candidates:
        point = one.point
        if point is None or point.drive_hz is None or one.value.value is None:
            continue
        if point.file not in files:
            groups.setdefault(setting_of(one), []).append(one.value.value)
            files.add(point.file)
    return groups


def _square_sum(values: Sequence[float], circular: bool) -> float:
    away = [value - values[0] for value in values]
    if circular:
        away = [wrap_angle_rad(step) for step in away]
    mean = math.fsum(away) / len(away)
    return math.fsum((step - mean) ** 2 for step in away)


def _phases(measured: Measurement) -> tuple[PhaseSource, ...]:
    """Return the systematic phases of both channels, weighted by the locking order."""
    order = measured.order
    return (
        *_role_phases(measured.driven, float(order.n)),
        *_role_phases(measured.reference, -float(order.m)),
    )


def _role_phases(role: RoleSummary, sensitivity: float) -> tuple[PhaseSource, ...]:
    return tuple(
        PhaseSource(
            name=name,
            channel=role.channel,
            u_rad=u_rad,
            distribution=distribution,
            sensitivity=sensitivity,
        )
        for name, _, u_rad, distribution in role.components
    )


def _middle_measurement(parts: RunParts) -> Measurement | None:
    """Return the measurement in the middle of the drive range: corrections depend on it."""
    measured = [point for point in parts.points if point.measurement is not None]
    if not measured:
        return None
    ordered = sorted(measured, key=lambda point: drive_of(point) or 0.0)
    return ordered[len(ordered) // 2].measurement


def _gains(name: str, parts: RunParts) -> tuple[GainSource, ...]:
    setups = {"driven": parts.plan.driven, "reference": parts.plan.reference}
    roles = [role for role in setups if name in (f"amplitude_{role}", "amplitude_ratio")]
    return tuple(_gain(setups[role]) for role in roles)


def _gain(setup: ChannelSetup) -> GainSource:
    return GainSource(channel=str(setup.channel), u_rel=setup.sensitivity_u / setup.sensitivity)


def _drift_weight(name: str, parts: RunParts) -> float:
    """Return what one hertz of the free frequency does: edges move by n/m, coupling by n/2."""
    if name.startswith("free_"):
        return 1.0
    order = parts.order
    return order.n / 2 if name == "coupling_hz" else order.n / order.m


def _reference_u_hz(parts: RunParts) -> float | None:
    measured = [point.measurement for point in parts.points if point.measurement is not None]
    known = [one.reference.frequency_hz.u for one in measured]
    values = [u for u in known if u is not None]
    return median(values) if values else None


def _model_doubt(name: str, spec: LimitedQuantity, parts: RunParts) -> str:
    if name in ("hold_time_s", "locked_fraction"):
        return "ends of the locked episodes beyond the time step of the phase"
    if spec.scope not in ("level", "hysteresis", "run") or parts.region is None:
        return ""
    return _DOUBTS[parts.region.adler_holds]
