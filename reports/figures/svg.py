"""A figure as a piece of SVG inside a page: same bytes each time, read by screen readers."""

from __future__ import annotations

import html
import io
import re

import matplotlib as mpl
from matplotlib.figure import Figure

from reports.look import drawing_style

_OPENING = re.compile(r"<svg\b[^>]*>")
_METADATA = re.compile(r"\s*<metadata>.*?</metadata>", re.DOTALL)
# One rule for all elements, which would reach out of the picture into the page; it stands on
# the opening instead and is inherited.
_STYLE = re.compile(r"\s*<defs>\s*<style.*?</style>\s*</defs>", re.DOTALL)
_INDENT = re.compile(r"\n\s+<")
_LEGAL_ID = re.compile(r"[^A-Za-z0-9_-]")


def figure_svg(figure: Figure, salt: str, *, title: str = "", description: str = "") -> str:
    """Return the figure as one ``<svg>`` element without prolog, date or metadata.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
    salt : str, unlike that of any other figure of the page, or their inner names would clash
    title : str, what the picture is
    description : str, what the picture shows, in one sentence that states the result

    Returns
    -------
    str, the same bytes for the same figure, salt and version of the drawing library
    """
    buffer = io.StringIO()
    with drawing_style():
        mpl.rcParams["svg.hashsalt"] = salt
        figure.savefig(
            buffer,
            format="svg",
            metadata={"Date": None, "Creator": None, "Format": None, "Type": None},
        )
    text = buffer.getvalue()
    text = _STYLE.sub("", _METADATA.sub("", text[text.index("<svg") :]))
    text = _INDENT.sub("\n<", text)
    opening = _opening(figure, salt, title, description)
    # A function, since a backslash in a user's text means nothing here.
    return _OPENING.sub(lambda _found: opening, _prefix_names(text, salt), count=1)


def _opening(figure: Figure, salt: str, title: str, description: str) -> str:
    width, height = (72.0 * side for side in figure.get_size_inches())
    name = _LEGAL_ID.sub("-", salt)
    return (
        f'<svg viewBox="0 0 {width:.3f} {height:.3f}" xmlns="http://www.w3.org/2000/svg" '
        f'xmlns:xlink="http://www.w3.org/1999/xlink" role="img" '
        f'style="stroke-linejoin: round; stroke-linecap: butt" '
        f'aria-labelledby="{name}-title {name}-desc">\n'
        f'<title id="{name}-title">{html.escape(title or salt)}</title>\n'
        f'<desc id="{name}-desc">{html.escape(description or title or salt)}</desc>'
    )


def _prefix_names(text: str, salt: str) -> str:
    """Put the picture's own name before every inner name and every reference to one.

    The salt keeps clip paths apart, but glyphs are named after font and number alone.
    """
    name = _LEGAL_ID.sub("-", salt)
    text = re.sub(r'\bid="', f'id="{name}-', text)
    text = re.sub(r'href="#', f'href="#{name}-', text)
    return re.sub(r"url\(#", f"url(#{name}-", text)
