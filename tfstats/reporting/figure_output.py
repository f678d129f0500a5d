"""Figures as files and as parts of a page."""

from __future__ import annotations

import io
import re
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from markupsafe import escape
from matplotlib.figure import Figure
from matplotlib.text import Text

from tfstats.foundations.safe_writing import written_whole
from tfstats.reporting.colours import FRAME, INK, MUTED
from tfstats.reporting.plain_text import printable
from tfstats.reporting.plane_axes import figure_style

__all__ = ["save_figure", "svg_text"]

PNG_DPI = 200
EMBEDDED_DPI = 150


def save_figure(figure: Figure, path: Path) -> None:
    """Write PATH.pdf (text as text, fonts embedded) and PATH.png; no dates inside, so equal figures are equal bytes."""
    _without_ligatures(figure)
    with figure_style(), _missing_glyphs_allowed():
        with written_whole(path.with_name(path.name + ".pdf")) as temporary:
            figure.savefig(
                temporary,
                format="pdf",
                dpi=PNG_DPI,
                metadata={"CreationDate": None, "Producer": None, "Creator": "tfstats"},
            )
        with written_whole(path.with_name(path.name + ".png")) as temporary:
            figure.savefig(
                temporary, format="png", dpi=PNG_DPI, metadata={"Software": None}, pil_kwargs={"compress_level": 4}
            )


def _without_ligatures(figure: Figure) -> None:
    """Joined letters would be embedded as a font of their own, which costs as much time as the whole drawing."""
    for text in figure.findobj(Text):
        if hasattr(text, "set_fontfeatures"):  # younger than the oldest matplotlib that we can run with
            text.set_fontfeatures(["-liga"])


# Colours that follow the page's light or dark scheme; what lies on a map keeps its own.
_PAGE_COLOURS = {INK: "var(--ink)", MUTED: "var(--muted)", FRAME: "var(--frame)"}


def svg_text(figure: Figure, name: str, alt: str) -> str:
    """A figure as an SVG element for a page: text stays text, ids are its own, colours follow the page."""
    buffer = io.StringIO()
    with figure_style(**{"svg.hashsalt": name}), _missing_glyphs_allowed():
        figure.savefig(
            buffer, format="svg", dpi=EMBEDDED_DPI, transparent=True, metadata={"Date": None, "Creator": None}
        )
    text = buffer.getvalue()
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    head, body = text.split(">", 1)
    box = re.search(r'viewBox="[^"]*"', head)
    body = re.sub(r'<g id="[^"]*"', "<g", body)  # named after their place in the figure, and so not unique in a page
    for colour, variable in _PAGE_COLOURS.items():
        body = body.replace(colour, variable)
    words = escape(" ".join(printable(alt).split()))
    return f'<svg {box.group(0) if box else ""} role="img" aria-label="{words}" class="picture">{body}'


@contextmanager
def _missing_glyphs_allowed() -> Iterator[None]:
    """A label in a script that the figures' font lacks is shown with boxes in PNG and PDF; the report shows it in full."""
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph .* missing from", category=UserWarning)
        yield
