"""The table of capture formats, and the one way in: ``open_capture``.

The content of a file decides; its suffix only settles what content leaves open, and contradicts
a file that is plainly something else.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from dataclasses import dataclass

from rig.captures import Capture
from rig.errors import CaptureError
from rig.readers import arrays, comtrade, delimited, hdf5, matlab, sound, uff58
from rig.readers.options import DEFAULTS, ReadOptions
from rig.readers.refusals import check_file, printable, read_head, refusal, shown

CERTAIN = 3  # a signature
LIKELY = 2  # a layout that nothing else has


@dataclass(frozen=True, slots=True, kw_only=True)
class Reader:
    """One capture format.

    ``sniff(head, path)`` says how surely the first bytes are this format: 3 a signature, 2 a
    layout nothing else has, 1 possible, 0 no. ``needs`` names what must be installed.
    """

    name: str
    label: str
    suffixes: tuple[str, ...]
    sniff: Callable[[bytes, str], int]
    open: Callable[[str, ReadOptions], Capture]
    needs: str = "nothing more"


def _table(*readers: Reader) -> dict[str, Reader]:
    return {reader.name: reader for reader in readers}


READERS: dict[str, Reader] = _table(
    Reader(
        name="wav",
        label="a WAV file",
        suffixes=(".wav", ".wave"),
        sniff=sound.sniff_riff,
        open=sound.open_riff,
    ),
    Reader(
        name="rf64",
        label="an RF64 file",
        suffixes=(".rf64", ".bw64"),
        sniff=sound.sniff_rf64,
        open=sound.open_riff,
    ),
    Reader(
        name="w64",
        label="a W64 file",
        suffixes=(".w64",),
        sniff=sound.sniff_w64,
        open=sound.open_riff,
    ),
    Reader(
        name="aiff",
        label="an AIFF file",
        suffixes=(".aif", ".aiff", ".aifc"),
        sniff=sound.sniff_aiff,
        open=sound.open_aiff,
    ),
    Reader(
        name="caf",
        label="a CAF file",
        suffixes=(".caf",),
        sniff=sound.sniff_caf,
        open=sound.open_caf,
    ),
    Reader(
        name="flac",
        label="a FLAC file",
        suffixes=(".flac",),
        sniff=sound.sniff_flac,
        open=sound.open_flac,
    ),
    Reader(
        name="npy",
        label="an NPY file",
        suffixes=(".npy",),
        sniff=arrays.sniff_npy,
        open=arrays.open_npy,
    ),
    Reader(
        name="npz",
        label="an NPZ file",
        suffixes=(".npz",),
        sniff=arrays.sniff_npz,
        open=arrays.open_npz,
    ),
    Reader(
        name="mat",
        label="a MAT file",
        suffixes=(".mat",),
        sniff=matlab.sniff_matlab,
        open=matlab.open_matlab,
        needs="extra [formats] for version 7.3",
    ),
    Reader(
        name="hdf5",
        label="an HDF5 file",
        suffixes=(".h5", ".hdf5", ".hdf"),
        sniff=hdf5.sniff_hdf5,
        open=hdf5.open_hdf5,
        needs="extra [formats]",
    ),
    Reader(
        name="uff58",
        label="a universal file",
        suffixes=(".uff", ".unv", ".uf58", ".ufb"),
        sniff=uff58.sniff_uff58,
        open=uff58.open_uff58,
    ),
    Reader(
        name="comtrade",
        label="a COMTRADE record",
        suffixes=(".cfg", ".cff"),
        sniff=comtrade.sniff_comtrade,
        open=comtrade.open_comtrade,
    ),
    Reader(
        name="csv",
        label="delimited text",
        suffixes=(".csv", ".tsv", ".txt", ".asc", ".prn", ".tab"),
        sniff=delimited.sniff_delimited,
        open=delimited.open_delimited,
    ),
)


def open_capture(path: str | os.PathLike[str], *, options: ReadOptions = DEFAULTS) -> Capture:
    """Return the capture in a file, whatever its format.

    Parameters
    ----------
    path : str or path, the capture file
    options : ReadOptions, what the file does not say, or says wrongly

    Returns
    -------
    Capture
        Rate, length and channels, checked against the file's length; samples come in blocks.

    Raises
    ------
    CaptureError
        If the file cannot be read as what it claims to be; one line that names the file, the
        fault with its evidence, and the remedy.
    """
    text = os.fspath(path)
    check_file(text)
    head = read_head(text)
    return choose_reader(text, head, options.format).open(text, options)


def choose_reader(path: str, head: bytes, wanted: str | None = None) -> Reader:
    """Return the reader for a file from its first bytes, its suffix, or a stated format.

    Raises
    ------
    CaptureError
        If the stated format is unknown, the suffix contradicts the content, or nothing fits.
    """
    if wanted is not None:
        if wanted not in READERS:
            known = ", ".join(READERS)
            raise refusal(path, f"format '{printable(wanted)}' is not known", f"Known are {known}")
        return READERS[wanted]
    scores = {name: reader.sniff(head, path) for name, reader in READERS.items()}
    best = max(scores, key=lambda name: scores[name])
    if scores[best] >= CERTAIN:
        return READERS[best]
    owner = _owner_of_suffix(path)
    if owner is not None and scores[owner] > 0:
        return READERS[owner]
    if owner is not None and scores[best] < LIKELY:
        raise _not_what_it_claims(path, head, READERS[owner], best if scores[best] else None)
    if scores[best] == 0:
        what = f"is of no known format (starts with {shown(head)})"
        raise refusal(path, what, f"Pass --format with one of {', '.join(READERS)}")
    return READERS[best]


def _owner_of_suffix(path: str) -> str | None:
    suffix = os.path.splitext(path)[1].lower()
    return next((name for name, reader in READERS.items() if suffix in reader.suffixes), None)


def _not_what_it_claims(path: str, head: bytes, owner: Reader, other: str | None) -> CaptureError:
    what = f"not {owner.label} (starts with {shown(head)})"
    if other is None:
        return refusal(path, what, "Check the file, or pass --format")
    return refusal(path, f"{what}; looks like {other.upper()}", f"Use --format {other}")
