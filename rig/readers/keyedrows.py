"""Rows that name each value, "left=1.5 right=2.5": log lines of many programs.

The same names in the same order make a table. What stands before the first name is a column
of times where it is one, else it is passed over.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

from rig.readers.clocks import clock_seconds

ROWS_LEAST = 4  # fewer lines with the same names may be settings
_PAIR = re.compile(r"(?<![^\s,;:])([A-Za-z_][\w./%-]*)\s*=")
_EDGES = " \t,;:[]"


@dataclass(frozen=True, slots=True, kw_only=True)
class KeyForm:
    """The names of a row in their order, and whether a time of day stands before them."""

    keys: tuple[str, ...]
    clock: bool

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the columns."""
        return ("time", *self.keys) if self.clock else self.keys


def find_keys(lines: Sequence[str]) -> KeyForm | None:
    """Return the names that most of the lines carry, None where there are none."""
    filled = [line for line in lines if line.strip() and not line.lstrip().startswith("#")]
    named = [tuple(_PAIR.findall(line)) for line in filled]
    if not any(named):
        return None
    keys, count = Counter(names for names in named if names).most_common(1)[0]
    if count < ROWS_LEAST or 2 * count <= len(filled) or len(set(keys)) < len(keys):
        return None
    heads = [_head(line) for line, names in zip(filled, named, strict=True) if names == keys]
    return KeyForm(keys=keys, clock=all(clock_seconds(head) is not None for head in heads))


def _head(line: str) -> str:
    """Return what stands before the first name."""
    found = _PAIR.search(line)
    return line[: found.start()].strip(_EDGES) if found else ""


def keyed_lines(lines: Sequence[str], form: KeyForm) -> list[str]:
    """Return the values of each line with commas between.

    A line without a single pair is a remark of the program; one with other pairs is left as it
    is, and will be refused.
    """
    pattern = _row_pattern(form.keys)
    plain = []
    for line in lines:
        found = pattern.fullmatch(line.strip())
        if found is None:
            plain.append(line if "=" in line or not line.strip() else f"# {line}")
            continue
        head, *values = found.groups()
        plain.append(",".join([head.strip(_EDGES), *values] if form.clock else values))
    return plain


@lru_cache(maxsize=16)
def _row_pattern(keys: tuple[str, ...]) -> re.Pattern[str]:
    """Return the pattern of a row: a comma within a value would be taken apart, so none may be."""
    pairs = [rf"{re.escape(key)}\s*=\s*([^\s,;=]*)" for key in keys]
    return re.compile(r"((?:[^=]*[\s,;:])?)" + r"[\s,;]+".join(pairs) + r"[\s,;]*")
