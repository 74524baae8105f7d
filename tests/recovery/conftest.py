"""Fixtures shared by the recovery tests."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import pytest

HELPERS = Path(__file__).resolve().parent.parent / "helpers_rigs.py"


@pytest.fixture(scope="session")
def rigs() -> ModuleType:
    """The module that turns simulated rigs into captures: rigs.measured(), rigs.pair_of() ..."""
    name = "helpers_rigs"
    if name not in sys.modules:
        spec = importlib.util.spec_from_file_location(name, HELPERS)
        module = importlib.util.module_from_spec(spec)
        sys.modules[name] = module
        spec.loader.exec_module(module)
    return sys.modules[name]
