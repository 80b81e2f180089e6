"""Figures as small inline SVG that follows the page's colours, light or dark; needs matplotlib.

Colours are given as the names of ``INKS``; in the SVG they are variables of the style sheet, so that one drawing serves
both colour schemes and paper. Nothing is told by colour alone.
"""

from __future__ import annotations

import io
import logging
import re
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

WIDTH, HEIGHT = 360, 210
"""Size in points; a telephone shows about as many pixels, so that letters keep their size."""
LETTERS = 11
INKS = {
    "ink": "#010203", "muted": "#010204", "band": "#010205", "batch": "#010206", "fail": "#010207", "rule": "#010208",
}  # fmt: skip
"""Stand-ins for the style sheet's variables ``--ink``, ``--muted`` and so on."""
_SETTINGS: dict[Any, Any] = {
    "svg.fonttype": "none", "svg.hashsalt": "sercheck", "font.size": LETTERS, "axes.linewidth": 0.6,
    "axes.edgecolor": INKS["muted"], "axes.labelcolor": INKS["ink"], "text.color": INKS["ink"],
    "xtick.color": INKS["muted"], "ytick.color": INKS["muted"], "xtick.labelcolor": INKS["ink"],
    "ytick.labelcolor": INKS["ink"], "axes.spines.top": False, "axes.spines.right": False, "axes.unicode_minus": True,
    "text.parse_math": False, "path.simplify": True, "path.simplify_threshold": 0.5,
    "xtick.major.size": 2.5, "ytick.major.size": 2.5, "xtick.major.width": 0.6, "ytick.major.width": 0.6,
    "font.family": ["DejaVu Sans"],
}  # fmt: skip
_FONT = re.compile(r"font: (?:[\d.]+ )?([\d.]+px) [^;\"]*")
_ID = re.compile(r' id="([^"]*)"')


class Drawing(str):
    """SVG markup made here, which templates take as it is."""

    __slots__ = ()

    def __html__(self) -> str:
        return str(self)


@contextmanager
def drawing(width: float = WIDTH, height: float = HEIGHT) -> Iterator[tuple[Figure, Axes]]:
    """A figure with one pair of axes, in the settings of all our figures; hand it to ``inline`` inside the block."""
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    logging.getLogger("matplotlib").setLevel(logging.ERROR)  # where it keeps its fonts is nobody's trouble here
    with rc_context(_SETTINGS), warnings.catch_warnings():
        warnings.filterwarnings("ignore", "Glyph ")  # the reader's own fonts set the letters, not these
        figure = Figure(figsize=(width / 72, height / 72), dpi=72, layout="constrained")
        yield figure, figure.add_subplot()


def inline(figure: Figure, name: str, alt: str) -> Drawing:
    """The figure as markup for a page.

    Args:
        figure: from ``drawing``.
        name: letters and digits that no other figure of the page has; its ids begin so.
        alt: what a person who cannot see it should know.
    """
    from markupsafe import escape

    file = io.StringIO()
    unsaid: dict[str, Any] = dict.fromkeys(("Date", "Creator", "Format", "Type"))
    figure.savefig(file, format="svg", transparent=True, metadata=unsaid)
    text = file.getvalue()
    text = text[text.index("<svg") :]
    text = re.sub(r"(?s)<metadata>.*?</metadata>|<!--.*?-->|<style.*?</style>", "", text)
    for ink, stand_in in INKS.items():
        text = text.replace(stand_in, f"var(--{ink})")
    text = _FONT.sub(r"font-size: \1", text)
    used = set(re.findall(r"#([\w-]+)", " ".join(re.findall(r'(?:url\(|href=")#[\w-]+', text))))
    text = _ID.sub(lambda found: f' id="{name}-{found[1]}"' if found[1] in used else "", text)
    text = re.sub(r'(url\(|href=")#', rf"\1#{name}-", text)
    text = re.sub(r"(\d+\.\d)\d+", r"\1", text)  # a tenth of a point is less than a pixel
    text = re.sub(r"\n\s*", "\n", text)
    view = re.search(r'viewBox="[^"]*"', text)
    body = text[text.index(">") + 1 :]
    box = view[0] if view else ""
    head = f'<svg xmlns="http://www.w3.org/2000/svg" xmlns:xlink="http://www.w3.org/1999/xlink" {box} role="img"'
    return Drawing(f'{head} aria-label="{escape(alt)}">{body}')
