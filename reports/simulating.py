"""A simulated capture with known truth, as the command ``simulate`` writes it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from reports.options import UsageError
from reports.simulations import write_simulation
from rig.synthetic.rigs import RIGS


def simulate_file(
    rig: str,
    out: str,
    *,
    duration_s: float | None,
    rate_hz: float | None,
    seed: int,
    settings: Sequence[str],
) -> tuple[str, dict[str, Any]]:
    """Return (text, truth) of a capture that was simulated and written.

    Parameters
    ----------
    rig : str, a name of RIGS, or "list" to name them
    out : str, file to write
    duration_s, rate_hz : float or None
    seed : int
    settings : sequence of "NAME=VALUE"

    Raises
    ------
    UsageError
        If the rig is not known, no file is named, or a setting is not NAME=NUMBER.
    CaptureError
        If the rig refuses a setting or the format is not known.
    """
    if rig == "list":
        return "".join(f"{name}\n" for name in sorted(RIGS)), {"rigs": sorted(RIGS)}
    if rig not in RIGS:
        raise UsageError(f"simulate: no rig '{rig}'; rigs are {', '.join(sorted(RIGS))}")
    if not out:
        raise UsageError("simulate: name the capture to write (.wav, .csv or .npy)")
    options = dict(_setting(text) for text in settings)
    truth = write_simulation(
        rig, Path(out), duration_s=duration_s, rate_hz=rate_hz, seed=seed, options=options
    )
    lines = [f"{out} and {out}.truth.json written"]
    facts: Any = truth["truth"]
    lines += [f"  {fact['name']} = {fact['value']:.9g} {fact['unit']}".rstrip() for fact in facts]
    return "\n".join(lines) + "\n", truth


def _setting(text: str) -> tuple[str, float]:
    """Return (name, value) of "NAME=VALUE"."""
    name, mark, value = text.partition("=")
    try:
        number = float(value)
    except ValueError:
        number = math.nan
    if not mark or not name or not math.isfinite(number):
        raise UsageError(f"--set: needs NAME=NUMBER, got '{text}'")
    return name.strip(), number
