"""Simulated captures as files: sound or delimited samples, and a JSON of what is true of them."""

from __future__ import annotations

import io
import json
from collections.abc import Callable, Mapping
from pathlib import Path

import numpy as np

from reports.store import write_atomic
from rig.arrays import FloatArray
from rig.errors import CaptureError
from rig.synthetic.records import SimulatedCapture

HEADROOM = 1.25  # full scale over the largest sample, so that nothing clips


def write_sound(
    path: Path, samples: FloatArray, rate_hz: float, *, volts_per_full_scale: float
) -> None:
    """Write samples as a 24-bit WAV file; ``volts_per_full_scale`` becomes 1.0 in it.

    Parameters
    ----------
    path : Path
    samples : array, shape (channels, frames), in sample unit
    rate_hz : float, Hz, a whole number
    volts_per_full_scale : float, sample unit, above the largest sample

    Raises
    ------
    CaptureError
        If a sample would clip or the rate is not a whole number.
    OSError
        If the file cannot be written.
    """
    path.write_bytes(_sound_bytes(path, samples, rate_hz, volts_per_full_scale))


def _sound_bytes(
    path: Path, samples: FloatArray, rate_hz: float, volts_per_full_scale: float
) -> bytes:
    import soundfile  # the format library loads only when a sound file is written

    peak = float(np.max(np.abs(samples)))
    if not peak < volts_per_full_scale:
        raise CaptureError(
            f"{path}: samples reach {peak:.4g}, full scale is {volts_per_full_scale:.4g}; "
            "state a larger full scale"
        )
    if rate_hz != round(rate_hz):
        raise CaptureError(f"{path}: a WAV file needs a whole rate in Hz, got {rate_hz}; use .csv")
    out = io.BytesIO()
    soundfile.write(
        out, samples.T / volts_per_full_scale, round(rate_hz), format="WAV", subtype="PCM_24"
    )
    return out.getvalue()


def _wav_bytes(path: Path, capture: SimulatedCapture) -> tuple[bytes, dict[str, object]]:
    full_scale = HEADROOM * float(np.max(np.abs(capture.samples)))
    data = _sound_bytes(path, capture.samples, capture.rate_hz, full_scale)
    return data, {"units_per_full_scale": full_scale}


def _csv_bytes(path: Path, capture: SimulatedCapture) -> tuple[bytes, dict[str, object]]:
    time_s = np.arange(capture.samples.shape[1]) / capture.rate_hz
    columns = zip(capture.channels, capture.units, strict=True)
    heads = ["time [s]", *(f"{name} [{unit}]" for name, unit in columns)]
    table = np.vstack([time_s, capture.samples]).T
    out = io.StringIO()
    np.savetxt(out, table, fmt="%.9g", delimiter=",", header=",".join(heads), comments="")
    return out.getvalue().encode("utf-8"), {}


def _npy_bytes(path: Path, capture: SimulatedCapture) -> tuple[bytes, dict[str, object]]:
    out = io.BytesIO()
    np.save(out, capture.samples.T)
    return out.getvalue(), {}


SAMPLE_WRITERS: dict[str, Callable[[Path, SimulatedCapture], tuple[bytes, dict[str, object]]]] = {
    ".wav": _wav_bytes,
    ".csv": _csv_bytes,
    ".npy": _npy_bytes,
}


def write_capture(path: Path, capture: SimulatedCapture, *, seed: int) -> dict[str, object]:
    """Write a simulated capture and, beside it, FILE.truth.json; return that truth.

    Parameters
    ----------
    path : Path, its suffix picks the format: .wav, .csv or .npy
    capture : SimulatedCapture
    seed : int, echoed in the truth

    Raises
    ------
    CaptureError
        If the suffix is not one of these, the folder is not there, or the samples do not
        fit the format.
    OSError
        If a file cannot be written.
    """
    check_target(path)
    data, extra = SAMPLE_WRITERS[path.suffix.lower()](path, capture)
    truth = _truth_table(path, capture, seed) | extra
    text = json.dumps(truth, indent=2, ensure_ascii=False, allow_nan=False) + "\n"
    write_atomic(path, data)
    write_atomic(path.with_name(path.name + ".truth.json"), text.encode("utf-8"))
    return truth


def check_target(path: Path) -> None:
    """Refuse a file of unknown format or in a folder that is not there.

    Raises
    ------
    CaptureError
        If either is so.
    """
    if path.suffix.lower() not in SAMPLE_WRITERS:
        raise CaptureError(
            f"{path}: cannot write '{path.suffix}'; formats are {', '.join(SAMPLE_WRITERS)}"
        )
    if not path.parent.is_dir():
        raise CaptureError(f"{path}: folder '{path.parent}' is not there; make it first")


def _truth_table(path: Path, capture: SimulatedCapture, seed: int) -> dict[str, object]:
    return {
        "schema": "lockspan.truth/1.0",
        "file": path.name,
        "rig": capture.rig,
        "seed": seed,
        "rate_hz": capture.rate_hz,
        "channels": [
            {"name": name, "unit": unit}
            for name, unit in zip(capture.channels, capture.units, strict=True)
        ],
        "truth": [
            {"name": name, "value": value, "unit": unit} for name, value, unit in capture.truth
        ],
    }


def write_simulation(
    rig: str,
    path: Path,
    *,
    duration_s: float | None,
    rate_hz: float | None,
    seed: int,
    options: Mapping[str, float],
) -> dict[str, object]:
    """Simulate a rig, write its capture and truth, and return the truth.

    Parameters
    ----------
    rig : str, a name of ``rig.synthetic.rigs.RIGS``
    path : Path, .wav, .csv or .npy; the truth goes to FILE.truth.json
    duration_s, rate_hz : float or None, None takes the default of the rig
    seed : int, seed of every chance in it
    options : mapping of settings of the rig to values

    Raises
    ------
    CaptureError
        If the rig, an option, the format or the folder is not known, or a value breaks its
        rule.
    """
    from rig.synthetic.rigs import simulate_rig

    check_target(path)
    wanted = dict(options)
    if duration_s is not None:
        wanted["duration_s"] = duration_s
    if rate_hz is not None:
        wanted["rate_hz"] = rate_hz
    capture = simulate_rig(rig, settings=wanted, seed=seed)
    return write_capture(path, capture, seed=seed)
