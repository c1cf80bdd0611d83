"""From a matplotlib figure to SVG that can stand in a page: same figure, same bytes; ids of its own; a spoken title.

Knows nothing of what is drawn.
"""

from __future__ import annotations

import io
import re
import warnings
import xml.etree.ElementTree as ET
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

from steelyard.errors import MissingExtraError

if TYPE_CHECKING:
    from matplotlib.figure import Figure

SVG = "http://www.w3.org/2000/svg"
XLINK = "http://www.w3.org/1999/xlink"
INK, SOFT, ACCENT, PALE, PAPER = "#1b1f24", "#5b6470", "#0b5563", "#e6ecee", "#ffffff"
TEXT_PX = 12.0

_STYLE: Any = {
    "svg.fonttype": "none",
    "svg.hashsalt": "steelyard",
    # Labels come from data: a dollar sign in them is a dollar sign.
    "text.parse_math": False,
    "text.usetex": False,
    "axes.unicode_minus": True,
    "font.family": ["DejaVu Sans"],
    "font.size": TEXT_PX,
    "text.color": INK,
    "axes.labelcolor": INK,
    "axes.edgecolor": SOFT,
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "xtick.color": SOFT,
    "xtick.labelcolor": INK,
    "ytick.color": SOFT,
    "ytick.labelcolor": INK,
    "xtick.labelsize": TEXT_PX,
    "ytick.labelsize": TEXT_PX,
    "hatch.linewidth": 0.7,
    "figure.facecolor": PAPER,
    "axes.facecolor": "none",
}

_UNPRINTABLE = re.compile("[^\t\n\r\x20-\x7e\x85\xa0-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]")


@contextmanager
def drawing() -> Iterator[None]:
    """Draw in the house's own style, whatever the user's settings of matplotlib are.

    Raises
    ------
    MissingExtraError
        matplotlib is not installed.
    """
    try:
        import matplotlib
    except ImportError:
        raise MissingExtraError(
            "The report needs matplotlib, which is not installed.", mend="pip install 'steelyard[app]'"
        ) from None
    with matplotlib.rc_context(), warnings.catch_warnings():
        # Labels may be in a script the font of the measurements lacks; the reader's browser has its own.
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(_STYLE)
        yield


def figure_of(width: float, height: float) -> Figure:
    """Return an empty figure of so many pixels."""
    from matplotlib.backends.backend_svg import FigureCanvasSVG
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width / 72, height / 72), dpi=72)
    FigureCanvasSVG(figure)
    return figure


def printable(text: object, most: int = 200) -> str:
    """Return a label that XML can hold, on one line, shortened to ``most`` characters."""
    clean = " ".join(_UNPRINTABLE.sub("\N{REPLACEMENT CHARACTER}", str(text)).split())
    return clean if len(clean) <= most else clean[: most - 1].rstrip() + "\N{HORIZONTAL ELLIPSIS}"


def svg_text(figure: Figure, name: str, title: str, description: str = "") -> str:
    """Return the figure as an ``<svg>`` element, its ids beginning with ``name``, its title said aloud."""
    buffer = io.BytesIO()
    figure.savefig(buffer, format="svg", metadata={"Date": None, "Creator": None})
    root = ET.fromstring(buffer.getvalue())
    for tag in ("metadata", "title"):
        for child in root.findall(f"{{{SVG}}}{tag}"):
            root.remove(child)
    for parent in root.iter(f"{{{SVG}}}defs"):
        for style in parent.findall(f"{{{SVG}}}style"):
            parent.remove(style)
    for element in root.iter():
        _prefix(element, name)
        element.tail = None if element.tail is None or not element.tail.strip() else element.tail
    for key in ("width", "height", "version"):
        root.attrib.pop(key, None)
    root.set("role", "img")
    root.set("aria-label", title)
    heading = ET.Element(f"{{{SVG}}}title")
    heading.text = title
    root.insert(0, heading)
    if description:
        told = ET.Element(f"{{{SVG}}}desc")
        told.text = description
        root.insert(1, told)
    ET.register_namespace("", SVG)
    ET.register_namespace("xlink", XLINK)
    return ET.tostring(root, encoding="unicode")


def _prefix(element: ET.Element, name: str) -> None:
    """Make ids and the references to them the figure's own: matplotlib uses the same ones in every figure."""
    for key, value in list(element.attrib.items()):
        if key == "id":
            element.set(key, f"{name}-{value}")
        elif key == f"{{{XLINK}}}href" and value.startswith("#"):
            element.set(key, f"#{name}-{value[1:]}")
        elif "url(#" in value:
            element.set(key, value.replace("url(#", f"url(#{name}-"))
