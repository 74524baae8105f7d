"""A pair followed while it is recorded: lock gained, lost and slips as they become certain.

The last seconds are looked at again and again, in windows that overlap; what a look says of a
time counts once psi is known for at least the hold time after it, so that a later look (or
the finished record) says the same. Memory does not grow with the record.

What a window cannot know: an episode here starts and stops as ``fit.episodes`` finds them,
but the evidence that two free oscillators are ruled out (``fit.state``) is a statement on a
whole record and is not made. Phases of wheels without a gap or an index pulse are known up to
one pulse only and cannot be followed from window to window.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Literal, cast

import numpy as np

from fit.analysis import MeasureSettings
from fit.difference import Order, PhaseDifference, form_difference
from fit.episodes import find_episodes
from fit.holdtime import choose_hold
from fit.records import Episode, Slip
from fit.slip_counter import SlipCounter
from fit.slips import find_slips
from rig.arrays import SampleBlock
from rig.captures import CaptureChannel
from rig.channels import ChannelSetup, wire_channel
from rig.errors import FitError, PhaseError
from rig.memory import held_capture
from rig.phases.estimate import track_pair
from rig.phases.lines import FewCyclesError
from rig.phases.settings import MethodName, PairSettings
from rig.phases.track import PhaseTrack

EventKind = Literal["gained", "lost", "slip", "no phase", "phase back"]

LOOKS = 4  # looks a window: each second is seen by so many, at so many times the work
HOLD_SHARE = 0.25  # of a window that the hold time may take, so that both its ends fit in
RECENT_SLIPS = 200  # whose intervals say how long the hold time must be


@dataclass(frozen=True, slots=True, kw_only=True)
class LockEvent:
    """Something that happened to a pair, s after the start of the record.

    ``turns`` is the signed size of a slip; ``reason`` says why there is no phase.
    """

    time_s: float
    kind: EventKind
    turns: int = 0
    reason: str = ""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FollowedPair:
    """What is followed: the columns, their wiring, the rules, and the window in s.

    Raises
    ------
    FitError
        If the window is not above 0 s, or the order is left open: a search needs a record.
    """

    path: str
    rate_hz: float
    channels: tuple[CaptureChannel, ...]
    reference: ChannelSetup
    driven: ChannelSetup
    settings: MeasureSettings
    window_s: float = 20.0

    def __post_init__(self) -> None:
        if not self.window_s * self.rate_hz >= 2 * LOOKS:
            raise FitError(f"window must hold samples, got {self.window_s:g} s")
        if self.settings.order is None:
            raise FitError("following needs a stated order; find it with a record first")


class LockFollower:
    """Takes samples as they come and hands out what happened, in the order of time."""

    def __init__(self, pair: FollowedPair) -> None:
        """Start with no sample; see ``FollowedPair``."""
        self._pair = pair
        self._hop = max(1, round(pair.window_s * pair.rate_hz / LOOKS))
        self._kept: list[SampleBlock] = []
        self._fresh: list[SampleBlock] = []
        self._first = self._frames = self._pending = 0
        self._settled_s = -math.inf
        self._lost_s = -math.inf
        self._tail_s = math.inf
        self._counter = SlipCounter()
        self._slips: deque[Slip] = deque(maxlen=RECENT_SLIPS)
        self._blind = ""
        self._phases = replace(pair.settings.phases, order=pair.settings.order)
        self.locked = False
        self.hold_s: float | None = None
        self.smear_s = 0.0

    @property
    def duration_s(self) -> float:
        """Time recorded so far, s."""
        return (self._frames + self._pending) / self._pair.rate_hz

    @property
    def hold_capped(self) -> bool:
        """True when beats are so slow that the window cannot hold the hold time they ask."""
        return self.hold_s is not None and self.hold_s >= HOLD_SHARE * self._pair.window_s

    def feed(self, samples: SampleBlock) -> list[LockEvent]:
        """Take samples of all channels and return the events that became certain.

        Parameters
        ----------
        samples : array, shape (channels, frames), any number of frames; copied

        Raises
        ------
        ChannelError
            If a channel that is followed is not there.
        """
        found: list[LockEvent] = []
        place = 0
        while place < samples.shape[1]:
            part = samples[:, place : place + self._hop - self._pending].copy()
            place += part.shape[1]
            self._fresh.append(part)
            self._pending += part.shape[1]
            if self._pending == self._hop:
                self._take_fresh()
                found += self._look(last=False)
        return found

    def finish(self) -> list[LockEvent]:
        """Return the events up to the end of the record, which has come."""
        if self._pending:
            self._take_fresh()
        return self._look(last=True) if self._kept else []

    def _take_fresh(self) -> None:
        """Put the samples of a hop behind the window, and drop what has left it."""
        self._kept.append(_joined(self._fresh))
        self._frames += self._pending
        self._fresh, self._pending = [], 0
        if len(self._kept) > LOOKS:
            self._first += self._kept.pop(0).shape[1]

    def _look(self, *, last: bool) -> list[LockEvent]:
        """Return what the present window adds."""
        full = last or len(self._kept) == LOOKS
        try:
            psi = self._difference()
        except PhaseError as fault:
            longer = "; --window may be too short" if isinstance(fault, FewCyclesError) else ""
            return self._without_phase(f"{fault}{longer}") if full else []
        found: list[LockEvent] = []
        if self._blind:
            self._blind = ""
            found.append(LockEvent(time_s=_first_valid_s(psi), kind="phase back"))
        self.hold_s = self._hold(psi, find_slips(psi, self._counter.centre_rad))
        self.smear_s = psi.smear_s
        end_s = self._certain_until(psi, last=last)
        episodes = find_episodes(psi, self._pair.settings.rules, self.hold_s)
        slips = self._counter.count(psi, episodes, end_s)
        self._slips.extend(slips)
        found += [LockEvent(time_s=each.time_s, kind="slip", turns=each.turns) for each in slips]
        found += self._lock_changes(episodes, end_s, last=last)
        self._settled_s = max(self._settled_s, end_s)
        return sorted(found, key=lambda event: event.time_s)

    def _difference(self) -> PhaseDifference:
        """Return psi of the window on the time of the whole record."""
        pair = self._pair
        samples = _joined(self._kept)
        capture = held_capture(samples, pair.rate_hz, pair.channels, pair.path)
        channels = [wire_channel(capture, setup) for setup in (pair.reference, pair.driven)]
        order = pair.settings.order or (1, 1)
        reference, driven = track_pair(channels[0], channels[1], settings=self._phases)
        if len(self._kept) == LOOKS:
            self._phases = _kept_methods(self._phases, reference, driven)
        psi = form_difference(driven, reference, Order(n=order[0], m=order[1]))
        return replace(psi, start_s=psi.start_s + self._first / pair.rate_hz)

    def _without_phase(self, reason: str) -> list[LockEvent]:
        """Return the events of a window in which a channel has no phase."""
        if self._blind:
            return []
        self._blind = reason
        at_s = max(self._settled_s, self._first / self._pair.rate_hz)
        found = [LockEvent(time_s=at_s, kind="no phase", reason=reason)]
        if self.locked:
            self.locked, self._lost_s = False, at_s
            found.insert(0, LockEvent(time_s=at_s, kind="lost"))
        return found

    def _hold(self, psi: PhaseDifference, slips: tuple[Slip, ...]) -> float:
        """Return the hold time, from all recent slips and not those of the window alone."""
        old = tuple(slip for slip in self._slips if slip.time_s < psi.start_s)
        choice = choose_hold(psi, old + slips, self._pair.settings.rules)
        return min(choice.hold_s, HOLD_SHARE * self._pair.window_s)

    def _certain_until(self, psi: PhaseDifference, *, last: bool) -> float:
        """Return the time up to which later samples will change nothing, s."""
        stop_s = self._frames / self._pair.rate_hz
        valid = np.flatnonzero(psi.valid)
        valid_s = psi.start_s + valid[-1] / psi.rate_hz if valid.size else psi.start_s
        if last:
            return float(valid_s)
        tail_s = stop_s - valid_s
        if len(self._kept) == LOOKS:
            # What filters leave out at the end of a window is the least that was ever left
            # out there; more than that is a gap, which nothing will fill.
            tail_s = self._tail_s = min(self._tail_s, tail_s)
        assert self.hold_s is not None
        return float(stop_s - tail_s - self.hold_s - psi.smear_s)

    def _lock_changes(
        self, episodes: tuple[Episode, ...], end_s: float, *, last: bool
    ) -> Iterator[LockEvent]:
        """Yield where lock is gained and lost up to a time."""
        assert self.hold_s is not None
        spans = [(episode.start_s, episode.stop_s) for episode in episodes]
        if self.locked and not any(a <= self._settled_s + self.smear_s <= b for a, b in spans):
            ends = [b for a, b in spans if a <= self._settled_s < b + self.hold_s]
            yield self._lose(max(ends, default=self._settled_s))
        for start_s, stop_s in spans:
            told_s = max(self._lost_s, self._settled_s - self.smear_s)
            if not self.locked and stop_s > told_s and start_s <= end_s:
                self.locked = True
                yield LockEvent(time_s=max(start_s, self._lost_s), kind="gained")
            ended = stop_s <= end_s and not (last and stop_s >= end_s - 2.0 * self.smear_s)
            if self.locked and ended and stop_s > self._settled_s - self.smear_s:
                yield self._lose(stop_s)

    def _lose(self, time_s: float) -> LockEvent:
        self.locked, self._lost_s = False, time_s
        return LockEvent(time_s=time_s, kind="lost")


def _kept_methods(rules: PairSettings, reference: PhaseTrack, driven: PhaseTrack) -> PairSettings:
    """Return the rules with the methods that the first whole window took.

    Two methods have their phase zero at different places of the wave: a change between them
    would be a step of psi.
    """
    return replace(
        rules,
        reference=replace(rules.reference, method=cast(MethodName, reference.method)),
        driven=replace(rules.driven, method=cast(MethodName, driven.method)),
    )


def _joined(parts: list[SampleBlock]) -> SampleBlock:
    """Return blocks of shape (channels, frames) one behind the other."""
    return cast(SampleBlock, np.concatenate(parts, axis=1))


def _first_valid_s(psi: PhaseDifference) -> float:
    return psi.start_s + float(np.argmax(psi.valid)) / psi.rate_hz
