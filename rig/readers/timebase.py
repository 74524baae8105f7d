"""The sample rate behind a column of times: a straight line through all rows, and the gaps.

Times in text are rounded, often coarser than a sample interval, so no single difference gives
the rate; a least-squares line over the whole column does, even when most differences are
zero. What a line cannot explain is named: missing rows (a jump that stays), times that run
back or repeat, pairs that share one time, and rows that are events rather than samples.

The column is met in pieces, once; what is kept grows with the number of pieces and gaps only.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np

from rig.arrays import FloatArray, IntArray, median
from rig.errors import CaptureError
from rig.readers.refusals import refusal

UNEVEN_SHARE = 0.02  # more jumps than this share of rows: a list of events, not samples
GAPS_ALWAYS_ALLOWED = 3  # a short record may hold a few gaps whatever their share
JITTER_NOTED = 0.05  # of a step: smaller deviations than this are not worth a note
JITTER_ALLOWED = 0.5  # of a step, beyond rounding: more, and a row has no certain place
RATE_U_RELATIVE_MAX = 1e-4  # a rate less certain than this is no basis for a frequency
FILL_FACTOR_MAX = 20  # frames a row: more means the gaps outweigh the record
STEP_LEAST_S = 1e-15  # far below any clock; keeps quotients finite
TIME_LARGEST_S = 1e15  # 32 million years: larger values are no times
_NEAR = 64  # rows on either side of a jump that show how coarse the times are there


class UnevenError(CaptureError):
    """The times of a table are no even clock."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TimeBase:
    """How rows become frames: rate, and for each run of rows its first row and first frame."""

    rate_hz: float
    rate_u_hz: float
    frame_count: int
    run_rows: IntArray
    run_frames: IntArray
    start_s: float
    notes: tuple[str, ...]


def decimal_quantum(times: FloatArray) -> float:
    """Return the decimal step all values are whole multiples of (1e-3, ...), 0 if there is none.

    Values with more digits than the 12th decimal, or than a float64 holds, count as unrounded.
    """
    largest = float(np.abs(times).max(initial=0.0))
    for decimals in range(-3, 13):
        scale = 10.0**decimals
        if largest * scale > 2**46:
            break
        slack = 1e-9 + 4e-16 * largest * scale
        # A few values settle most decimals; only the right one is tried on all.
        if _all_whole(times[:64], scale, slack) and _all_whole(times, scale, slack):
            return 1.0 / scale
    return 0.0


def _all_whole(times: FloatArray, scale: float, slack: float) -> bool:
    scaled = times * scale
    return bool((np.abs(scaled - np.rint(scaled)) <= slack).all())


def typical_step(times: FloatArray) -> float:
    """Return the usual time from row to row: the median slope over a quarter of the rows."""
    lag = max(1, len(times) // 4)
    return median(times[lag:] - times[:-lag]) / lag


def _sum_of_products(one: FloatArray, other: FloatArray) -> float:
    # Not the matrix product: its threads cost more than they bring at this size.
    return float((one * other).sum())


@dataclass(frozen=True, slots=True, kw_only=True)
class _Stretch:
    """Moments of rows without a jump: count, mean row and time, and their products."""

    first_row: int
    rows: int
    mean_row: float
    mean_time: float
    row_time: float
    opens_run: bool


@dataclass(slots=True, kw_only=True)
class TimeFit:
    """Takes a column of times piece by piece and turns it into a rate and a list of gaps.

    ``scale`` turns the column's unit into seconds. A step that was given from outside takes
    the place of the fitted one, and rescues times too coarse to give a rate.
    """

    path: str
    scale: float = 1.0
    given_step_s: float | None = None
    step_s: float = 0.0
    quantum_s: float = 0.0
    rows: int = 0
    jumps: int = 0
    last_s: float = math.nan
    all_pairs: bool = True
    square_sum: float = 0.0
    worst_s: float = 0.0
    stretches: list[_Stretch] = field(default_factory=list)

    def add(self, column: FloatArray) -> None:
        """Take the next times, in the unit of the file.

        Raises
        ------
        CaptureError
            If times run back or repeat, or are no samples of an even clock.
        """
        if len(column) == 0:
            return
        self._refuse_missing(column)
        quantum = decimal_quantum(column) * self.scale
        self.quantum_s = max(self.quantum_s, quantum)
        times = column * self.scale
        if self.rows == 0:
            self._start(times)
        steps = np.diff(times, prepend=self.last_s if self.rows else times[0] - self.step_s)
        self._check_order(times, steps, quantum)
        jumps = self._find_jumps(times, steps, quantum)
        self._count_jumps(len(jumps), steps)
        self._keep(times, jumps)
        self.rows += len(times)
        self.last_s = float(times[-1])

    def _refuse_missing(self, column: FloatArray) -> None:
        missing = np.flatnonzero(~np.isfinite(column))
        if len(missing):
            what = f"row {self.rows + int(missing[0]) + 1}: the time is missing"
            raise refusal(self.path, what, "Pass --time-column none and --rate HZ")
        largest = float(np.abs(column).max())
        if largest * self.scale > TIME_LARGEST_S:
            what = f"time column holds {largest:.3g}, which is no time"
            raise refusal(self.path, what, "Pass --time-column NAME, or none with --rate HZ")

    def _start(self, times: FloatArray) -> None:
        if len(times) < 3:
            what = f"holds {len(times)} rows; 3 are needed for a rate"
            raise refusal(self.path, what, "Record for longer or pass --time-column none --rate HZ")
        step_s = typical_step(times)
        self.step_s = step_s if step_s > STEP_LEAST_S else self.given_step_s or 0.0

    def _check_order(self, times: FloatArray, steps: FloatArray, quantum: float) -> None:
        back = np.flatnonzero(steps < 0)
        if len(back):
            self._refuse_order(times, steps, int(back[0]))
        same = steps == 0
        parity = self.rows % 2
        rows_odd, rows_even = same[1 - parity :: 2], same[parity::2]
        if not (bool(rows_odd.all()) and not bool(rows_even.any())):
            self.all_pairs = False
        # Rounding makes neighbours equal only where a step is shorter than the last digit.
        collapsed = self.step_s < 0.9999 * quantum
        if bool(same.any()) and not (self.all_pairs or collapsed):
            self._refuse_order(times, steps, int(np.flatnonzero(same)[0]))
        if not self.step_s > STEP_LEAST_S:
            what = f"all of the first {len(times)} rows have the time {times[0]:.10g} s"
            remedy = "Pass --rate HZ with --time-column none"
            raise refusal(self.path, f"time column too coarse to give the rate ({what})", remedy)

    def _refuse_order(self, times: FloatArray, steps: FloatArray, k: int) -> None:
        now, before = float(times[k]), float(times[k] - steps[k])
        row = self.rows + k + 1
        if now == before:
            what = f"row {row}: time {now:.10g} s stands twice"
            raise refusal(self.path, what, "Save each sample once")
        what = f"row {row}: time {now:.10g} s after {before:.10g} s; "
        what += "rows are not in time order (two channels stacked?)"
        raise refusal(self.path, what, "Save one row an instant, in order")

    def _limit_s(self, quantum: float) -> float:
        """Return the longest step that needs no missing row: rounding adds one quantum."""
        spare = JITTER_ALLOWED if quantum < 0.1 * self.step_s else JITTER_NOTED
        return (1 + spare) * self.step_s + 1.01 * quantum

    def _find_jumps(self, times: FloatArray, steps: FloatArray, quantum: float) -> list[int]:
        # Times of six digits lose a decimal where they pass 10 or 100 s: look closely there.
        found: list[int] = []
        for k in np.flatnonzero(steps > self._limit_s(quantum)):
            if self._is_jump(times, steps, int(k)):
                found.append(int(k))
            if len(found) > UNEVEN_SHARE * len(times) + GAPS_ALWAYS_ALLOWED:
                break
        return found

    def _is_jump(self, times: FloatArray, steps: FloatArray, k: int) -> bool:
        before, after = times[max(k - _NEAR, 0) : k], times[k : k + _NEAR]
        quantum = decimal_quantum(after / self.scale)
        if len(before):
            quantum = max(quantum, decimal_quantum(before / self.scale))
        return bool(steps[k] > self._limit_s(quantum * self.scale))

    def _count_jumps(self, count: int, steps: FloatArray) -> None:
        self.jumps += count
        rows = self.rows + len(steps)
        short = int(np.count_nonzero(steps < (1 - JITTER_ALLOWED) * self.step_s - self.quantum_s))
        if max(self.jumps, short) > GAPS_ALWAYS_ALLOWED + UNEVEN_SHARE * rows:
            self.refuse_uneven(f"steps from {steps.min():.3g} to {steps.max():.3g} s")

    def refuse_uneven(self, evidence: str) -> None:
        """Refuse times that are no even clock."""
        what = f"rows are not evenly spaced in time ({evidence}, typical {self.step_s:.3g} s)"
        remedy = "Export evenly sampled values (for a list of changes between 0 and 1 pass --rate "
        remedy += "HZ); if only the times are wrong, pass --time-column none --rate HZ"
        raise UnevenError(str(refusal(self.path, what, remedy)))

    def _keep(self, times: FloatArray, jumps: list[int]) -> None:
        """Keep the moments of each stretch between jumps, and the residuals about its line."""
        starts = [0, *[k for k in jumps if k > 0]]
        for first, stop in zip(starts, [*starts[1:], len(times)], strict=True):
            part = times[first:stop]
            row = np.arange(len(part), dtype=np.float64) - (len(part) - 1) / 2
            mean = float(part.mean())
            row_time = _sum_of_products(row, part - mean)
            self.stretches.append(
                _Stretch(
                    first_row=self.rows + first,
                    rows=len(part),
                    mean_row=self.rows + first + (len(part) - 1) / 2,
                    mean_time=mean,
                    row_time=row_time,
                    opens_run=first in jumps or self.rows + first == 0,
                )
            )
            self._note_residuals(part - mean, row, row_time)

    def _note_residuals(self, centred: FloatArray, row: FloatArray, row_time: float) -> None:
        slope = row_time / _sum_of_products(row, row) if len(row) > 8 else self.step_s
        residual = centred - slope * row
        self.square_sum += _sum_of_products(residual, residual)
        self.worst_s = max(self.worst_s, float(np.abs(residual).max()))
        if self.worst_s > JITTER_ALLOWED * self.step_s + 1.01 * self.quantum_s:
            self.refuse_uneven(f"a row {self.worst_s:.3g} s off the line")

    def finish(self) -> TimeBase:
        """Return the rate and the gaps of the column met so far.

        Raises
        ------
        CaptureError
            If every time occurs twice, the times are too coarse, or no line fits them.
        """
        if self.all_pairs and self.rows >= 4:
            what = "every time stamp occurs twice: peak-detect export of (min, max) pairs"
            raise refusal(self.path, what, "Save single values")
        run_rows, run_frames, off_grid = self._place_runs()
        step_s, start_s = self._fit_line(run_rows, run_frames)
        step_u_s = self._step_u_s()
        certain = step_s > STEP_LEAST_S and step_u_s <= RATE_U_RELATIVE_MAX * step_s
        if not step_s > STEP_LEAST_S and self.given_step_s is not None:
            step_s = self.given_step_s
        elif not certain and self.given_step_s is None:
            what = f"time column too coarse to give the rate ({self.rows} rows, times rounded to "
            raise refusal(self.path, f"{what}{self.quantum_s:.3g} s)", "Pass --rate HZ")
        frame_count = int(run_frames[-1]) + self.rows - int(run_rows[-1])
        if frame_count > FILL_FACTOR_MAX * self.rows + 1000:
            what = f"the gaps in time ({frame_count - self.rows} samples) outweigh the record"
            raise refusal(self.path, f"{what} ({self.rows} rows)", "Split the file at the gaps")
        # Twelve digits: what is beyond them is the rounding of this sum, not of the clock.
        rate_hz = float(f"{1.0 / step_s:.12g}")
        return TimeBase(
            rate_hz=rate_hz,
            rate_u_hz=step_u_s / step_s**2,
            frame_count=frame_count,
            run_rows=run_rows,
            run_frames=run_frames,
            start_s=start_s,
            notes=self._notes(rate_hz, step_s, run_rows, run_frames, off_grid),
        )

    def _place_runs(self) -> tuple[IntArray, IntArray, float]:
        """Return first rows and first frames of the runs, and how far off the grid the worst is."""
        slope = self._pooled_step()
        rows, frames, worst = [0], [0], 0.0
        previous = self.stretches[0]
        for stretch in self.stretches[1:]:
            if stretch.opens_run:
                between = (stretch.mean_time - previous.mean_time) / slope
                apart = stretch.mean_row - previous.mean_row
                missing = max(round(between - apart), 0)
                worst = max(worst, abs(between - apart - missing))
                frames.append(frames[-1] + stretch.first_row - rows[-1] + missing)
                rows.append(stretch.first_row)
            previous = stretch
        return np.array(rows), np.array(frames), worst

    def _pooled_step(self) -> float:
        """Return the step inside runs, where no gap can spoil it."""
        products, squares = 0.0, 0.0
        mean_row, mean_time, rows = 0.0, 0.0, 0
        for stretch in self.stretches:
            if stretch.opens_run:
                mean_row, mean_time, rows = 0.0, 0.0, 0
            total = rows + stretch.rows
            weight = rows * stretch.rows / total
            apart = stretch.mean_row - mean_row
            products += stretch.row_time + weight * apart * (stretch.mean_time - mean_time)
            squares += stretch.rows * (stretch.rows**2 - 1) / 12 + weight * apart**2
            mean_row += apart * stretch.rows / total
            mean_time += (stretch.mean_time - mean_time) * stretch.rows / total
            rows = total
        step_s = products / squares if squares > 0 else 0.0
        return step_s if step_s > STEP_LEAST_S else self.step_s

    def _fit_line(self, run_rows: IntArray, run_frames: IntArray) -> tuple[float, float]:
        """Return step and start of the line through all rows; refuse where it does not fit."""
        weights = np.array([stretch.rows for stretch in self.stretches], dtype=np.float64)
        middle = np.array([stretch.mean_row for stretch in self.stretches])
        run = np.searchsorted(run_rows, [s.first_row for s in self.stretches], side="right") - 1
        frame = middle + (run_frames - run_rows)[run]
        time = np.array([stretch.mean_time for stretch in self.stretches])
        frame_0, time_0 = np.average(frame, weights=weights), np.average(time, weights=weights)
        products = float(weights @ ((frame - frame_0) * (time - time_0)))
        products += sum(stretch.row_time for stretch in self.stretches)
        squares = float(weights @ (frame - frame_0) ** 2 + (weights**3 - weights).sum() / 12)
        step = products / squares if squares > 0 else 0.0
        off = np.abs(time - time_0 - step * (frame - frame_0))
        slack = self.quantum_s / np.sqrt(weights)
        worst = int(np.argmax(off - slack))
        if off[worst] > JITTER_ALLOWED * step + slack[worst]:
            place = self.stretches[worst].first_row + 1
            self.refuse_uneven(f"near row {place} {off[worst]:.3g} s off a straight line")
        return step, float(time_0 - step * frame_0)

    def _step_u_s(self) -> float:
        """Return the standard uncertainty of the step: white residuals about a line."""
        variance = self.square_sum / max(self.rows - 2, 1)
        return math.sqrt(12 * variance / max(self.rows**3 - self.rows, 1))

    def _notes(
        self, rate_hz: float, step_s: float, rows: IntArray, frames: IntArray, off_grid: float
    ) -> tuple[str, ...]:
        notes = []
        if self.worst_s > 0.25 * self.quantum_s > 1e-6 * step_s:
            notes.append(
                f"times are rounded to {self.quantum_s:.3g} s; the rate {rate_hz:.10g} Hz is from "
                f"a straight line through {self.rows} rows"
            )
        beyond = (self.worst_s - 0.51 * self.quantum_s) / step_s
        if beyond > JITTER_NOTED:
            notes.append(f"times jitter by up to {beyond:.2f} of a step; taken as even")
        missing = np.diff(frames) - np.diff(rows)
        for row, frame, count in list(zip(rows[1:], frames[1:], missing, strict=True))[:5]:
            start_s, stop_s = (frame - count) * step_s, frame * step_s
            notes.append(
                f"gap at {start_s:.6g}-{stop_s:.6g} s: {count} samples before row {row + 1}"
            )
        if len(missing) > 5:
            notes.append(f"{len(missing)} gaps in all, {int(missing.sum())} samples missing")
        if off_grid > max(JITTER_NOTED, 2 * self.quantum_s / step_s):
            notes.append(f"after a gap, samples stand up to {off_grid:.2f} of a step off the grid")
        return tuple(notes)
