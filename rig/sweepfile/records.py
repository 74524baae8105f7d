"""The sweep file: what a person states once about a campaign, and its table of points.

TOML for what is stated once, a plain CSV table for what a spreadsheet holds (one row a
capture: file, drive_hz, level, direction, and free columns). Limits are handed on as raw
tables; they are typed where verdicts are made.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Literal

from rig.channels import ChannelSetup

LevelKind = Literal["amplitude", "power", "decibel"]
Direction = Literal["up", "down", "none"]


@dataclass(frozen=True, slots=True, kw_only=True)
class LevelAxis:
    """What the drive level is: its name, unit, and how it turns into an amplitude."""

    name: str = "level"
    unit: str = ""
    kind: LevelKind = "amplitude"


@dataclass(frozen=True, slots=True, kw_only=True)
class VariableAxis:
    """A sweep variable other than the drive frequency (spacing, stiffness, supply ...)."""

    name: str
    unit: str = ""
    column: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class FreeRunEntry:
    """A capture of one oscillator alone, the coupling or injection off."""

    file: str
    role: Literal["driven", "reference"]
    channel: int | str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class SecondRecorder:
    """How the clock of a second recorder, which took the driven one, is tied to the first's.

    ``shared`` is a channel that both recorded; else ``clock_error_ppm`` says how fast the
    second clock runs against the first. ``start_shift_s`` is when the second one started, in
    s after the first, None when it is not known.
    """

    shared: int | str | None = None
    clock_error_ppm: float | None = None
    clock_error_u_ppm: float | None = None
    start_shift_s: float | None = None

    @property
    def is_tied(self) -> bool:
        """Whether anything ties the two clocks."""
        return self.shared is not None or self.clock_error_ppm is not None


@dataclass(frozen=True, slots=True, kw_only=True)
class PointEntry:
    """One row of the table of points; ``extras`` keeps the free columns as text.

    ``driven_file`` is the capture of the driven one where another recorder took it, else empty.
    """

    file: str
    driven_file: str = ""
    drive_hz: float | None = None
    level: float = 1.0
    direction: Direction = "none"
    extras: tuple[tuple[str, str], ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class MeasureTable:
    """Measuring rules as stated in the sweep file; None means the default of its home.

    ``hold`` is text as on the command line ("0.5", "2beats"); ``band_driven_hz`` and
    ``band_reference_hz`` are (low, high). ``settle_s`` is dropped from the start of each
    point for the state and kept for pull-in. ``clock_u_ppm`` is the relative standard
    uncertainty of the recorder's sampling clock, in parts per million; it enters budgets.
    """

    method_driven: str | None = None
    method_reference: str | None = None
    band_driven_hz: tuple[float, float] | None = None
    band_reference_hz: tuple[float, float] | None = None
    rate_hz: float | None = None
    eps_turns: float | None = None
    hold: str | None = None
    free_spread: float | None = None
    settle_s: float = 0.0
    style_deg: float | None = None
    clock_u_ppm: float | None = None
    dataset: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class SweepPlan:
    """A sweep file as read: everything a campaign states, checked but not yet measured.

    ``folder`` is the folder of the sweep file; files of points are relative to it. ``item``
    and ``lab`` are text tables of the fields a report prints ("not stated" where absent).
    ``limits`` are the raw tables of the limits, in order. ``text_sha256`` is the digest of
    the sweep file and its table together.
    """

    path: str
    folder: str
    item: tuple[tuple[str, str], ...] = ()
    lab: tuple[tuple[str, str], ...] = ()
    instruments: tuple[tuple[tuple[str, str], ...], ...] = ()
    order: tuple[int, int] | None = (1, 1)
    coupling: Literal["one-way", "mutual"] = "one-way"
    reference: ChannelSetup
    driven: ChannelSetup
    level: LevelAxis = field(default_factory=LevelAxis)
    variable: VariableAxis | None = None
    measure: MeasureTable = field(default_factory=MeasureTable)
    second_recorder: SecondRecorder = field(default_factory=SecondRecorder)
    free_running: tuple[FreeRunEntry, ...] = ()
    points: tuple[PointEntry, ...] = ()
    limits: tuple[dict[str, Any], ...] = ()
    text_sha256: str = ""
    notes: tuple[str, ...] = ()
