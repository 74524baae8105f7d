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
    text = _METADATA.sub("", text[text.index("<svg") :])
    return _prefix_ids(
        _OPENING.sub(_opening(figure, salt, title, description), text, count=1), salt
    )


def _opening(figure: Figure, salt: str, title: str, description: str) -> str:
    width, height = (72.0 * side for side in figure.get_size_inches())
    name = _LEGAL_ID.sub("-", salt)
    return (
        f'<svg viewBox="0 0 {width:.3f} {height:.3f}" xmlns="http://www.w3.org/2000/svg" '
        f'xmlns:xlink="http://www.w3.org/1999/xlink" role="img" '
        f'aria-labelledby="{name}-title {name}-desc">\n'
        f'<title id="{name}-title">{html.escape(title or salt)}</title>\n'
        f'<desc id="{name}-desc">{html.escape(description or title or salt)}</desc>'
    )


def _prefix_ids(text: str, salt: str) -> str:
    """Give the readable group names (axes_1 ...) the figure's own prefix as well."""
    name = _LEGAL_ID.sub("-", salt)
    names = set(re.findall(r'<g id="([^"]+)"', text))
    return (
        re.sub(r'<g id="([^"]+)"', lambda found: f'<g id="{name}-{found.group(1)}"', text)
        if names
        else text
    )
