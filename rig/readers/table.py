"""The table of capture formats, and the one way in: ``open_capture``.

The content of a file decides; its suffix only settles what content leaves open, and contradicts
a file that is plainly something else.
"""

from __future__ import annotations

import importlib
import os
from collections.abc import Callable
from dataclasses import dataclass, replace

from rig.captures import Capture
from rig.errors import CaptureError
from rig.readers import sniffing
from rig.readers.options import DEFAULTS, ReadOptions
from rig.readers.refusals import check_file, printable, read_head, refusal, shown

SLOWEST_RATE_HZ, FASTEST_RATE_HZ = 1e-12, 1e18  # a sample in 30 000 years; above any converter
NAME_MAX, NOTE_MAX = 200, 1000  # characters: longer texts are no names
CERTAIN = 3  # a signature
LIKELY = 2  # a layout that nothing else has


@dataclass(frozen=True, slots=True, kw_only=True)
class Reader:
    """One capture format.

    ``sniff(head, path)`` says how surely the first bytes are this format: 3 a signature, 2 a
    layout nothing else has, 1 possible, 0 no. ``opener`` is a function of the module ``home``,
    loaded when the first file of the format is met. ``needs`` names what must be installed.
    """

    name: str
    label: str
    suffixes: tuple[str, ...]
    sniff: Callable[[bytes, str], int]
    home: str
    opener: str
    needs: str = "nothing more"

    def open(self, path: str, options: ReadOptions) -> Capture:
        """Return the capture in a file of this format.

        Raises
        ------
        CaptureError
            If it is not of this format, or damaged.
        """
        module = importlib.import_module(f"rig.readers.{self.home}")
        capture: Capture = getattr(module, self.opener)(path, options)
        return capture


def _table(*readers: Reader) -> dict[str, Reader]:
    return {reader.name: reader for reader in readers}


READERS: dict[str, Reader] = _table(
    Reader(
        name="wav",
        label="a WAV file",
        suffixes=(".wav", ".wave"),
        sniff=sniffing.sniff_riff,
        home="sound",
        opener="open_riff",
    ),
    Reader(
        name="rf64",
        label="an RF64 file",
        suffixes=(".rf64", ".bw64"),
        sniff=sniffing.sniff_rf64,
        home="sound",
        opener="open_riff",
    ),
    Reader(
        name="w64",
        label="a W64 file",
        suffixes=(".w64",),
        sniff=sniffing.sniff_w64,
        home="sound",
        opener="open_riff",
    ),
    Reader(
        name="aiff",
        label="an AIFF file",
        suffixes=(".aif", ".aiff", ".aifc"),
        sniff=sniffing.sniff_aiff,
        home="sound",
        opener="open_aiff",
    ),
    Reader(
        name="caf",
        label="a CAF file",
        suffixes=(".caf",),
        sniff=sniffing.sniff_caf,
        home="sound",
        opener="open_caf",
    ),
    Reader(
        name="flac",
        label="a FLAC file",
        suffixes=(".flac",),
        sniff=sniffing.sniff_flac,
        home="sound",
        opener="open_flac",
    ),
    Reader(
        name="npy",
        label="an NPY file",
        suffixes=(".npy",),
        sniff=sniffing.sniff_npy,
        home="arrays",
        opener="open_npy",
    ),
    Reader(
        name="npz",
        label="an NPZ file",
        suffixes=(".npz",),
        sniff=sniffing.sniff_npz,
        home="arrays",
        opener="open_npz",
    ),
    Reader(
        name="mat",
        label="a MAT file",
        suffixes=(".mat",),
        sniff=sniffing.sniff_matlab,
        home="matlab",
        opener="open_matlab",
        needs="extra [formats] for version 7.3",
    ),
    Reader(
        name="hdf5",
        label="an HDF5 file",
        suffixes=(".h5", ".hdf5", ".hdf"),
        sniff=sniffing.sniff_hdf5,
        home="hdf5",
        opener="open_hdf5",
        needs="extra [formats]",
    ),
    Reader(
        name="uff58",
        label="a universal file",
        suffixes=(".uff", ".unv", ".uf58", ".ufb"),
        sniff=sniffing.sniff_uff58,
        home="uff58",
        opener="open_uff58",
    ),
    Reader(
        name="comtrade",
        label="a COMTRADE record",
        suffixes=(".cfg", ".cff"),
        sniff=sniffing.sniff_comtrade,
        home="comtrade",
        opener="open_comtrade",
    ),
    Reader(
        name="csv",
        label="delimited text",
        suffixes=(".csv", ".tsv", ".txt", ".asc", ".prn", ".tab"),
        sniff=sniffing.sniff_delimited,
        home="delimited",
        opener="open_delimited",
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
    capture = choose_reader(text, head, options.format).open(text, options)
    if not SLOWEST_RATE_HZ <= capture.rate_hz <= FASTEST_RATE_HZ:
        raise refusal(
            text,
            f"a rate of {capture.rate_hz:g} Hz lies outside {SLOWEST_RATE_HZ:g} to "
            f"{FASTEST_RATE_HZ:g} Hz",
            "State the rate of the recorder",
        )
    return fit_for_print(capture)


def fit_for_print(capture: Capture) -> Capture:
    """Return the capture with its texts fit for one line each, whatever the file had in them."""
    texts = [text for c in capture.channels for text in (c.name, c.unit)]
    if all(text.isprintable() for text in (*texts, *capture.notes, capture.start_text or "")):
        return capture
    channels = tuple(
        replace(c, name=printable(c.name, NAME_MAX), unit=printable(c.unit))
        for c in capture.channels
    )
    start = capture.start_text
    return replace(
        capture,
        channels=channels,
        start_text=None if start is None else printable(start),
        notes=tuple(printable(note, NOTE_MAX) for note in capture.notes),
    )


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
