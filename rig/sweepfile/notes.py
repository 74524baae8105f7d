"""What to know before a plan is run: calibrations overdue, ids that point nowhere."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from rig.channels import ChannelSetup
from rig.sweepfile.keys import NOT_STATED
from rig.sweepfile.records import PointEntry
from rig.sweepfile.values import shown, suggestion

ISO_DATE = re.compile(r"\d{4}-\d{2}-\d{2}")


def plan_notes(stated: Mapping[str, Any], points: Sequence[PointEntry]) -> tuple[str, ...]:
    """Return the notes on a plan.

    Parameters
    ----------
    stated : mapping of the fields of a plan that do not depend on its points
    points : sequence of PointEntry
    """
    return (*_drive_notes(points), *_overdue_notes(stated), *_sensor_notes(stated))


def _drive_notes(points: Sequence[PointEntry]) -> Iterator[str]:
    without = sum(point.drive_hz is None for point in points)
    if 0 < without < len(points):
        yield f"{without} of {len(points)} points state no drive_hz; it is measured there"


def _overdue_notes(stated: Mapping[str, Any]) -> Iterator[str]:
    """Yield the calibrations that were due before the last day of the work."""
    done = ISO_DATE.findall(dict(stated["lab"]).get("performed", ""))
    if not done:
        return
    for name, due in _calibrations(stated):
        # Dates written year first stand in the order of their text.
        if ISO_DATE.fullmatch(due) and due < max(done):
            yield f"{name}: calibration was due {due}, before the work of {max(done)}"


def _calibrations(stated: Mapping[str, Any]) -> Iterator[tuple[str, str]]:
    for instrument in map(dict, stated["instruments"]):
        yield f"instrument {shown(instrument['id'])}", instrument["calibration_due"]
    for role in ("reference", "driven"):
        setup: ChannelSetup = stated[role]
        yield f"sensor of the {role}", setup.calibration_due or NOT_STATED


def _sensor_notes(stated: Mapping[str, Any]) -> Iterator[str]:
    known = [dict(instrument)["id"] for instrument in stated["instruments"]]
    for role in ("reference", "driven"):
        sensor = stated[role].sensor_id
        if sensor not in (NOT_STATED, *known):
            near = suggestion(sensor, known)
            yield f"sensor {shown(sensor)} of the {role} is none of the instruments{near}"
