"""What a person may say about a file that the file does not say itself, or says wrongly."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

Decimal = Literal[".", ","]
TransformerSide = Literal["primary", "secondary"]


@dataclass(frozen=True, slots=True, kw_only=True)
class ReadOptions:
    """Overrides for one capture; None leaves the decision to the file and its reader.

    ``time_column`` is a column number from 1, a column name, or "none" for "there is no
    column of times". ``dataset`` names the array to read where a file holds several;
    ``rate_attribute`` names the attribute or scalar variable that holds the sample rate.
    ``transformer_side`` converts power-system records to primary or secondary values; None
    leaves them as recorded.

    Raises
    ------
    ValueError
        If a value cannot be meant: a rate that is not above 0 Hz, an unknown decimal mark.
    """

    rate_hz: float | None = None
    format: str | None = None
    dataset: str | None = None
    rate_attribute: str | None = None
    delimiter: str | None = None
    decimal: Decimal | None = None
    time_column: int | str | None = None
    trust_file_length: bool = False
    allow_truncated: bool = False
    stop_at_nul: bool = False
    transformer_side: TransformerSide | None = None

    def __post_init__(self) -> None:
        if self.rate_hz is not None and not (self.rate_hz > 0 and math.isfinite(self.rate_hz)):
            raise ValueError(f"rate_hz: must be finite and above 0 Hz, got {self.rate_hz}")
        if self.decimal not in (None, ".", ","):
            raise ValueError(f"decimal: must be '.' or ',', got {self.decimal!r}")
        if self.transformer_side not in (None, "primary", "secondary"):
            side = self.transformer_side
            raise ValueError(f"transformer_side: must be 'primary' or 'secondary', got {side!r}")
        if self.delimiter is not None and len(self.delimiter) != 1:
            raise ValueError(f"delimiter: must be one character, got {self.delimiter!r}")

    @property
    def sets_times_aside(self) -> bool:
        """True when the person says that no column or array of times is to be used."""
        return isinstance(self.time_column, str) and self.time_column.strip().lower() == "none"


DEFAULTS = ReadOptions()
