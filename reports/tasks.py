"""What executors pass on: plain dictionaries, so that any process or machine can take them."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

Task = Mapping[str, Any]
Outcome = Mapping[str, Any]
Work = Callable[[Task], Outcome]
