"""Records of a finished run, from which pages, exports and verdicts are made."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from fit.records import FreeRun, LockingRegion, Measurement
from rig.quantities import Quantity
from rig.sweepfile import SweepPlan

VerdictWord = Literal["pass", "fail", "undecided"]
DecisionRule = Literal["simple", "guard", "guard-width", "risk"]
PointStatus = Literal["ok", "undecided", "invalid", "crashed"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Limit:
    """One limit of the sweep file, typed.

    ``rule`` is simple acceptance, guard band w = U (default), guard band of a stated width
    (``guard_width``, in ``unit``), or a stated maximum specific risk (``risk``, 0..0.5).
    ``level``, ``direction``, ``drive_from_hz`` ... ``drive_to_hz`` and ``file`` pick the points
    it applies to; None means all. ``averaging_s`` is the averaging time of a stability limit.
    ``circular`` marks an angle that is judged on the circle.
    ``wanted`` is the required word for quantities that are words (lock style, order).
    """

    name: str
    quantity: str
    unit: str
    lower: float | None = None
    upper: float | None = None
    level: float | None = None
    direction: str | None = None
    rule: DecisionRule = "guard"
    guard_width: float | None = None
    risk: float | None = None
    wanted: str | None = None
    circular: bool = False
    drive_from_hz: float | None = None
    drive_to_hz: float | None = None
    file: str | None = None
    averaging_s: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class BudgetLine:
    """One row of an uncertainty budget (GUM table)."""

    source: str
    u: float
    unit: str
    distribution: str
    sensitivity: float
    contribution: float
    note: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Verdict:
    """A limit judged: value, expanded uncertainty, probability met, word and reason."""

    limit: Limit
    value: Quantity
    expanded_u: float | None
    coverage_factor: float
    probability_met: float | None
    verdict: VerdictWord
    reason: str
    budget: tuple[BudgetLine, ...] = ()
    left_out: tuple[str, ...] = ()
    text_value: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PointResult:
    """One row of a sweep: its entry, how it went, and its measurement when there is one.

    ``driven_file`` and ``driven_sha256`` are empty where one capture holds both channels.
    """

    file: str
    driven_file: str = ""
    drive_hz: float | None
    level: float
    direction: str
    status: PointStatus
    message: str
    sha256: str
    driven_sha256: str = ""
    extras: tuple[tuple[str, str], ...] = ()
    measurement: Measurement | None = None

    @property
    def names(self) -> str:
        """What people read: the file, or both files of two recorders."""
        return f"{self.file} + {self.driven_file}" if self.driven_file else self.file


@dataclass(frozen=True, slots=True, kw_only=True)
class InputFile:
    """One input of a run for its provenance."""

    file: str
    sha256: str
    size_bytes: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Provenance:
    """How a run came about: program, versions, date (fixed by the caller), inputs, settings."""

    version: str
    date_text: str
    packages: tuple[tuple[str, str], ...]
    inputs: tuple[InputFile, ...]
    settings: tuple[tuple[str, str], ...]
    seed: int


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SweepRun:
    """A whole run: what was asked, what was measured, what follows."""

    plan: SweepPlan
    points: tuple[PointResult, ...]
    free_runs: tuple[FreeRun, ...]
    region: LockingRegion | None
    verdicts: tuple[Verdict, ...]
    verdict: VerdictWord
    provenance: Provenance
    notes: tuple[str, ...] = ()
