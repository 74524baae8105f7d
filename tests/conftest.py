"""Shared helpers of the tests."""

from __future__ import annotations

import importlib.util
import json
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest

ROOT = Path(__file__).resolve().parent.parent


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """Leave long tests out unless they are asked for by marker."""
    if config.option.markexpr:
        return
    kept = [item for item in items if "long" not in item.keywords]
    left = [item for item in items if "long" in item.keywords]
    if left:
        config.hook.pytest_deselected(items=left)
        items[:] = kept


@pytest.fixture
def rng() -> np.random.Generator:
    """A seeded source of chance; tests that need several draw from this one."""
    return np.random.default_rng(20261201)


@pytest.fixture(scope="session")
def check_tables() -> dict:
    """The project's own copy of computed reference values (see fixtures/README.md)."""
    return json.loads((ROOT / "fixtures" / "check_tables.json").read_text(encoding="utf-8"))


@pytest.fixture(scope="session")
def psi_tools() -> ModuleType:
    """Records and simulations of psi shared by tests (tests/helpers_psi.py)."""
    spec = importlib.util.spec_from_file_location("helpers_psi", ROOT / "tests" / "helpers_psi.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module
