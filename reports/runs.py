"""A sweep from its file to its report: measure, store, resume, map, judge, write.

One result is written per capture as it finishes, under a key of content digest, settings and
algorithm; a run that was killed at any instant goes on where it stopped. Rows are put back
into the order of the table before anything is made from them, so that results do not depend
on the number of workers.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from fit.records import FreeRun, Measurement
from reports.executors import batch_size, choose_executor
from reports.folder import (
    path_from,
    point_file,
    prepare_folder,
    read_point,
    read_run,
    write_point,
    write_run,
)
from reports.judging import judge_run
from reports.limits import check_limits, read_limits
from reports.measuring import (
    ALGORITHM,
    measure_task,
    os_line,
    pair_task,
    plan_free_run,
    plan_settings,
    plan_task_parts,
)
from reports.outputs import RunOutcome, conclude
from reports.progress import Progress
from reports.provenance import file_digest, package_versions, program_version, text_digest
from reports.records import InputFile, PointResult, Provenance, SweepRun
from reports.store import decode_record, encode_record, json_text
from rig.errors import CaptureError, LockspanError
from rig.sweepfile import PointEntry, SweepPlan, read_sweep_file


@dataclass(frozen=True, slots=True, kw_only=True)
class RunOptions:
    """How a sweep is run; nothing here changes a number but the seed."""

    date_text: str
    workers: int | None = None
    cluster: str | None = None
    seed: int = 1
    fresh: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class _Row:
    """One row of the table with the digests of its files, or the line that bars it.

    ``files`` are those that could be read: one, or two where two recorders took the pair.
    """

    entry: PointEntry
    paths: tuple[Path, ...]
    files: tuple[InputFile, ...]
    refusal: str

    @property
    def sha256(self) -> str:
        """Digest of the first file."""
        return self.files[0].sha256 if self.files else ""

    @property
    def driven_sha256(self) -> str:
        """Digest of the second file, empty where there is none."""
        return self.files[1].sha256 if len(self.files) > 1 else ""

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the files as results show them."""
        return tuple(filter(None, (self.entry.file, self.entry.driven_file)))


def run_sweep(
    sweep_path: Path, folder: Path, options: RunOptions, progress: Progress
) -> RunOutcome:
    """Measure every point of a sweep file, map and judge it, and write the report.

    Parameters
    ----------
    sweep_path : path of the sweep file
    folder : path of the folder of results; made when it is not there
    options : RunOptions
    progress : function of (done, total, text)

    Raises
    ------
    LockspanError
        If the sweep file or the folder cannot be used, or no capture could be measured.
    """
    plan = read_sweep_file(sweep_path)
    settings = plan_settings(plan)  # refuses a bad rule before anything is measured
    check_limits(read_limits(plan.limits, plan.path), plan)
    prepare_folder(folder)
    free_runs, free_inputs, notes = _measure_free_runs(plan)
    rows = _rows(plan)
    keys = _row_keys(plan, rows, free_runs)
    outcomes = _measure_rows(plan, rows, keys, free_runs, folder, options, progress)
    points = tuple(_point_result(row, outcome) for row, outcome in zip(rows, outcomes, strict=True))
    _refuse_empty(points)
    inputs = free_inputs + tuple(file for row in rows for file in row.files)
    provenance = Provenance(
        version=program_version(),
        date_text=options.date_text,
        packages=package_versions(),
        inputs=inputs,
        settings=_settings_text(plan, encode_record(settings)),
        seed=options.seed,
    )
    run = judge_run(plan, points, free_runs, provenance, notes)
    write_run(folder, _stored_run(run, path_from(folder, sweep_path), keys))
    return conclude(run, folder, options.workers)


def report_again(folder: Path, *, sweep_file: str | None, date: str | None) -> RunOutcome:
    """Judge and write again from the stored results, without measuring again.

    Parameters
    ----------
    folder : path of the folder of a sweep
    sweep_file : str or None
        Sweep file with changed limits; by default the one of the run where it is still
        there, else the plan that was stored.
    date : str or None, date to print; by default the one of the run

    Raises
    ------
    LockspanError
        If the folder or file cannot be used, or the file asks for another measurement.
    """
    stored, run = load_run(folder)
    plan = _current_plan(stored, run.plan, sweep_file)
    provenance = run.provenance
    if date is not None:
        provenance = replace(provenance, date_text=date)
    algorithm = str(stored.get("algorithm", "1"))  # the first one left no word of itself
    notes = _versioned_notes(run, algorithm)
    again = judge_run(plan, run.points, run.free_runs, provenance, notes)
    keys = [key for _, key in stored["keys"]]
    kept = path_from(folder, Path(str(stored["sweep_path"])))
    write_run(folder, _stored_run(again, kept, keys, algorithm))
    return conclude(again, folder)


def _versioned_notes(run: SweepRun, algorithm: str) -> tuple[str, ...]:
    """Return the notes of a run, with what measured it where that is not what judges it."""
    measured, judging = run.provenance.version, program_version()
    found = []
    if measured != judging:
        found.append(f"measured by lockspan {measured}, mapped and judged again by {judging}")
    if algorithm != ALGORITHM:
        found.append(
            f"the captures were measured by estimators of edition {algorithm}, those of today are "
            f"of edition {ALGORITHM}: 'lockspan sweep' measures them again"
        )
    return (*run.notes, *(note for note in found if note not in run.notes))


def load_run(folder: Path) -> tuple[dict[str, Any], SweepRun]:
    """Return what run.json holds and the run it describes, its rows read from points/.

    Raises
    ------
    LockspanError
        If something stored is missing or damaged.
    """
    stored = read_run(folder)
    try:
        stored["sweep_path"] = str(folder / str(stored["sweep_path"]))
        keys = [(dict(entry), str(key)) for entry, key in stored["keys"]]
        run = decode_record(SweepRun, {**stored["run"], "points": []})
    except LockspanError as error:
        raise LockspanError(f"{folder}: run.json: {error}; run the sweep again") from error
    except (KeyError, TypeError, ValueError) as error:
        raise LockspanError(f"{folder}: run.json lacks {error}; run the sweep again") from error
    rows = tuple(_stored_point(folder, entry, key) for entry, key in keys)
    return stored, replace(run, points=rows)


def _stored_point(folder: Path, entry: Mapping[str, Any], key: str) -> PointResult:
    """Return one row of a stored run."""
    point = decode_record(PointResult, {**entry, "measurement": None})
    if not key:
        return point
    path = point_file(folder, point.file, key)
    outcome = read_point(path, key)
    if outcome is None:
        raise LockspanError(f"{path}: the stored result is missing or damaged; run the sweep again")
    measurement = outcome.get("measurement")
    if measurement is None:
        return point
    try:
        return replace(point, measurement=decode_record(Measurement, measurement))
    except LockspanError as error:
        raise LockspanError(f"{path}: {error}; run the sweep again") from error


def _current_plan(stored: Mapping[str, Any], old: SweepPlan, sweep_file: str | None) -> SweepPlan:
    """Return the plan to judge by, refused when it would have to be measured again."""
    path = Path(sweep_file) if sweep_file is not None else Path(str(stored["sweep_path"]))
    if sweep_file is None and not path.exists():
        return old
    plan = read_sweep_file(path)
    if sweep_file is None:
        # The same file, perhaps found from elsewhere: the report names it as before.
        plan = replace(plan, path=old.path, folder=old.folder)
    same = plan_task_parts(plan) == plan_task_parts(old)
    if not same or plan.points != old.points or plan.free_running != old.free_running:
        raise LockspanError(
            f"{path}: measuring rules, channels or points have changed since the run; "
            "run 'lockspan sweep' again"
        )
    return plan


def _stored_run(
    run: SweepRun, sweep_path: str, keys: Sequence[str], algorithm: str = ALGORITHM
) -> dict[str, Any]:
    """Return what run.json holds: the run without the measurements, and their keys."""
    rows = [
        [encode_record(replace(point, measurement=None)), key if point.measurement else ""]
        for point, key in zip(run.points, keys, strict=True)
    ]
    return {
        "sweep_path": sweep_path,
        "algorithm": algorithm,
        "run": encode_record(replace(run, points=())),
        "keys": rows,
    }


def _measure_free_runs(
    plan: SweepPlan,
) -> tuple[tuple[FreeRun, ...], tuple[InputFile, ...], tuple[str, ...]]:
    """Return the free-running results, their files, and a note for each that failed."""
    runs: list[FreeRun] = []
    inputs: list[InputFile] = []
    notes: list[str] = []
    for entry in plan.free_running:
        path = Path(plan.folder) / entry.file
        try:
            inputs.append(
                InputFile(
                    file=entry.file,
                    sha256=file_digest(path),
                    size_bytes=path.stat().st_size,
                )
            )
            runs.append(plan_free_run(plan, entry, path))
        except LockspanError as error:
            notes.append(f"free-running capture not used: {error}")
        except OSError as error:
            notes.append(f"free-running capture not used: {os_line(entry.file, error)}")
    return tuple(runs), tuple(inputs), tuple(notes)


def _rows(plan: SweepPlan) -> list[_Row]:
    """Return the rows of the table with digests; missing files and copies are barred."""
    rows: list[_Row] = []
    first: dict[str, str] = {}
    for entry in plan.points:
        names = tuple(filter(None, (entry.file, entry.driven_file)))
        paths = tuple(Path(plan.folder) / name for name in names)
        files: list[InputFile] = []
        refusal = ""
        for name, path in zip(names, paths, strict=True):
            try:
                size_bytes = path.stat().st_size
                files.append(InputFile(file=name, sha256=file_digest(path), size_bytes=size_bytes))
            except OSError as error:
                refusal = os_line(name, error)
                break
            refusal = refusal or _copy_of(files[-1], first)
        rows.append(_Row(entry=entry, paths=paths, files=tuple(files), refusal=refusal))
    return rows


def _copy_of(file: InputFile, first: dict[str, str]) -> str:
    """Return that a file's content was met before; remember it where it was not."""
    if file.sha256 in first:
        return f"{file.file}: has the same content as {first[file.sha256]}; it counts once"
    first[file.sha256] = file.file
    return ""


def _measure_rows(
    plan: SweepPlan,
    rows: Sequence[_Row],
    keys: Sequence[str],
    free_runs: tuple[FreeRun, ...],
    folder: Path,
    options: RunOptions,
    progress: Progress,
) -> list[Mapping[str, Any]]:
    """Return the outcome of every row, from the store where it is there already."""
    parts = plan_task_parts(plan)
    outcomes: list[Mapping[str, Any] | None] = [None] * len(rows)
    waiting: list[int] = []
    for index, row in enumerate(rows):
        if row.refusal:
            outcomes[index] = _refused("invalid", row.refusal)
            continue
        stored = None if options.fresh else _stored_outcome(folder, row, keys[index])
        outcomes[index] = stored
        if stored is None:
            waiting.append(index)
    done = len(rows) - len(waiting)
    progress(done, len(rows), "measuring captures")
    for index, outcome in _measured(rows, waiting, parts, free_runs, options):
        write_point(_file(folder, rows[index], keys[index]), keys[index], outcome)
        outcomes[index] = outcome
        done += 1
        progress(done, len(rows), "measuring captures")
    return [outcome for outcome in outcomes if outcome is not None]


def _stored_outcome(folder: Path, row: _Row, key: str) -> Mapping[str, Any] | None:
    """Return the stored result of a row, None where there is none that can be read back."""
    outcome = read_point(_file(folder, row, key), key)
    try:
        return outcome if outcome is None or _is_outcome(outcome) else None
    except LockspanError:
        return None


def _is_outcome(outcome: Mapping[str, Any]) -> bool:
    """Return whether what was stored is what a task gives; its measurement may still refuse."""
    measurement = outcome.get("measurement", "")
    if measurement is not None:
        decode_record(Measurement, measurement)
    known = ("ok", "undecided") if measurement is not None else ("invalid", "crashed")
    return outcome.get("status") in known and isinstance(outcome.get("message"), str)


def _measured(
    rows: Sequence[_Row],
    waiting: Sequence[int],
    parts: Mapping[str, Any],
    free_runs: tuple[FreeRun, ...],
    options: RunOptions,
) -> Iterator[tuple[int, Mapping[str, Any]]]:
    """Yield (row, outcome) as captures finish: in batches first, then the killers one by one."""
    size = batch_size(len(waiting))
    batches = [list(waiting[k : k + size]) for k in range(0, len(waiting), size)]
    while batches:
        tasks = [
            pair_task(
                [tuple(zip(rows[i].paths, rows[i].names, strict=True)) for i in batch],
                parts,
                free_runs,
            )
            for batch in batches
        ]
        execute = choose_executor(len(tasks), workers=options.workers, cluster=options.cluster)
        again: list[list[int]] = []
        for position, result in execute(measure_task, tasks):
            batch = batches[position]
            if result is not None:
                yield from zip(batch, result["outcomes"], strict=True)
            elif len(batch) > 1:
                again.extend([index] for index in batch)
            else:
                shown = " + ".join(rows[batch[0]].names)
                yield batch[0], _refused("crashed", f"{shown}: crashed the reader twice")
        batches = again


def _row_keys(plan: SweepPlan, rows: Sequence[_Row], free_runs: tuple[FreeRun, ...]) -> list[str]:
    """Return the key of each row's result; empty for a row whose file cannot be read."""
    parts = plan_task_parts(plan)
    return [
        _key("+".join(file.sha256 for file in row.files), parts, free_runs)
        if len(row.files) == len(row.names)
        else ""
        for row in rows
    ]


def _file(folder: Path, row: _Row, key: str) -> Path:
    return point_file(folder, row.entry.file, key)


def _key(sha256: str, parts: Mapping[str, Any], free_runs: Sequence[FreeRun]) -> str:
    """Return the key of a result: content, settings, free-running results, algorithm."""
    free = json_text([encode_record(run) for run in free_runs])
    return text_digest(ALGORITHM, sha256, json_text(dict(parts)), free)


def _refused(status: str, message: str) -> dict[str, Any]:
    return {"status": status, "message": message, "measurement": None}


def _point_result(row: _Row, outcome: Mapping[str, Any]) -> PointResult:
    """Return one row of the results."""
    measurement = outcome["measurement"]
    return PointResult(
        file=row.entry.file,
        driven_file=row.entry.driven_file,
        drive_hz=row.entry.drive_hz,
        level=row.entry.level,
        direction=row.entry.direction,
        status=outcome["status"],
        message=outcome["message"],
        sha256=row.sha256,
        driven_sha256=row.driven_sha256,
        extras=row.entry.extras,
        measurement=None if measurement is None else decode_record(Measurement, measurement),
    )


def _refuse_empty(points: Sequence[PointResult]) -> None:
    """Refuse a sweep of which nothing could be measured."""
    if any(point.measurement is not None for point in points):
        return
    first = points[0].message if points else "the table holds no row"
    raise CaptureError(f"none of {len(points)} captures could be measured; first: {first}")


def _settings_text(plan: SweepPlan, settings: Mapping[str, Any]) -> tuple[tuple[str, str], ...]:
    """Return the settings as a flat table of text for the report."""
    flat: list[tuple[str, str]] = [("sweep file digest", plan.text_sha256)]

    def walk(prefix: str, value: Any) -> None:
        if isinstance(value, Mapping):
            for name in sorted(value):
                walk(f"{prefix}.{name}" if prefix else name, value[name])
        else:
            flat.append((prefix, json_text(value).strip()))

    walk("", settings)
    return tuple(flat)
