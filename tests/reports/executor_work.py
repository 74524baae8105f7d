"""Work for the executor tests: a module of its own, so that a fresh process can import it."""

from __future__ import annotations

import os
from collections.abc import Mapping
from typing import Any


def double(task: Mapping[str, Any]) -> dict[str, Any]:
    """Return twice the value and the arithmetic threads; or die, as a bad reader might."""
    if task.get("die"):
        os._exit(7)
    return {"value": 2 * task["value"], "threads": os.environ.get("OPENBLAS_NUM_THREADS")}
