"""The built-in campaign run end to end, as ``lockspan demo`` does it."""

from __future__ import annotations

import shutil
from pathlib import Path

from reports.demo import write_demo
from reports.folder import FolderError
from reports.outputs import RunOutcome
from reports.progress import Progress
from reports.runs import RunOptions, run_sweep

CAMPAIGN, REPORT = "campaign", "report"


def run_demo(
    folder: Path, *, faulty: bool, overwrite: bool, options: RunOptions, progress: Progress
) -> RunOutcome:
    """Write the captures of the built-in campaign, then sweep them.

    Parameters
    ----------
    folder : path; ``campaign`` and ``report`` are made in it
    faulty : bool, an item that does not meet its limits
    overwrite : bool, replace what an earlier demo left
    options : RunOptions
    progress : function of (done, total, text)

    Raises
    ------
    FolderError
        If the folder holds something already and ``overwrite`` is off.
    """
    for name in (CAMPAIGN, REPORT):
        if (folder / name).exists():
            if not overwrite:
                raise FolderError(f"{folder / name}: is there already; give --overwrite")
            shutil.rmtree(folder / name)
    (folder / CAMPAIGN).mkdir(parents=True)
    progress(0, 1, "simulating captures")
    sweep_path = write_demo(
        folder / CAMPAIGN, faulty=faulty, seed=options.seed, date=options.date_text
    )
    progress(1, 1, "simulating captures")
    return run_sweep(sweep_path, folder / REPORT, options, progress)
