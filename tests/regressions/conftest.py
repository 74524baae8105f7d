"""Fixtures of the tests of old faults: small valid records of the reports."""

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


@pytest.fixture(scope="session")
def campaign_tools() -> ModuleType:
    """The module that writes small campaigns: campaign_tools.write_campaign() ..."""
    name = "helpers_campaign"
    if name not in sys.modules:
        spec = importlib.util.spec_from_file_location(name, HELPERS.with_name(f"{name}.py"))
        module = importlib.util.module_from_spec(spec)
        sys.modules[name] = module
        spec.loader.exec_module(module)
    return sys.modules[name]


@pytest.fixture(scope="session")
def campaign(tmp_path_factory: pytest.TempPathFactory, campaign_tools: ModuleType) -> Path:
    """The sweep file of a campaign of seven captures; tests copy what they change."""
    return campaign_tools.write_campaign(tmp_path_factory.mktemp("campaign"))
