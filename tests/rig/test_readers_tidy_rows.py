"""Rows that are rewritten for numpy's reader mean the same as when read cell by cell."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from rig.readers import cells
from rig.readers.cells import Marks, RowForm
from rig.readers.clocks import CLOCK, clock_seconds
from rig.readers.tidyrows import clock_text, tidy_rows

PLAIN = ["1", "-2.5", "+0.125", ".5", "6.", "3e-2", "1D3", "-4.d+1", "nan", "NaN", "inf", " 7 "]
ODD = ["", "--", "n/a", "1 000", "5 V", "5.2 mV", "x", "END", '"8"', '"9,5"', '""', "1d", "_1", "D"]
TIMES = ["10:00:00", "23:59:59.123456789", "2026-12-01 10:00:02", "2026/2/28T1:02:03,5", "24:00:61"]
UNITS = ("", "V", "mV", CLOCK)


@settings(max_examples=400, deadline=None)
@given(
    rows=st.lists(
        st.lists(st.sampled_from(PLAIN * 2 + ODD + TIMES), min_size=2, max_size=3),
        min_size=1,
        max_size=4,
    ),
    delimiter=st.sampled_from(",;\t| "),
    decimal=st.sampled_from(".,"),
    suffixes=st.tuples(st.sampled_from(UNITS), st.sampled_from(UNITS)),
)
def test_a_rewritten_row_means_what_its_cells_mean(
    rows: list[list[str]], delimiter: str, decimal: str, suffixes: tuple[str, str]
) -> None:
    """The fast way may give up; it may never give another value or take what is no row."""
    if delimiter == decimal:
        return
    lines = [delimiter.join(row).replace(".", decimal) for row in rows]
    lines = [line for line in lines if line.strip()]
    form = RowForm(
        marks=Marks(delimiter=delimiter, decimal=decimal),
        column_count=2,
        suffixes=suffixes if any(suffixes) else (),
    )
    fast = cells._parse_tidied(lines, form) if lines else None
    if fast is not None:
        slow = cells._parse_slowly("a.csv", lines, 1, form)
        assert slow.fault is None
        np.testing.assert_array_equal(fast, slow.values)


@pytest.mark.parametrize(
    ("lines", "suffixes", "values"),
    [
        (['"1","2"', '"3","4"'], (), [[1, 2], [3, 4]]),
        (["1,", ",4"], (), [[1, np.nan], [np.nan, 4]]),
        (["1D0,2d+1", "3E0,4"], (), [[1, 20], [3, 4]]),
        (["1 V,2.5mV", "3V,4 mV"], ("V", "mV"), [[1, 2.5], [3, 4]]),
        (["10:00:00.5,1", "10:01:00,2"], (CLOCK, ""), [[36000.5, 1], [36060, 2]]),
    ],
)
def test_the_common_oddities_take_the_fast_way(
    lines: list[str], suffixes: Sequence[str], values: list[list[float]]
) -> None:
    """Files of gigabytes are written this way; cell by cell they would take an hour."""
    form = RowForm(
        marks=Marks(delimiter=",", decimal="."), column_count=2, suffixes=tuple(suffixes)
    )
    fast = cells._parse_tidied(lines, form)
    assert fast is not None
    np.testing.assert_array_equal(fast, values)


@pytest.mark.parametrize("cell", ["5 mV", "V", "nan V", "5,5 V", "", "5"])
def test_a_cell_without_its_own_unit_is_left_to_the_slow_way(cell: str) -> None:
    """A recorder that changes its range in mid-file writes mV where V stood."""
    assert tidy_rows([f"{cell};1"], ";", 2, ("V", "")) in (None, ["5,5;1"])


@given(
    seconds=st.integers(0, 86399),
    fraction=st.text("0123456789", max_size=9),
    day=st.dates().map(str) | st.just(""),
)
def test_times_of_day_agree_with_the_slow_way(seconds: int, fraction: str, day: str) -> None:
    """The minute is looked up, not computed anew: it has to be the right one."""
    minute, second = divmod(seconds, 60)
    cell = f"{day} {minute // 60:02d}:{minute % 60:02d}:{second:02d}".strip()
    cell += f".{fraction}" if fraction else ""
    text = clock_text(cell)
    assert (None if text is None else float(text)) == clock_seconds(cell)


def test_a_last_cell_that_is_missing_behind_a_tab_is_a_missing_value() -> None:
    """Used to be refused as a row with a field too few: the tab went with the blanks."""
    form = RowForm(marks=Marks(delimiter="\t", decimal="."), column_count=2)
    for rows in (["1\t2", "3\t"], ["1\t1 000", "3\t"]):
        values = cells.parse_rows("a.csv", rows, 1, form).values
        assert np.isnan(values[1, 1])
