"""Fixtures shared by the tests of the fitting room."""

from __future__ import annotations

import importlib.util
from pathlib import Path
from types import ModuleType

import pytest

HELPERS = Path(__file__).resolve().parent.parent / "helpers_region.py"


@pytest.fixture(scope="session")
def sweeps() -> ModuleType:
    """The module that simulates sweeps: sweeps.sweep(), sweeps.integrate() ..."""
    spec = importlib.util.spec_from_file_location("helpers_region", HELPERS)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module
