"""The folder of a sweep."""

from __future__ import annotations

from pathlib import Path

import pytest

from reports.folder import (
    FolderError,
    point_file,
    prepare_folder,
    read_point,
    read_run,
    write_point,
    write_run,
)


def test_a_folder_with_other_content_is_refused(tmp_path: Path) -> None:
    """Results must not land among somebody's photographs."""
    (tmp_path / "holiday.jpg").write_bytes(b"x")
    with pytest.raises(FolderError, match=r"holiday\.jpg"):
        prepare_folder(tmp_path)


def test_a_file_in_place_of_the_folder_is_refused(tmp_path: Path) -> None:
    """--out names a folder."""
    target = tmp_path / "out"
    target.write_text("x")
    with pytest.raises(FolderError, match="is a file"):
        prepare_folder(target)


def test_a_stored_point_is_read_back_only_under_its_own_key(tmp_path: Path) -> None:
    """A result of other settings must never be taken for this one."""
    prepare_folder(tmp_path)
    path = point_file(tmp_path, "run 1.wav", "a" * 64)
    write_point(path, "a" * 64, {"status": "ok"})
    assert read_point(path, "a" * 64) == {"key": "a" * 64, "status": "ok"}
    assert read_point(path, "b" * 64) is None


@pytest.mark.parametrize("content", [b"", b"{", b"[]", b"\xff\xfe", b'{"key": 1}'])
def test_a_damaged_stored_point_counts_as_not_there(tmp_path: Path, content: bytes) -> None:
    """A disk that was full must not stop the next run."""
    path = tmp_path / "p.json"
    path.write_bytes(content)
    assert read_point(path, "k") is None


@pytest.mark.parametrize("name", ["run[/red]ü 1.wav", "../../etc/passwd", "a" * 300, ".."])
def test_hostile_names_stay_inside_the_folder(tmp_path: Path, name: str) -> None:
    """A file name is text, not a path of ours."""
    path = point_file(tmp_path, name, "k" * 64)
    assert path.parent == tmp_path / "points"
    assert len(path.name) < 100


def test_run_file_round_trip_and_its_absence(tmp_path: Path) -> None:
    """`report` on a folder without a run says so in one line."""
    write_run(tmp_path, {"keys": []})
    assert read_run(tmp_path) == {"keys": []}
    with pytest.raises(FolderError, match=r"no run\.json"):
        read_run(tmp_path / "nowhere")
    (tmp_path / "run.json").write_text("[1")
    with pytest.raises(FolderError, match="cannot be read"):
        read_run(tmp_path)
