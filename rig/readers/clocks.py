"""Times of day and dates as they stand in the cells of a table."""

from __future__ import annotations

import re
from datetime import date

CLOCK = "clock"  # the unit of a cell that is a time of day or a date and time
_CLOCK_FORM = re.compile(
    r"(?:(\d{4})[-/](\d\d?)[-/](\d\d?)[T ])?(\d\d?):([0-5]\d):([0-5]\d)(?:[.,](\d{1,9}))?"
    r"(?:Z|[+-]\d\d:?\d\d)?",
    re.ASCII,
)
_DAY_OF_1970 = 719163


def clock_seconds(text: str) -> float | None:
    """Return the seconds of a time of day, or of a date and time since 1970; None for neither.

    A zone is passed over: only differences of times are used.
    """
    found = _CLOCK_FORM.fullmatch(text)
    if found is None:
        return None
    year, month, day, hour, minute, second, fraction = found.groups()
    days = 0
    if year is not None:
        try:
            days = date(int(year), int(month), int(day)).toordinal() - _DAY_OF_1970
        except ValueError:
            return None
    whole = 86400 * days + 3600 * int(hour) + 60 * int(minute) + int(second)
    return float(f"{whole}.{fraction or 0}") if whole >= 0 else None
