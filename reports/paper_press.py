"""The pile of sheets with typefaces, pictures and numbers that the parts of a report share."""

from __future__ import annotations

from collections.abc import Mapping

from reports.content_model import ReportContent, figure_refs
from reports.figures.canvas import Picture
from reports.paper_sheets import TEXT_WIDTH_PT, Flow
from reports.typeface import Typeface

BODY_PT = 9.8
TABLE_PT = 8.4
SMALL_PT = 7.2
LEADING = 1.3


class Press:
    """The pile of sheets with the typefaces, pictures and numbers that the blocks need."""

    def __init__(self, content: ReportContent, figures: Mapping[str, Picture]) -> None:
        self.flow = Flow()
        self.figures = figures
        # A book face for reading, narrow enough for tables; a plain one for heads and captions.
        self.text = Typeface("STIXGeneral")
        self.bold = Typeface("STIXGeneralBol", "DejaVuSans-Bold")
        self.head = Typeface("DejaVuSans-Bold")
        self.plain = Typeface("DejaVuSans")
        numbered = (ref for ref in figure_refs(content) if not ref.key.startswith("record-"))
        self.tables = 0
        self.numbers = {ref.key: place for place, ref in enumerate(numbered, start=1)}

    def set_text(
        self,
        text: str,
        face: Typeface,
        size_pt: float,
        *,
        indent_pt: float = 0.0,
        width_pt: float = TEXT_WIDTH_PT,
    ) -> None:
        """Set a text in as many lines as it takes."""
        for line in face.lines(text, size_pt, width_pt - indent_pt):
            self.flow.line(line, face, size_pt, indent_pt=indent_pt, leading=LEADING)
