"""Shared helpers of the tests."""

from __future__ import annotations

import importlib
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


def _helper(name: str) -> ModuleType:
    """Return a module of helpers by name; one copy of each serves all tests."""
    return importlib.import_module(name)


@pytest.fixture(scope="session")
def psi_tools() -> ModuleType:
    """Records and simulations of psi (tests/helpers_psi.py)."""
    return _helper("helpers_psi")


@pytest.fixture(scope="session")
def truth() -> ModuleType:
    """The noisy phase equation integrated step by step (tests/helpers_adler.py)."""
    return _helper("helpers_adler")


@pytest.fixture(scope="session")
def sweeps() -> ModuleType:
    """Simulated sweeps: sweeps.sweep(), sweeps.integrate() ... (tests/helpers_region.py)."""
    return _helper("helpers_region")


@pytest.fixture(scope="session")
def rigs() -> ModuleType:
    """Simulated rigs as captures: rigs.measured(), rigs.pair_of() ... (tests/helpers_rigs.py)."""
    return _helper("helpers_rigs")


@pytest.fixture(scope="session")
def slow() -> ModuleType:
    """Slow, obvious versions of the phase estimators (tests/rig/reference_phase.py)."""
    return _helper("reference_phase")


@pytest.fixture(scope="session")
def made() -> ModuleType:
    """Small valid records: made.make_run(), made.make_measurement() ... (helpers_reports.py)."""
    return _helper("helpers_reports")


@pytest.fixture(scope="session")
def campaign_tools() -> ModuleType:
    """The module that writes small campaigns: campaign_tools.write_campaign() ..."""
    return _helper("helpers_campaign")


@pytest.fixture(scope="session")
def campaign(tmp_path_factory: pytest.TempPathFactory, campaign_tools: ModuleType) -> Path:
    """The sweep file of a campaign of seven captures; tests copy what they change."""
    return campaign_tools.write_campaign(tmp_path_factory.mktemp("campaign"))
