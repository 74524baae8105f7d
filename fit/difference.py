"""The phase difference of a pair at an order n:m, and every sign convention of the package.

- Roles: the reference is the injected, leading or first oscillator; the driven one may be
  pulled. For a mutual pair the roles only fix signs.
- Order n:m: psi = n * phi_driven - m * phi_reference. 1:1 is phi_driven - phi_reference.
- Phase equation: dpsi/dt = 2 pi (detuning_hz - coupling_hz sin(psi - offset_rad)) + noise;
  detuning is positive when n f_driven > m f_reference, both free-running. The noise is
  white, <n(t) n(t')> = 2 noise_rad2_s delta(t - t').
- A slip of +1 turn moves psi by +2 pi.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from rig.arrays import BoolArray, FloatArray, frozen_view
from rig.errors import PhaseError
from rig.longarrays import made_row
from rig.phases.stretches import runs_of
from rig.phases.track import PhaseTrack

#: In-band signal-to-noise ratio below which noise alone makes slips (measured: none in
#: 100 s at 10 dB, one at 8 dB, some twenty at 6 dB).
RELIABLE_SLIPS_DB = 10.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Order:
    """A locking order n:m (n weighs the driven, m the reference phase), both at least 1."""

    n: int = 1
    m: int = 1
    source: str = "given"

    def __post_init__(self) -> None:
        if self.n < 1 or self.m < 1:
            raise ValueError(f"locking order needs n, m >= 1, got {self.n}:{self.m}")


#: The estimator whose phase is zero at an edge; all others are zero at a crest or peak.
EDGE_METHOD = "pulse"

#: The part of the wiring that says how far the wave stands ahead of its mark.
MARK_COMPONENT = "mark to mass"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PhaseDifference:
    """psi on an even grid; sample k stands at start_s + k / rate_hz.

    ``psi_rad`` (n,) is unwrapped inside each valid stretch; ``valid`` (n,) marks samples
    where both phases hold; ``u_rad`` (n,) is the standard uncertainty by measurement noise;
    ``systematic_u_rad`` the one common to all samples (sensors, skew, corners).
    ``correlation_samples`` is the number of samples that share one noise value.
    ``cycle_rate_hz`` is the slower of the two cycle rates: one independent phase value per
    cycle is all a marker phase holds. ``smear_s`` is the shortest event told apart and
    ``band_half_hz`` the frequency offset beyond which the phase band shows nothing.
    ``lost_s`` is the time that increments of a diffusing psi seem to miss (``PhaseTrack``),
    of the driven phase: the reference is mostly the quieter, or its band is alike.
    ``zeros_agree`` is False when one phase starts at the edge of a pulse, the other at the crest
    of a wave, and nobody said how far these lie apart: psi then holds an unknown constant.
    """

    order: Order
    start_s: float
    rate_hz: float
    psi_rad: FloatArray
    valid: BoolArray
    u_rad: FloatArray
    systematic_u_rad: float = 0.0
    correlation_samples: float = 1.0
    cycle_rate_hz: float
    driven_frequency_hz: float
    reference_frequency_hz: float
    smear_s: float = 0.0
    lost_s: float = 0.0
    band_half_hz: float | None = None
    zeros_agree: bool = True
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if not self.rate_hz > 0:
            raise ValueError(f"phase difference: rate must be above 0 Hz, got {self.rate_hz}")
        if not self.psi_rad.shape == self.valid.shape == self.u_rad.shape:
            raise ValueError("phase difference: psi, valid and u differ in shape")
        for name in ("psi_rad", "valid", "u_rad"):
            object.__setattr__(self, name, frozen_view(getattr(self, name)))


def valid_runs(valid: BoolArray) -> tuple[tuple[int, int], ...]:
    """Return the stretches of valid samples as (start, stop) index pairs, stop excluded.

    Parameters
    ----------
    valid : array, shape (n,), bool

    Returns
    -------
    tuple of (int, int)
    """
    return tuple((first, stop) for first, stop in runs_of(valid).tolist())


def form_difference(driven: PhaseTrack, reference: PhaseTrack, order: Order) -> PhaseDifference:
    """Return psi = n phi_driven - m phi_reference with its uncertainty, gaps kept apart.

    Parameters
    ----------
    driven, reference : PhaseTrack
        On the same grid (same start, rate and number of samples).
    order : Order

    Returns
    -------
    PhaseDifference
        psi is NaN where either phase is not valid. Each stretch keeps its own whole turns:
        nothing joins two of them, because turns lost in a gap cannot be counted.

    Raises
    ------
    PhaseError
        If the grids differ, or a track has no frequency.

    Notes
    -----
    The noises of the two phases are taken as independent, and so are their systematic
    contributions, also those of one name: u is n u_driven and m u_reference in quadrature.
    """
    _refuse_unequal_grids(driven, reference)
    n, m = order.n, order.m
    driven_hz, reference_hz = _frequency_hz(driven), _frequency_hz(reference)
    valid = driven.valid & reference.valid
    return PhaseDifference(
        order=order,
        start_s=driven.start_s,
        rate_hz=driven.rate_hz,
        psi_rad=_psi_rad(driven, reference, order, valid),
        valid=valid,
        u_rad=_u_rad(driven, reference, order),
        systematic_u_rad=math.hypot(n * _systematic_u(driven), m * _systematic_u(reference)),
        correlation_samples=max(driven.correlation_samples, reference.correlation_samples),
        cycle_rate_hz=min(driven_hz, reference_hz),
        driven_frequency_hz=driven_hz,
        reference_frequency_hz=reference_hz,
        smear_s=max(driven.smear_s, reference.smear_s),
        lost_s=driven.lost_s,
        band_half_hz=_band_half_hz(driven, reference, order),
        zeros_agree=_edge_track(driven, reference) is None,
        notes=_noise_notes(driven) + _noise_notes(reference) + _zero_notes(driven, reference),
    )


def _psi_rad(
    driven: PhaseTrack, reference: PhaseTrack, order: Order, valid: BoolArray
) -> FloatArray:
    """Return psi, NaN where it does not hold; of a long record made when it is read."""

    def read(start: int, stop: int) -> FloatArray:
        psi_rad = order.n * driven.phase_rad[start:stop]
        psi_rad -= order.m * reference.phase_rad[start:stop]
        psi_rad[~valid[start:stop]] = np.nan
        return psi_rad

    row: FloatArray = made_row(valid.size, np.float64, read)
    return row


def _u_rad(driven: PhaseTrack, reference: PhaseTrack, order: Order) -> FloatArray:
    """Return the uncertainty of psi by noise: one number for all where both phases have one."""
    ours, theirs = driven.u_rad, reference.u_rad
    if ours.strides == theirs.strides == (0,):
        both = np.hypot(order.n * ours[0], order.m * theirs[0])
        return np.broadcast_to(both, ours.shape)
    row: FloatArray = made_row(
        ours.size,
        np.float64,
        lambda a, b: np.hypot(order.n * ours[a:b], order.m * theirs[a:b]),
    )
    return row


def _refuse_unequal_grids(driven: PhaseTrack, reference: PhaseTrack) -> None:
    """Refuse two tracks whose samples do not stand at the same times."""
    same_rate = math.isclose(driven.rate_hz, reference.rate_hz, rel_tol=1e-12)
    # A thousandth of a sample is far above rounding and far below any phase that matters.
    same_start = abs(driven.start_s - reference.start_s) * driven.rate_hz < 1e-3
    if same_rate and same_start and driven.phase_rad.size == reference.phase_rad.size:
        return
    raise PhaseError(
        f"phase difference of '{driven.channel}' and '{reference.channel}': both phases must "
        f"stand on one grid, got {driven.phase_rad.size} samples at {driven.rate_hz:g} Hz from "
        f"{driven.start_s:g} s and {reference.phase_rad.size} at {reference.rate_hz:g} Hz from "
        f"{reference.start_s:g} s; form both with the same rate"
    )


def _frequency_hz(track: PhaseTrack) -> float:
    """Return the mean frequency of a track, or refuse."""
    if track.frequency_hz.value is None:
        raise PhaseError(
            f"phase of '{track.channel}': no frequency ({track.frequency_hz.reason}); "
            "record longer or state the band"
        )
    return abs(track.frequency_hz.value)


def _systematic_u(track: PhaseTrack) -> float:
    """Return the contributions common to all samples of a track in quadrature, rad."""
    return math.sqrt(sum(part.u_rad**2 for part in track.systematic))


def _band_half_hz(driven: PhaseTrack, reference: PhaseTrack, order: Order) -> float | None:
    """Return how far dpsi/dt may lie from its mean before a phase band cuts it off, Hz."""
    halves = [
        weight * min(abs(edge - _frequency_hz(track)) for edge in track.band_hz)
        for track, weight in ((driven, order.n), (reference, order.m))
        if track.band_hz is not None
    ]
    return min(halves) if halves else None


def _noise_notes(track: PhaseTrack) -> tuple[str, ...]:
    """Say when noise in the band is so strong that it makes slips of its own."""
    if track.snr_db is None or track.snr_db >= RELIABLE_SLIPS_DB:
        return ()
    return (
        f"'{track.channel}': {track.snr_db:.1f} dB in band, below {RELIABLE_SLIPS_DB:g} dB: "
        "slips are not reliable",
    )


def _edge_track(driven: PhaseTrack, reference: PhaseTrack) -> PhaseTrack | None:
    """Return the track that starts at a pulse's edge against a crest, its angle not stated."""
    edges = [track for track in (driven, reference) if track.method == EDGE_METHOD]
    if len(edges) != 1:
        return None
    stated = any(part.name == MARK_COMPONENT for part in edges[0].systematic)
    return None if stated else edges[0]


def _zero_notes(driven: PhaseTrack, reference: PhaseTrack) -> tuple[str, ...]:
    """Say that psi holds the angle between an edge and a crest, which nobody stated."""
    track = _edge_track(driven, reference)
    if track is None:
        return ()
    return (
        f"phase of '{track.channel}' starts at the edge of its pulse, the other at its crest: "
        "offsets hold the angle between them and no style can be told; state mark_angle_deg, or "
        "one method for both",
    )
