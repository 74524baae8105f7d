"""Drafts of folders whose file names hold more than text; each names the symptom."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import soundfile

from reports.draft import write_draft


def test_a_name_with_a_line_end_keeps_to_its_line(tmp_path: Path) -> None:
    """Used to break the line 'left out: ...' in two, the second as if the program said it."""
    time_s = np.arange(4000) / 2000
    waves = np.stack([np.cos(600 * time_s), np.cos(630 * time_s)], axis=1)
    for name in ("a.wav", "b.wav"):
        soundfile.write(tmp_path / name, 0.4 * waves, 2000, subtype="PCM_24")
        waves = waves + 0.01
    (tmp_path / "bad\nleft out: nothing.wav").write_bytes(b"")
    told = [line for line in write_draft(tmp_path).splitlines() if line.startswith("left out")]
    assert len(told) == 1
    assert "bad left out: nothing.wav: is empty" in told[0]
