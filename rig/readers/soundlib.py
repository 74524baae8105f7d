"""Sound codings that are not linear samples, decoded by soundfile: FLAC, companded, packed.

The library is loaded only when such a file is met; what it says is passed on in one line.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from rig.arrays import SampleBlock
from rig.captures import Capture, CaptureChannel
from rig.readers.chunks import found_text
from rig.readers.flacframes import last_block_end
from rig.readers.options import ReadOptions
from rig.readers.rebuffer import rebuffer
from rig.readers.refusals import printable, refusal, refuse_empty, settle_rate

READ_FRAMES = 65536
_FRAMES_UNKNOWN = 2**62  # the library says 2**63 - 1 for "not stated"
_TEXT_FIELDS = ("title", "comment", "date", "software")


def import_soundfile(path: str) -> Any:
    """Return the soundfile module, or refuse with the name of what is missing."""
    try:
        import soundfile
    except (ImportError, OSError) as fault:
        what = f"needs the sound library ({printable(str(fault), 80)})"
        raise refusal(path, what, "Install soundfile with its libsndfile") from fault
    return soundfile


def open_library_sound(
    path: str, container: str, options: ReadOptions, notes: tuple[str, ...] = ()
) -> Capture:
    """Return a capture whose samples the sound library decodes.

    Raises
    ------
    CaptureError
        If the library refuses the file, or the file holds less than it declares.
    """
    library = import_soundfile(path)
    with _opened(path) as file:
        rate_hz, rate_notes = settle_rate(path, float(file.samplerate), options, "header")
        declared, channel_count = int(file.frames), int(file.channels)
        subtype = str(file.subtype)
        texts = _texts(file)
    refuse_empty(path, declared, channel_count)
    frames, length_notes = declared, tuple[str, ...]()
    if container == "flac":
        # Elsewhere the chunk's length was compared already; some codings cannot seek to the end.
        frames, length_notes = _settle_frames(path, declared, options, library)
    integer = subtype.startswith("PCM")
    return Capture(
        path=path,
        format=f"{container}, {_coding(subtype)}",
        rate_hz=rate_hz,
        frame_count=frames,
        channels=tuple(
            CaptureChannel(name=str(c + 1), full_scale=1.0 if integer else None)
            for c in range(channel_count)
        ),
        source=LibrarySource(path=path, wide=subtype == "PCM_32"),
        notes=rate_notes + length_notes + notes + texts,
    )


def _coding(subtype: str) -> str:
    words = subtype.lower().replace("pcm_s8", "pcm_8").replace("pcm_u8", "pcm_8").split("_")
    return f"{words[1]}-bit integer" if words[0] == "pcm" and len(words) == 2 else subtype.lower()


def _opened(path: str) -> Any:
    library = import_soundfile(path)
    try:
        return library.SoundFile(path)
    except (library.LibsndfileError, TypeError, ValueError, OSError) as fault:
        raise _translated(path, fault) from fault


def _translated(path: str, fault: Exception) -> Exception:
    said = printable(str(getattr(fault, "error_string", fault)), 80).rstrip(".")
    what = f"the sound library cannot read it ({said or type(fault).__name__})"
    return refusal(path, what, "Export it again as WAV or FLAC")


def _texts(file: Any) -> tuple[str, ...]:
    found = {key: str(getattr(file, key, "") or "") for key in _TEXT_FIELDS}
    return tuple(found_text(key, text.encode()) for key, text in found.items() if text.strip())


def _settle_frames(
    path: str, declared: int, options: ReadOptions, library: Any
) -> tuple[int, tuple[str, ...]]:
    """Return the frames to read: those declared, if the last of them can be read."""
    if declared < _FRAMES_UNKNOWN and _last_is_there(path, declared, library):
        return declared, _more_note(path, declared)
    if declared >= _FRAMES_UNKNOWN:
        what = "states no length (recorder stopped without closing?)"
        remedy = "Re-save it, or pass --allow-truncated to read up to the last whole part"
    else:
        what = f"declares {declared} frames, and the last cannot be read: cut short"
        remedy = "Re-copy the file or pass --allow-truncated"
    if not options.allow_truncated:
        raise refusal(path, what, remedy)
    held = _count_frames(path, library)
    refuse_empty(path, held, 1)
    return held, (f"{what}; {held} frames read, truncation accepted",)


def _more_note(path: str, declared: int) -> tuple[str, ...]:
    """Return the note on frames behind those that the header declares."""
    held = last_block_end(path)
    if held is None or held <= declared:
        return ()
    more = f"header declares {declared} frames, the last block ends at frame {held}"
    return (f"{more}: {held - declared} frames are left unread",)


def _last_is_there(path: str, frames: int, library: Any) -> bool:
    with _opened(path) as file:
        try:
            file.seek(frames - 1)
            return len(file.read(1)) == 1
        except (library.LibsndfileError, OSError):
            return False


def _count_frames(path: str, library: Any) -> int:
    """Return how many frames can be decoded before the library gives up."""
    count = 0
    buffer: Any = None
    with _opened(path) as file:
        buffer = np.empty((4096, file.channels), dtype=np.float32)
        while True:
            try:
                got = len(file.read(out=buffer))
            except (library.LibsndfileError, OSError):
                return count
            count += got
            if got < len(buffer):
                return count


@dataclass(frozen=True, slots=True, kw_only=True)
class LibrarySource:
    """Block source over what the sound library decodes; ``wide`` asks for float64."""

    path: str
    wide: bool

    def __call__(
        self, columns: Sequence[int], block_frames: int, start_frame: int, stop_frame: int
    ) -> Iterator[SampleBlock]:
        """Yield blocks of the chosen columns."""
        pieces = self._pieces(list(columns), start_frame, stop_frame)
        return rebuffer(pieces, block_frames, stop_frame - start_frame)

    def _pieces(self, columns: list[int], start: int, stop: int) -> Iterator[SampleBlock]:
        library = import_soundfile(self.path)
        place = start
        with _opened(self.path) as file:
            buffer = np.empty(
                (READ_FRAMES, file.channels), dtype=np.float64 if self.wide else np.float32
            )
            try:
                file.seek(start)
                while place < stop:
                    got = len(file.read(out=buffer[: min(READ_FRAMES, stop - place)]))
                    if got == 0:
                        break
                    place += got
                    yield buffer[:got, columns].T
            except (library.LibsndfileError, OSError) as fault:
                raise self._damaged(place, stop) from fault
        if place < stop:
            raise self._damaged(place, stop)

    def _damaged(self, place: int, stop: int) -> Exception:
        what = f"is damaged behind frame {place} (frames up to {stop} are declared)"
        return refusal(self.path, what, "Re-copy the file")
