"""A capture looked at: one screen for a person, JSON for a script, an overview as a picture."""

from __future__ import annotations

import io
import json
from collections.abc import Iterator, Sequence
from pathlib import Path

import jsonschema
import numpy as np
import pytest

import reports as schema_folder
from reports.figures.overview import draw_overview
from reports.inspection import (
    Inspection,
    duration_text,
    inspect_capture,
    inspection_json,
    inspection_text,
)
from rig.captures import Capture, CaptureChannel

TIME_S = np.arange(40_000) / 1000.0


def faulty_pair() -> np.ndarray:
    """Return a clipped channel, and one with a gap, mains pick-up and a leak."""
    rng = np.random.default_rng(4)
    left = np.clip(1.3 * np.sin(2 * np.pi * 21.3 * TIME_S), -1.25, 1.25)
    right = np.sin(2 * np.pi * 23.1 * TIME_S) + 0.2 * np.sin(2 * np.pi * 21.3 * TIME_S)
    right += 0.15 * np.sin(2 * np.pi * 50.01 * TIME_S) + 0.01 * rng.standard_normal(TIME_S.size)
    right[20_000:21_000] = np.nan
    return np.array([left, right])


def capture_of(rows: np.ndarray, names: Sequence[str] = ("left", "right")) -> Capture:
    """Return a capture of rows of samples."""

    def source(
        columns: Sequence[int], block_frames: int, start: int, stop: int
    ) -> Iterator[np.ndarray]:
        for first in range(start, stop, block_frames):
            yield rows[list(columns), first : min(first + block_frames, stop)]

    return Capture(
        path="bench/run[red]ü 1.wav",
        format="wav",
        rate_hz=1000.0,
        rate_u_hz=0.0021,
        frame_count=rows.shape[1],
        channels=tuple(CaptureChannel(name=name, unit="V") for name in names),
        source=source,
        start_text="2026-11-30 09:12",
        notes=tuple(f"note number {number}" for number in range(8)),
    )


@pytest.fixture(scope="module")
def inspection() -> Inspection:
    """The inspection of the faulty pair."""
    return inspect_capture(capture_of(faulty_pair()))


def test_the_text_is_one_screen_with_facts_levels_and_faults(inspection: Inspection) -> None:
    """An engineer sees at the bench whether to record again."""
    text = inspection_text(inspection)
    assert len(text.splitlines()) <= 24
    for words in (
        "bench/run[red]ü 1.wav\n  format    wav\n",
        "rate      1000 Hz (standard uncertainty 0.0021 Hz)",
        "length    40 s, 40000 frames, 2 channels",
        "started   2026-11-30 09:12",
        "1 left   V      -1.25     1.25",
        "further lines, channel 2: 21.3",
        " Hz (mains, 0.15x)",
        "fault:   channel 1 'left': ",
        "warning: channel 2 'right': gap at 20 to 21 s",
        "note:    and 3 more",
    ):
        assert words in text


def test_faults_stand_before_warnings(inspection: Inspection) -> None:
    """What spoils the result is read first."""
    grades = [fault.severity for fault in inspection.faults]
    assert grades == sorted(grades)
    assert inspection.faults[0].name == "clipped"


def test_the_json_holds_the_same_and_is_json(inspection: Inspection) -> None:
    """A script must find every number that a person sees, and no NaN."""
    value = json.loads(json.dumps(inspection_json(inspection), allow_nan=False))
    assert value["schema"] == "lockspan.inspection/1.0"
    assert value["capture"]["duration_s"] == 40.0
    assert len(value["capture"]["notes"]) == 8
    left, right = value["channels"]
    assert (left["number"], left["name"], left["highest"]) == (1, "left", 1.25)
    assert right["frequency_hz"] == pytest.approx(23.1, abs=0.01)
    assert right["gaps"] == [{"start_s": 20.0, "stop_s": 21.0}]
    assert right["crosstalk"]["ratio"] == pytest.approx(0.2, rel=0.05)
    names = [fault["name"] for fault in right["faults"]]
    assert names == ["missing", "mains", "crosstalk"]
    assert all(fault["reason"] for fault in right["faults"])
    assert [line["kind"] for line in right["lines"]][:3] == ["own", "partner", "mains"]


def test_the_json_follows_its_published_schema(inspection: Inspection) -> None:
    """Scripts of others are written against the schema, not against an example."""
    path = Path(schema_folder.__file__).parent / "schema" / "lockspan.inspection-1.0.json"
    schema = json.loads(path.read_text(encoding="utf-8"))
    dead = inspect_capture(capture_of(np.array([np.full(2000, np.nan), np.zeros(2000)])))
    for found in (inspection, dead):
        jsonschema.validate(inspection_json(found), schema)


def test_a_dead_channel_gives_null_and_a_dash() -> None:
    """A number that is not there is never written as NaN."""
    rows = np.array([np.full(2000, np.nan), np.zeros(2000)])
    inspection = inspect_capture(capture_of(rows))
    value = json.loads(json.dumps(inspection_json(inspection), allow_nan=False))
    assert value["channels"][0]["highest"] is None
    assert value["channels"][1]["frequency_hz"] is None
    assert "nan" not in inspection_text(inspection).lower()
    draw_overview(capture_of(rows), inspection)


def test_a_clean_capture_says_that_nothing_is_wrong() -> None:
    """Silence could also mean that nothing was looked at."""
    rng = np.random.default_rng(4)
    rows = np.array([np.sin(2 * np.pi * hz * TIME_S) for hz in (21.3, 23.1)])
    clean = inspect_capture(capture_of(rows + 0.01 * rng.standard_normal(rows.shape)))
    assert "nothing wrong found" in inspection_text(clean)


def test_the_overview_names_channels_lines_and_faults(inspection: Inspection) -> None:
    """The picture goes into a mail without its text: it must speak for itself."""
    figure = draw_overview(capture_of(faulty_pair()), inspection)
    texts = " ".join(
        text.get_text() for text in (*figure.texts, *(t for a in figure.axes for t in a.texts))
    )
    for words in (
        "run[red]ü 1.wav",
        "channel 1 'left' – fault: clipped",
        "channel 2 'right' – warning: missing, mains, crosstalk",
        "21.3 Hz, own line",
        "50.01 Hz, mains",
        "harmonic 3",
    ):
        assert words in texts
    assert len(figure.axes) == 4


def test_the_overview_is_drawn_for_many_and_odd_channels() -> None:
    """Sixty channels must not make a picture of six metres, nor a dollar sign a formula."""
    rows = np.tile(np.sin(0.3 * np.arange(4000)), (12, 1)) + 0.1 * np.eye(12, 4000)
    capture = capture_of(rows, [f"ch $x_{{{number}}}$ 漢" for number in range(12)])
    figure = draw_overview(capture, inspect_capture(capture))
    assert len(figure.axes) == 16
    assert "4 more channels not drawn" in " ".join(text.get_text() for text in figure.texts)
    figure.savefig(io.BytesIO(), format="svg", metadata={"Date": None})


@pytest.mark.parametrize("frames", [1, 3, 40])
def test_a_tiny_capture_is_looked_at_without_a_crash(frames: int) -> None:
    """A recorder stopped at once still leaves a file."""
    capture = capture_of(faulty_pair()[:, :frames])
    found = inspect_capture(capture)
    assert inspection_text(found)
    json.dumps(inspection_json(found), allow_nan=False)
    draw_overview(capture, found).savefig(io.BytesIO())


def test_long_times_are_also_given_in_hours() -> None:
    """Nobody knows at sight how long 5025 s are."""
    assert duration_text(5025.0) == "5025 s (1 h 23 min 45 s)"
    assert duration_text(12.5) == "12.5 s"
