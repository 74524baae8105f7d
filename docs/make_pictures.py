"""Write the pictures of the README from a run of the built-in demonstration.

    python docs/make_pictures.py demo-run/report

The pictures are those of the report, drawn by its own functions at a fixed resolution, without
date or version in the file, so that one run always gives the same bytes.
"""

from __future__ import annotations

import io
import sys
from pathlib import Path

from reports.figures.canvas import Picture
from reports.figures.catalogue import picture_of
from reports.look import drawing_style
from reports.runs import load_run
from reports.store import write_atomic

PICTURES = {"region": "region.png", "staircase": "staircase.png", "worst": "record.png"}
DOTS_PER_INCH = 140.0
MOST_BYTES = 120_000  # a page with all three must stay light


def png_bytes(picture: Picture) -> bytes:
    """Return a picture as PNG, the same bytes for the same picture."""
    figure, buffer = picture.figure(), io.BytesIO()
    with drawing_style():
        bare = {"Software": None, "Creation Time": None}
        figure.savefig(buffer, format="png", dpi=DOTS_PER_INCH, metadata=bare)
    return buffer.getvalue()


def write_pictures(run_folder: Path, folder: Path) -> None:
    """Write the pictures of a stored run into a folder; refuse one that is too heavy."""
    _, run = load_run(run_folder)
    for key, name in PICTURES.items():
        data = png_bytes(picture_of(run, key))
        if len(data) > MOST_BYTES:
            raise SystemExit(f"{name}: {len(data)} bytes, at most {MOST_BYTES}. Draw less.")
        write_atomic(folder / name, data)


if __name__ == "__main__":
    if len(sys.argv) != 2:
        raise SystemExit("usage: python docs/make_pictures.py RUN_FOLDER")
    write_pictures(Path(sys.argv[1]), Path(__file__).parent)
