"""Whether a stored run still holds: digests of its inputs, verdicts, and the files it left.

``verify_folder`` loads a run and says the outcome in words; the rest compares records.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from reports.exports import points_csv, sweep_json
from reports.folder import OUTPUT_FILES
from reports.judging import judge_run
from reports.junit import junit_xml, value_words
from reports.provenance import file_digest
from reports.records import InputFile, SweepRun, Verdict
from reports.store import json_text
from rig.errors import LockspanError
from rig.sweepfile import read_sweep_file

EXIT_HOLDS, EXIT_DIFFERS = 0, 3
_NOT_FOUND = "not found"


@dataclass(frozen=True, slots=True, kw_only=True)
class Difference:
    """One thing that is not as the run recorded it: what, as recorded, and as found now."""

    subject: str
    recorded: str
    found: str

    @property
    def text(self) -> str:
        """One line for people."""
        return f"{self.subject}: recorded {self.recorded}, found {self.found}"


def verify_folder(folder: Path) -> tuple[str, int]:
    """Return what differs from a stored run in words, and the exit code.

    Parameters
    ----------
    folder : path of the folder of a sweep

    Raises
    ------
    LockspanError
        If the folder does not hold a run that can be read.
    """
    from reports.runs import load_run  # brings in the whole measuring chain

    stored, run = load_run(folder)
    found = verify_run(folder, run, Path(str(stored["sweep_path"])))
    inputs = len(run.provenance.inputs)
    if not found:
        told = f"{folder}: inputs {inputs}, verdicts {len(run.verdicts)}: all as recorded"
        return told, EXIT_HOLDS
    lines = [difference.text for difference in found]
    lines.append(f"{folder}: {len(found)} differences from what was recorded")
    return "\n".join(lines), EXIT_DIFFERS


def verify_run(folder: Path, run: SweepRun, sweep_path: Path) -> tuple[Difference, ...]:
    """Return everything that differs from what a run recorded; nothing when it holds.

    Parameters
    ----------
    folder : path of the folder of the run
    run : SweepRun, as read back from the folder
    sweep_path : path of its sweep file; inputs are named relative to its folder

    Notes
    -----
    The digests of all inputs and of the sweep file are recomputed, the limits judged again
    from the stored points, and the files for programs compared with what they would be now.
    """
    again = judge_run(run.plan, run.points, run.free_runs, run.provenance, run.notes)
    return (
        *input_differences(
            run.provenance.inputs, _digests(sweep_path.parent, run.provenance.inputs)
        ),
        *_sweep_file_differences((Path(run.plan.path), sweep_path), run),
        *verdict_differences(run, again),
        *_output_differences(folder, again),
    )


def input_differences(
    inputs: Sequence[InputFile], digests: Mapping[str, str]
) -> tuple[Difference, ...]:
    """Return the inputs whose digest is not the recorded one.

    Parameters
    ----------
    inputs : sequence of InputFile, as recorded
    digests : mapping of file name to the SHA-256 found now; a missing file has none
    """
    return tuple(
        Difference(
            subject=f"input {one.file}",
            recorded=f"SHA-256 {one.sha256}",
            found=f"SHA-256 {digests[one.file]}" if one.file in digests else _NOT_FOUND,
        )
        for one in inputs
        if digests.get(one.file) != one.sha256
    )


def verdict_differences(recorded: SweepRun, again: SweepRun) -> tuple[Difference, ...]:
    """Return the verdicts that come out otherwise when the limits are judged again.

    Parameters
    ----------
    recorded : SweepRun with the verdicts as stored
    again : the same run, judged now
    """
    before = {verdict.limit.name: verdict for verdict in recorded.verdicts}
    after = {verdict.limit.name: verdict for verdict in again.verdicts}
    told = [
        Difference(
            subject=f"limit '{name}'",
            recorded=_verdict_text(before.get(name)),
            found=_verdict_text(after.get(name)),
        )
        for name in [*before, *(name for name in after if name not in before)]
    ]
    told.append(
        Difference(subject="overall verdict", recorded=recorded.verdict, found=again.verdict)
    )
    return tuple(one for one in told if one.recorded != one.found)


def _verdict_text(verdict: Verdict | None) -> str:
    if verdict is None:
        return "no such limit"
    return f"{verdict.verdict} ({value_words(verdict)})"


def _digests(base: Path, inputs: Sequence[InputFile]) -> dict[str, str]:
    """Return the digests of those inputs that can be read, by their names."""
    found = {}
    for one in inputs:
        try:
            found[one.file] = file_digest(base / one.file)
        except OSError:
            continue  # a missing file has no digest, which is reported as not found
    return found


def _sweep_file_differences(paths: Sequence[Path], run: SweepRun) -> tuple[Difference, ...]:
    """Return whether no sweep file is the one judged by: that of the run or of a later report."""
    recorded = f"SHA-256 {run.plan.text_sha256}"
    found = [_sweep_digest(path) for path in paths]
    if recorded in found:
        return ()
    told = next((text for text in found if text != _NOT_FOUND), _NOT_FOUND)
    name = Path(run.plan.path).name
    return (Difference(subject=f"sweep file {name}", recorded=recorded, found=told),)


def _sweep_digest(path: Path) -> str:
    try:
        return f"SHA-256 {read_sweep_file(path).text_sha256}"
    except (LockspanError, OSError):
        return "unreadable" if path.exists() else _NOT_FOUND


def _output_differences(folder: Path, again: SweepRun) -> tuple[Difference, ...]:
    """Return the written files that are missing or not what the stored points give now."""
    expected = {
        "results.json": json_text(sweep_json(again), indent=1),
        "points.csv": points_csv(again),
        "junit.xml": junit_xml(again),
    }
    found = []
    for name in OUTPUT_FILES:
        path = folder / name
        if not path.is_file():
            found.append(Difference(subject=name, recorded="written", found=_NOT_FOUND))
        elif name in expected and path.read_bytes() != expected[name].encode("utf-8"):
            found.append(
                Difference(subject=name, recorded="as the stored points give it", found="changed")
            )
    return tuple(found)
