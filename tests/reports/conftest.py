"""Fixtures shared by the tests of the reports room."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import pytest

HELPERS = Path(__file__).resolve().parent.parent / "helpers_reports.py"


@pytest.fixture(scope="session")
def made() -> ModuleType:
    """The module of small valid records: made.make_run(), made.make_measurement() ..."""
    name = "helpers_reports"
    if name not in sys.modules:
        spec = importlib.util.spec_from_file_location(name, HELPERS)
        module = importlib.util.module_from_spec(spec)
        sys.modules[name] = module
        spec.loader.exec_module(module)
    return sys.modules[name]
