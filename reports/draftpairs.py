"""Captures that two recorders took: NAME_ref beside NAME_drv, brought together for a draft."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import replace
from pathlib import PurePosixPath

from rig.roles import Glance, Roles

# How people end the names of the two files, the reference first.
ENDINGS = (
    ("ref", "drv"),
    ("reference", "driven"),
    ("drive", "driven"),
    ("inj", "osc"),
)
REASON = "by the ending of the file names"


def pair_names(names: Sequence[str]) -> dict[str, str]:
    """Return the file of the driven one for each file of a reference that has a partner.

    Parameters
    ----------
    names : sequence of str, files with their folders and suffixes
    """
    known = set(names)
    found: dict[str, str] = {}
    for name in names:
        for first, second in ENDINGS:
            partner = _swapped(name, first, second)
            if partner in known and name not in found:
                found[name] = partner
    return found


def _swapped(name: str, first: str, second: str) -> str:
    """Return a name with another ending of its stem, "" where it does not end so."""
    path = PurePosixPath(name)
    match = re.fullmatch(rf"(.+[_\- .])({first})", path.stem, flags=re.IGNORECASE)
    if match is None:
        return ""
    ending = second.upper() if match[2].isupper() else second
    return path.with_name(f"{match[1]}{ending}{path.suffix}").as_posix()


def ending_role(name: str) -> str:
    """Return the role that the ending of a name states: "reference", "driven" or ""."""
    stem = PurePosixPath(name).stem.lower()
    for first, second in ENDINGS:
        for role, ending in (("reference", first), ("driven", second)):
            if re.fullmatch(rf".+[_\- .]{ending}", stem):
                return role
    return ""


def together(reference: Glance, driven: Glance) -> Glance:
    """Return two captures of one channel each as one of two, under the name of the first."""
    return replace(
        reference,
        names=reference.names + driven.names,
        units=reference.units + driven.units,
        lines=reference.lines + driven.lines,
    )


PAIR_ROLES = Roles(reference=0, driven=1, reason=REASON)
