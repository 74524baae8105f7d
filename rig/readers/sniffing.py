"""How the first bytes of a file tell its format; nothing here reads further or loads much.

A sniff answers 3 for a signature, 2 for a layout that nothing else has, 1 for possible, 0 for
no.
"""

from __future__ import annotations

import os
import re
import struct

V4_CODES = {0: "f8", 1: "f4", 2: "i4", 3: "i2", 4: "u2", 5: "u1"}
CFF_SECTION = re.compile(
    rb"^-{3}\s*file type:\s*([A-Z]{3})\s*([A-Z0-9]*)\s*(?::\s*(\d+))?\s*-{3}", re.I
)


def sniff_riff(head: bytes, path: str) -> int:
    """Return 3 for the signature of WAV, 0 otherwise."""
    return 3 if head[:4] in (b"RIFF", b"RIFX") and head[8:12] == b"WAVE" else 0


def sniff_rf64(head: bytes, path: str) -> int:
    """Return 3 for the signature of RF64 or BW64, 0 otherwise."""
    return 3 if head[:4] in (b"RF64", b"BW64") and head[8:12] == b"WAVE" else 0


def sniff_w64(head: bytes, path: str) -> int:
    """Return 3 for the signature of W64, 0 otherwise."""
    return 3 if head[:4] == b"riff" and head[24:28] == b"wave" else 0


def sniff_aiff(head: bytes, path: str) -> int:
    """Return 3 for the signature of AIFF or AIFF-C, 0 otherwise."""
    return 3 if head[:4] == b"FORM" and head[8:12] in (b"AIFF", b"AIFC") else 0


def sniff_caf(head: bytes, path: str) -> int:
    """Return 3 for the signature of CAF, 0 otherwise."""
    return 3 if head[:6] == b"caff\x00\x01" else 0


def sniff_flac(head: bytes, path: str) -> int:
    """Return 3 for the signature of FLAC, 0 otherwise."""
    return 3 if head[:4] == b"fLaC" else 0


def sniff_npy(head: bytes, path: str) -> int:
    """Return 3 for the signature of NPY, 0 otherwise."""
    return 3 if head[:6] == b"\x93NUMPY" else 0


def sniff_npz(head: bytes, path: str) -> int:
    """Return 2 for a zip archive whose first part is an NPY array, 0 otherwise."""
    return 2 if head[:4] == b"PK\x03\x04" and b".npy" in head[:300] else 0


def sniff_hdf5(head: bytes, path: str) -> int:
    """Return 3 for the signature of HDF5, 0 otherwise; a MAT 7.3 header comes before it."""
    return 3 if head[:8] == b"\x89HDF\r\n\x1a\n" else 0


def sniff_matlab(head: bytes, path: str) -> int:
    """Return 3 for the header of MAT 5 to 7.3, 2 for a plausible MAT 4 header, 0 otherwise."""
    if head[:7] == b"MATLAB " and head[126:128] in (b"IM", b"MI"):
        return 3
    return 2 if path.lower().endswith(".mat") and v4_header(head) is not None else 0


def v4_header(head: bytes) -> tuple[str, str, int, tuple[int, int], bool, int] | None:
    """Return (order, code, kind, shape, complex, name bytes) of a MAT 4 variable, or None."""
    if len(head) < 20:
        return None
    for order in "<>":
        word, rows, columns, imaginary, name_bytes = struct.unpack(order + "iiiii", head[:20])
        thousands, rest = divmod(word, 1000)
        numbers, kind = divmod(rest, 10)
        plain = thousands == (order == ">") and numbers in V4_CODES and kind <= 2
        sized = rows >= 0 and columns >= 0 and imaginary in (0, 1) and 1 <= name_bytes <= 1000
        if plain and sized:
            shape = (rows, columns)
            return order, V4_CODES[numbers], kind, shape, imaginary == 1, name_bytes
    return None


def sniff_uff58(head: bytes, path: str) -> int:
    """Return 2 when the first two lines are "-1" and the number of a data set, 0 otherwise."""
    lines = head.lstrip(b"\r\n ").splitlines()
    if len(lines) < 2 or lines[0].strip() != b"-1":
        return 0
    words = lines[1].split()
    numbered = bool(words) and words[0].rstrip(b"bB").isdigit() and lines[1][:2] == b"  "
    return 2 if numbered else 0


def is_configuration(text: str) -> bool:
    """Tell whether a text opens like a configuration: a second line such as "4,2A,2D"."""
    lines = text.splitlines()
    if len(lines) < 2 or "," not in lines[0]:
        return False
    fields = [field.strip().upper() for field in lines[1].split(",")]
    return (
        len(fields) == 3
        and fields[1][-1:] == "A"
        and fields[2][-1:] == "D"
        and (fields[0].isdigit())
    )


def sniff_comtrade(head: bytes, path: str) -> int:
    """Return 3 for a configuration or a combined file, 2 for data with one beside it."""
    text = head.decode("latin-1")
    if is_configuration(text) or CFF_SECTION.match(head.lstrip(b"\xef\xbb\xbf")):
        return 3
    return 2 if path.lower().endswith(".dat") and beside(path, ".cfg") else 0


def beside(path: str, suffix: str) -> str | None:
    """Return the file of the same name with another suffix, in whatever case it is written."""
    stem = os.path.splitext(path)[0]
    for candidate in (stem + suffix, stem + suffix.upper(), stem + suffix.capitalize()):
        if os.path.isfile(candidate):
            return candidate
    return None


def sniff_delimited(head: bytes, path: str) -> int:
    """Return 1 when the file starts with text that holds digits, 0 otherwise."""
    from rig.readers.lines import find_coding

    coding = find_coding(head)
    text = head[coding.mark_bytes :].decode(coding.codec, "replace").split("\0")[0]
    if not text:
        return 0
    strange = sum(not (c.isprintable() or c in "\t\r\n\f\ufffd") for c in text)
    return 1 if strange <= len(text) // 200 and any(c.isdigit() for c in text) else 0
