"""What a person states for one capture: a sweep file's wiring and rules, options on top.

Both come together in a plan, so that one capture is measured exactly as a sweep would.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields, replace
from pathlib import Path
from typing import Any

from rig.channels import ChannelSetup
from rig.sweepfile import FreeRunEntry, MeasureTable, SecondRecorder, SweepPlan

# Two channels in the order people record them; every other default is that of its record.
UNSTATED = SweepPlan(
    path="", folder="", reference=ChannelSetup(channel="1"), driven=ChannelSetup(channel="2")
)
ROLES = ("driven", "reference")


def stated_plan(words: Mapping[str, Any]) -> SweepPlan:
    """Return the plan of a sweep file, or the defaults, with the given options in place.

    Parameters
    ----------
    words : mapping of the options that were given, parsed; "sweep" names the sweep file

    Returns
    -------
    SweepPlan
        Without points. A free-running capture of a role given as an option takes the place
        of those that the file names for the role.

    Raises
    ------
    LockspanError
        If the sweep file cannot be used.
    """
    plan = UNSTATED
    if "sweep" in words:
        from rig.sweepfile import read_sweep_file

        plan = read_sweep_file(words["sweep"], points_needed=False)
    order = words.get("order", plan.order)
    return replace(
        plan,
        order=None if order == "find" else order,
        reference=_placed(plan.reference, words.get("reference")),
        driven=_placed(plan.driven, words.get("driven")),
        measure=_stated_rules(plan.measure, words),
        second_recorder=_second_recorder(plan.second_recorder, words),
        free_running=_free_running(plan, words),
    )


def _placed(setup: ChannelSetup, channel: str | None) -> ChannelSetup:
    return setup if channel is None else replace(setup, channel=channel)


def _stated_rules(table: MeasureTable, words: Mapping[str, Any]) -> MeasureTable:
    """Return the measuring rules with the given options in place."""
    names = {"eps": "eps_turns", "hold": "hold", "free_spread": "free_spread"}
    found: dict[str, Any] = {field: words[name] for name, field in names.items() if name in words}
    if "settle_s" in words:
        found["settle_s"] = words["settle_s"]
    if "method" in words:
        found |= {"method_driven": words["method"], "method_reference": words["method"]}
    if "bands" in words:
        found["band_reference_hz"], found["band_driven_hz"] = words["bands"]
    return replace(table, **found)


def _second_recorder(stated: SecondRecorder, words: Mapping[str, Any]) -> SecondRecorder:
    """Return what ties the second recorder's clock: a tie given takes the place of the file's."""
    names = [field.name for field in fields(SecondRecorder) if field.name in words]
    given = {name: words[name] for name in names}
    if "shared" in given or "clock_error_ppm" in given:
        return SecondRecorder(**{"start_shift_s": stated.start_shift_s, **given})
    return replace(stated, **given)


def _free_running(plan: SweepPlan, words: Mapping[str, Any]) -> tuple[FreeRunEntry, ...]:
    """Return the free-running captures, those of the sweep file by their full path."""
    entries: list[FreeRunEntry] = []
    for role in ROLES:
        given = words.get(f"free_{role}")
        if given:
            entries += [FreeRunEntry(file=file, role=role) for file in given]  # type: ignore[arg-type]
            continue
        entries += [
            replace(entry, file=str(Path(plan.folder) / entry.file))
            for entry in plan.free_running
            if entry.role == role
        ]
    return tuple(entries)
