"""The fuzz targets at the size of a test: a few inputs each here, many among the long tests."""

from __future__ import annotations

import importlib.util
import subprocess
import sys
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest

from rig.readers import READERS

FOLDER = Path(__file__).parent
INPUTS = 150  # enough to show a target that has stopped working; finding faults takes millions
INPUTS_LONG = 20_000


def module_of(name: str) -> ModuleType:
    """A module of this folder, which is no package."""
    spec = importlib.util.spec_from_file_location(name, FOLDER / f"{name}.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture
def modules(monkeypatch: pytest.MonkeyPatch) -> tuple[ModuleType, ModuleType]:
    """Engines and targets."""
    monkeypatch.setattr(sys, "path", list(sys.path))
    return module_of("fuzz_readers"), module_of("fuzz_targets")


def test_every_reader_has_a_target(modules: tuple[ModuleType, ModuleType]) -> None:
    """A reader that nobody fuzzes is the one that breaks."""
    engines, targets = modules
    assert set(engines.NAMES) == set(targets.SUFFIXES) == set(READERS)


@pytest.mark.parametrize("name", READERS)
def test_a_few_damaged_inputs_are_read_or_refused(
    tmp_path: Path, name: str, modules: tuple[ModuleType, ModuleType]
) -> None:
    """The seeds themselves must be readable, or every input would end at the door."""
    engines, targets = modules
    target, seeds = targets.Target(name, str(tmp_path)), targets.seeds_of(name)
    stated = [seed + b"\0" * (-len(seed) % 3) for seed in seeds if name != "csv"] or seeds
    assert sum(target(seed) for seed in stated) > 0
    rng = np.random.default_rng(11)
    for _ in range(INPUTS):
        target(engines.mutated(rng, seeds))


def test_a_fault_is_kept_once_with_its_input(
    tmp_path: Path, modules: tuple[ModuleType, ModuleType], monkeypatch: pytest.MonkeyPatch
) -> None:
    """A fuzzer that cannot see a fault finds none: a reader is made to fail."""
    engines, targets = modules

    def fail(*_: object, **__: object) -> None:
        raise ZeroDivisionError("made to fail")

    monkeypatch.setattr(targets, "open_capture", fail)
    monkeypatch.setitem(sys.modules, "fuzz_targets", targets)
    tally = engines.Tally(tmp_path / "tally")
    watched = engines.Watched("npy", str(tmp_path), tally)
    for data in (b"one", b"two"):
        watched(data)
    assert [tally.get(name) for name in engines.COUNTS] == [2, 0, 1]
    kept = list(tmp_path.glob("npy-ZeroDivisionError-*"))
    assert [path.read_bytes() for path in kept] == [b"one"]


@pytest.mark.long
@pytest.mark.parametrize("name", READERS)
def test_many_damaged_inputs_are_read_or_refused(tmp_path: Path, name: str) -> None:
    """In a process of its own: the libraries behind some formats can end it."""
    command = [sys.executable, str(FOLDER / "fuzz_readers.py"), name, "--own", str(INPUTS_LONG)]
    command += ["--keep", str(tmp_path)]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    assert done.stdout.strip().endswith("| 0 | 0 |"), done.stdout[-2000:]
