"""The look of pictures and pages: colours, marker shapes, line styles, fonts, each with its reason.

Colours are those of Okabe and Ito, chosen so that the common forms of colour blindness keep
them apart. Nothing is told by colour alone: a state has its own shape and filling, a verdict
its word and shape, a curve its line style, so a grey print says the same.

References
----------
Okabe and Ito 2008, Color Universal Design (recalled; hexadecimal values as widely printed).
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

BLACK = "#000000"
ORANGE = "#E69F00"
SKY = "#56B4E9"
GREEN = "#009E73"
BLUE = "#0072B2"
VERMILION = "#D55E00"
PURPLE = "#CC79A7"
# Neutral greys: text-like grey keeps 4.5 to 1 against white, the faint one only carries areas.
GREY = "#666666"
FAINT = "#E3E6E8"
BAND = "#CFE3F1"

# DejaVu Sans comes with the drawing library, so pictures and paper look the same on every
# machine; it holds Greek, Cyrillic and the shapes used for verdicts.
FONT = "DejaVu Sans"
MONO = "DejaVu Sans Mono"
# 8 pt is the smallest type that stays readable on A4 and, enlarged with the page, on a phone.
TEXT_PT = 8.0
SMALL_PT = 7.0
# Wide enough for two panels, narrow enough that a phone still shows its type.
WIDTH_IN = 5.6
CARD_WIDTH_IN = 2.75


@dataclass(frozen=True, slots=True, kw_only=True)
class Mark:
    """How one kind of point is drawn: colour, shape, and whether the shape is filled."""

    label: str
    colour: str
    shape: str
    filled: bool

    def style(self) -> dict[str, Any]:
        """Return the keyword arguments of a plot call with markers and no line."""
        return {
            "linestyle": "none",
            "marker": self.shape,
            "color": self.colour,
            "markerfacecolor": self.colour if self.filled else "white",
            "markeredgecolor": self.colour,
            "markeredgewidth": 1.1,
            "markersize": 5.0,
        }


# Filled and round for holding still, a cross for what never holds, half-way shapes between.
STATE_MARKS: Mapping[str, Mark] = {
    "locked": Mark(label="locked", colour=BLUE, shape="o", filled=True),
    "intermittent": Mark(label="intermittent", colour=ORANGE, shape="D", filled=False),
    "drifting": Mark(label="drifting", colour=VERMILION, shape="x", filled=True),
    "undecided": Mark(label="undecided", colour=GREY, shape="s", filled=False),
}
# The triangle points the way the drive moves.
DIRECTION_MARKS: Mapping[str, Mark] = {
    "up": Mark(label="drive up", colour=BLUE, shape=">", filled=True),
    "down": Mark(label="drive down", colour=VERMILION, shape="<", filled=False),
    "none": Mark(label="set one by one", colour=BLACK, shape="o", filled=False),
}
DIRECTION_WORDS: Mapping[str, str] = {
    "up": "drive up",
    "down": "drive down",
    "none": "points set one by one",
}
LEVEL_MARKS: tuple[Mark, ...] = (
    Mark(label="", colour=BLUE, shape="o", filled=True),
    Mark(label="", colour=VERMILION, shape="s", filled=False),
    Mark(label="", colour=GREEN, shape="^", filled=True),
    Mark(label="", colour=PURPLE, shape="D", filled=False),
    Mark(label="", colour=ORANGE, shape="v", filled=True),
    Mark(label="", colour=BLACK, shape="P", filled=False),
)

# The word decides; the shape repeats it. The tones are darkened so that they keep 4.5 to 1
# against white as text.
VERDICT_SHAPES: Mapping[str, str] = {"pass": "●", "fail": "✕", "undecided": "◇"}
VERDICT_COLOURS: Mapping[str, str] = {
    "pass": "#00654A",
    "fail": "#A33F00",
    "undecided": "#4D4D4D",
}
VERDICT_MARKS: Mapping[str, Mark] = {
    "pass": Mark(label="pass", colour=VERDICT_COLOURS["pass"], shape="o", filled=True),
    "fail": Mark(label="fail", colour=VERDICT_COLOURS["fail"], shape="X", filled=True),
    "undecided": Mark(
        label="undecided", colour=VERDICT_COLOURS["undecided"], shape="D", filled=False
    ),
}

_SETTINGS: dict[Any, Any] = {
    "font.family": [FONT],
    "font.size": TEXT_PT,
    "axes.titlesize": TEXT_PT,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.labelsize": TEXT_PT,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.grid": True,
    "axes.axisbelow": True,
    "grid.color": FAINT,
    "grid.linewidth": 0.6,
    "axes.formatter.useoffset": False,
    "axes.formatter.use_mathtext": False,
    "axes.unicode_minus": True,
    "xtick.labelsize": SMALL_PT,
    "ytick.labelsize": SMALL_PT,
    "legend.fontsize": SMALL_PT,
    "legend.frameon": False,
    "lines.linewidth": 1.2,
    "text.parse_math": False,  # a dollar sign in a file name is a dollar sign
    "hatch.linewidth": 0.6,
    "svg.fonttype": "path",
    "svg.image_inline": True,
    "pdf.fonttype": 42,
    "pdf.compression": 6,
    "path.simplify": True,
}


@contextmanager
def drawing_style() -> Iterator[None]:
    """Draw in the house style whatever the user's own settings file says, then restore it."""
    # Colours and words are wanted by texts too, which need no drawing library.
    import matplotlib as mpl

    kept_out = {"backend", "backend_fallback", "toolbar", "interactive"}
    defaults: dict[Any, Any] = dict(mpl.rcParamsDefault.items())
    with mpl.rc_context():
        mpl.rcParams.update({key: defaults[key] for key in defaults if key not in kept_out})
        mpl.rcParams.update(_SETTINGS)
        yield
