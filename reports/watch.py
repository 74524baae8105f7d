"""A pair watched while it is recorded: one line an event, until the recording ends.

Only reads. The events are those of ``fit.following``; how far behind the present they come is
the hold time, the filter and a quarter of the window.
"""

from __future__ import annotations

import contextlib
import sys
import time
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import IO, Any

from fit.following import FollowedPair, LockEvent, LockFollower
from reports.measuring import plan_read_options, plan_settings
from reports.options import UsageError
from reports.stating import stated_plan
from reports.store import json_text
from rig.readers.growing import (
    SAMPLE_CODES,
    GrowingSource,
    RawForm,
    open_growing,
    open_pipe,
)

EXIT_DONE = 0
POLL_S = 0.1  # between looks for new samples: far below any hold time, no load
Write = Callable[[str], None]
WORDS = {
    "gained": "lock gained",
    "lost": "lock lost",
    "no phase": "no phase",
    "phase back": "phase back",
}


def watch_source(
    source: str, words: Mapping[str, Any], json: str | None, emit: Write, say: Write
) -> int:
    """Follow a source to its end, writing a line an event; return the exit code.

    Parameters
    ----------
    source : path of a growing capture, or "-" for raw samples on standard input
    words : mapping of the options that were given, parsed
    json : None for lines of text; "-" for JSON lines instead; else a file for JSON lines
    emit, say : functions that write a result, and what is none

    Raises
    ------
    LockspanError
        If the source, the wiring or a rule cannot be used.
    """
    plan = stated_plan(words)
    growing = _opened(source, words, plan_read_options(plan).rate_hz)
    window = {"window_s": words["window_s"]} if "window_s" in words else {}
    follower = LockFollower(
        FollowedPair(
            path=source,
            rate_hz=growing.rate_hz,
            channels=growing.channels,
            reference=plan.reference,
            driven=plan.driven,
            settings=plan_settings(plan),
            **window,
        )
    )
    with contextlib.ExitStack() as stack:
        lines = _json_file(json, stack)
        tell = _teller(json, lines, emit)
        say(f"{source}: {len(growing.channels)} channels at {growing.rate_hz:.8g} Hz")
        try:
            _run(growing, follower, words, tell, say)
        except KeyboardInterrupt:
            # What is certain up to now is told before the interruption is passed on.
            _tell_all(follower.finish(), tell)
            raise
        _tell_all(follower.finish(), tell)
    say(f"{source}: {follower.duration_s:.6g} s followed, {_standing(follower)} at the end")
    return EXIT_DONE


def _run(
    growing: GrowingSource,
    follower: LockFollower,
    words: Mapping[str, Any],
    tell: Callable[[LockEvent], None],
    say: Write,
) -> None:
    """Feed the follower until the source ends or a stated time is over."""
    began = grew = time.monotonic()
    warned = False
    while True:
        block = growing.take()
        now = time.monotonic()
        if block.shape[1]:
            grew = now
            _tell_all(follower.feed(block), tell)
        if follower.hold_capped and not warned:
            warned = True
            say("warning: slips are so rare that the window holds less than 3 beats; --window")
        idle = now - grew > words.get("idle_s", float("inf"))
        if growing.ended or idle or now - began > words.get("for_s", float("inf")):
            return
        if not block.shape[1]:
            time.sleep(POLL_S)


def _tell_all(events: list[LockEvent], tell: Callable[[LockEvent], None]) -> None:
    for event in events:
        tell(event)


def _standing(follower: LockFollower) -> str:
    return "locked" if follower.locked else "not locked"


def _opened(source: str, words: Mapping[str, Any], rate_hz: float | None) -> GrowingSource:
    """Return the source; raw samples where a pipe or a sample type says so."""
    from rig.readers.options import ReadOptions

    options = ReadOptions(rate_hz=words.get("rate_hz", rate_hz))
    raw = _raw_form(source, words, options.rate_hz)
    if source == "-":
        assert raw is not None
        return open_pipe(sys.stdin.buffer, raw)
    return open_growing(source, options, raw)


def _raw_form(source: str, words: Mapping[str, Any], rate_hz: float | None) -> RawForm | None:
    """Return the form of raw samples, None for a file that says itself what it is."""
    if source != "-" and "sample_type" not in words and "channels" not in words:
        return None
    if rate_hz is None:
        raise UsageError(f"watch {source}: raw samples state no rate; give --rate HZ")
    kind = words.get("sample_type", "float32")
    if kind not in SAMPLE_CODES:
        raise UsageError(f"--sample-type: needs one of {', '.join(SAMPLE_CODES)}, got '{kind}'")
    return RawForm(rate_hz=rate_hz, channel_count=words.get("channels", 2), sample_type=kind)


def _json_file(json: str | None, stack: contextlib.ExitStack) -> IO[str] | None:
    if json is None or json == "-":
        return None
    return stack.enter_context(Path(json).open("w", encoding="utf-8"))


def _teller(json: str | None, lines: IO[str] | None, emit: Write) -> Callable[[LockEvent], None]:
    """Return what writes an event: text, JSON lines on standard output, or both."""

    def tell(event: LockEvent) -> None:
        if json == "-":
            emit(event_json(event))
            return
        emit(event_text(event))
        if lines is not None:
            lines.write(event_json(event) + "\n")
            lines.flush()

    return tell


def event_text(event: LockEvent) -> str:
    """Return an event as a line: time in s, what happened."""
    if event.kind == "slip":
        return f"{event.time_s:12.3f} s  slip {event.turns:+d}"
    reason = f": {event.reason}" if event.reason else ""
    return f"{event.time_s:12.3f} s  {WORDS[event.kind]}{reason}"


def event_json(event: LockEvent) -> str:
    """Return an event as one line of JSON."""
    value: dict[str, Any] = {"time_s": round(event.time_s, 6), "event": event.kind}
    if event.kind == "slip":
        value["turns"] = event.turns
    if event.reason:
        value["reason"] = event.reason
    return json_text(value).strip()
