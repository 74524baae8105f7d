"""What a run says about the sources of uncertainty of one judged value."""

from __future__ import annotations

import math
from collections.abc import Sequence
from statistics import median

from fit.records import Measurement, RoleSummary
from reports.budget import Facts, GainSource, PhaseSource, Repeats
from reports.limited import LimitedQuantity
from reports.selection import Candidate, RunParts, drive_of
from rig.angles import wrap_angle_rad
from rig.channels import ChannelSetup

_DOUBTS = {
    True: "",
    False: "error of the phase equation, which the tests reject for this sweep",
    None: "error of the phase equation, which could not be tested",
}


def gather_facts(
    name: str,
    spec: LimitedQuantity,
    candidate: Candidate,
    candidates: Sequence[Candidate],
    parts: RunParts,
) -> Facts:
    """Return what is known about the sources that bear on one candidate.

    Parameters
    ----------
    name : str, name of the quantity
    spec : LimitedQuantity, its row
    candidate : Candidate to be judged
    candidates : all candidates of the limit, among which repeats are looked for
    parts : RunParts
    """
    ppm = parts.plan.measure.clock_u_ppm
    role = "reference" if "_reference" in name else "driven"
    return Facts(
        phases=_phases(candidate, parts) if spec.kind == "phase" else (),
        # an episode's offset holds the systematic phases, a fitted psi0 only its own noise
        phases_within=candidate.point is not None,
        gains=_gains(name, parts) if spec.kind == "amplitude" else (),
        clock_rel=None if ppm is None else ppm * 1e-6,
        drift_hz=half_range_hz(parts, role),
        drift_weight=_drift_weight(name, parts),
        reference_u_hz=_reference_u_hz(parts),
        repeats=find_repeats(candidate, candidates, circular=spec.circular),
        model_doubt=_model_doubt(spec, parts),
    )


def half_range_hz(parts: RunParts, role: str) -> float | None:
    """Return half the range of the free frequency over the captures of a role, Hz."""
    known = [run.frequency_hz.value for run in parts.free_runs if run.role == role]
    values = [value for value in known if value is not None]
    return (max(values) - min(values)) / 2 if len(values) > 1 else None


def find_repeats(
    candidate: Candidate, candidates: Sequence[Candidate], *, circular: bool = False
) -> Repeats | None:
    """Return the scatter of values taken at one setting, None where nothing was repeated.

    Parameters
    ----------
    candidate : the value to be judged; its own setting counts where it was repeated
    candidates : all values; else their repeats are pooled
    circular : True for angles in rad, whose differences are taken on the circle

    Notes
    -----
    A setting is a stated drive frequency, level and direction. The pooled variance is
    sum (n_i - 1) s_i^2 / sum (n_i - 1).
    """
    groups = _groups(candidates)
    repeated = {key: values for key, values in groups.items() if len(values) > 1}
    own = repeated.get(_setting(candidate))
    used = [own] if own is not None else list(repeated.values())
    if not used:
        return None
    squares = math.fsum(_square_sum(values, circular) for values in used)
    freedom = sum(len(values) - 1 for values in used)
    count = sum(len(values) for values in used)
    return Repeats(scatter=math.sqrt(squares / freedom), count=count)


Setting = tuple[float | None, float, str]


def _setting(candidate: Candidate) -> Setting:
    point = candidate.point
    if point is None:
        return (None, 0.0, "")
    return (point.drive_hz, point.level, point.direction)


def _groups(candidates: Sequence[Candidate]) -> dict[Setting, list[float]]:
    """Return the values of each setting, one a capture."""
    groups: dict[Setting, list[float]] = {}
    files: set[str] = set()
    for one in candidates:
        point = one.point
        if point is None or point.drive_hz is None or one.value.value is None:
            continue
        if point.file not in files:
            groups.setdefault(_setting(one), []).append(one.value.value)
            files.add(point.file)
    return groups


def _square_sum(values: Sequence[float], circular: bool) -> float:
    away = [value - values[0] for value in values]
    if circular:
        away = [wrap_angle_rad(step) for step in away]
    mean = math.fsum(away) / len(away)
    return math.fsum((step - mean) ** 2 for step in away)


def _phases(candidate: Candidate, parts: RunParts) -> tuple[PhaseSource, ...]:
    """Return the systematic phases of both channels, weighted by the locking order."""
    measured = candidate.point.measurement if candidate.point else _middle_measurement(parts)
    if measured is None:
        return ()
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


def _model_doubt(spec: LimitedQuantity, parts: RunParts) -> str:
    if spec.scope not in ("level", "hysteresis", "run") or parts.region is None:
        return ""
    return _DOUBTS[parts.region.adler_holds]
