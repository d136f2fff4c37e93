"""Drawings as inline SVG that take their colours from the page: one drawing serves light, dark and print.

Drawings are narrow, so that a telephone shows them in full size and a desk two or more side by side. Text stays text.
Every colour given to matplotlib is a placeholder that `svg` turns into a CSS variable of the page.
"""

from __future__ import annotations

import io
import math
import re
import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any
from xml.etree import ElementTree

import matplotlib
import numpy as np
from markupsafe import Markup
from matplotlib.axes import Axes
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.figure import Figure

from fellwalk.table import shorten_names

__all__ = ["AREA", "INK", "LINE", "MARK", "MUTED", "PAPER", "RULE", "WIDTH", "Drawing", "draw", "labels", "number",
           "plain", "rows_of_labels"]

WIDTH = 400  # CSS pixels at full size; a telephone of 400 shows nine tenths of it
_FONT = 12.0

INK, MUTED, RULE, PAPER, AREA, LINE, MARK = (f"#0102{k:02x}" for k in range(3, 10))
_VARIABLES = dict(zip((INK, MUTED, RULE, PAPER, AREA, LINE, MARK),
                      ("ink", "muted", "rule", "paper", "area", "line", "mark"), strict=True))

_STYLE: Any = {  # of matplotlib's own type of settings
    "svg.fonttype": "none",
    "text.parse_math": False,
    "text.usetex": False,
    "font.size": _FONT,
    "axes.labelsize": _FONT,
    "axes.titlesize": _FONT,
    "axes.titlelocation": "left",
    "axes.titlepad": 7.0,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.facecolor": "none",
    "axes.edgecolor": RULE,
    "axes.labelcolor": MUTED,
    "axes.titlecolor": INK,
    "axes.unicode_minus": True,
    "text.color": INK,
    "xtick.color": RULE,
    "ytick.color": RULE,
    "xtick.labelcolor": MUTED,
    "ytick.labelcolor": MUTED,
    "xtick.labelsize": _FONT - 1,
    "ytick.labelsize": _FONT - 1,
    "figure.facecolor": "none",
    "savefig.facecolor": "none",
    "lines.linewidth": 1.4,
    "path.simplify": True,
    "axes.formatter.use_mathtext": False,
    "axes.formatter.limits": (-4, 5),
}

_SVG = "http://www.w3.org/2000/svg"
_LINK = "{http://www.w3.org/1999/xlink}href"


@dataclass(frozen=True)
class Drawing:
    """One drawing: its markup, and what it shows in words, for those who do not see it. key: unique on the page."""

    key: str
    title: str
    words: str
    markup: Markup
    width: float


def plain(text: str) -> str:
    """A text as it can stand in a page: what is not printable gives way to a sign."""
    return "".join(c if c.isprintable() else "\ufffd" for c in str(text))


def labels(names: list[str], width: int = 20) -> list[str]:
    """Names short enough to stand beside a drawing, all different where they were."""
    return shorten_names([plain(name) for name in names], width)


def number(value: float, digits: int = 3) -> str:
    """A number for a sentence, of so many significant digits; whole counts below a million keep all of theirs."""
    if not math.isfinite(value):
        return "unknown" if math.isnan(value) else "infinite"
    size = abs(value)
    rounded = float(f"{value:.{digits}g}")
    if 1000 <= size < 1e6 or (size < 1e15 and size >= 1e6 and rounded == round(value)):
        return f"{value:,.0f}".replace("-", "−")
    return f"{value:.{digits}g}".replace("e+0", "e").replace("e+", "e").replace("-", "−")


@contextmanager
def _style() -> Iterator[None]:
    with matplotlib.rc_context(_STYLE), warnings.catch_warnings():
        # Letters that matplotlib's own font lacks are drawn by the browser, from its fonts.
        warnings.filterwarnings("ignore", message=r".*Glyph .* missing from")
        warnings.filterwarnings("ignore", message=r".*not found\. Falling back")
        yield


def draw(key: str, title: str, words: str, height: float, paint: Callable[[Axes], None], *, width: float = WIDTH,
         left: float = 52, right: float = 12, top: float = 26, bottom: float = 42) -> Drawing:
    """A drawing with one pair of axes; sizes in CSS pixels, margins included. `paint` draws into the axes."""
    with _style():
        figure = Figure(figsize=(width / 72, height / 72))
        axes = figure.add_axes((left / width, bottom / height, 1 - (left + right) / width,
                                1 - (top + bottom) / height))
        paint(axes)
        return Drawing(key, title, words, _svg(figure, key, title, words, width, height), width)


def _svg(figure: Figure, key: str, title: str, words: str, width: float, height: float) -> Markup:
    with matplotlib.rc_context({"svg.hashsalt": key}):
        file = io.BytesIO()
        FigureCanvasSVG(figure).print_figure(file, format="svg", metadata={"Date": None})
    ElementTree.register_namespace("", _SVG)
    root = ElementTree.fromstring(file.getvalue())
    for parent in list(root.iter()):
        for child in list(parent):
            if child.tag.rpartition("}")[2] in ("metadata", "style"):
                parent.remove(child)
    for element in root.iter():
        _adapt(element, key)
    root.attrib.clear()
    root.attrib |= {"viewBox": f"0 0 {width:g} {height:g}", "role": "img", "class": "drawing",
                    "aria-labelledby": f"{key}-title {key}-words", "style": f"max-width: {width:g}px"}
    for place, (tag, text) in enumerate((("title", title), ("desc", words))):
        element = ElementTree.Element(f"{{{_SVG}}}{tag}", {"id": f"{key}-{'title' if tag == 'title' else 'words'}"})
        element.text = plain(text)
        root.insert(place, element)
    return Markup(ElementTree.tostring(root, encoding="unicode"))


def _adapt(element: ElementTree.Element, key: str) -> None:
    """Make names unique on the page, and colours and fonts those of the page."""
    for name, value in list(element.attrib.items()):
        if name == "id":
            # Groups are named by matplotlib for its own use; only what is referred to needs its name.
            if element.tag.endswith(("}g", "}svg")):
                del element.attrib[name]
            else:
                element.attrib[name] = f"{key}-{value}"
        elif name == _LINK:
            del element.attrib[name]
            element.attrib["href"] = value.replace("#", f"#{key}-", 1)
        elif "url(#" in value:
            element.attrib[name] = value.replace("url(#", f"url(#{key}-")
    # Variables are known to style only, not to attributes.
    coloured = [name for name in ("fill", "stroke") if element.attrib.get(name) in _VARIABLES]
    moved = "; ".join(f"{name}: {element.attrib.pop(name)}" for name in coloured)
    style = "; ".join(filter(None, (element.attrib.get("style"), moved)))
    if style:
        style = re.sub(r"font:\s*(?:[a-z0-9]+\s+)*?([\d.]+)px\s+[^;]*", r"font-size: \1px", style)
        element.attrib["style"] = re.sub(r"#0102[0-9a-f]{2}", lambda m: f"var(--{_VARIABLES[m[0]]})", style)


def rows_of_labels(axes: Axes, names: list[str], marked: list[bool]) -> None:
    """Names at the left of rows 0, 1, ... counted from above; marked ones in the colour that asks for attention."""
    axes.set_yticks(range(len(names)), labels=names)
    axes.tick_params(axis="y", length=0, labelcolor=INK)
    for text, is_marked in zip(axes.get_yticklabels(), marked, strict=True):
        if is_marked:
            text.set_color(MARK)
            text.set_fontweight("bold")
    axes.set_ylim(len(names) - 0.5, -0.5)
    axes.spines["left"].set_visible(False)


def finite_range(values: np.ndarray, margin: float = 0.06) -> tuple[float, float]:
    """Ends of an axis that holds all finite values, never of width zero."""
    values = values[np.isfinite(values)]
    low, high = (float(values.min()), float(values.max())) if values.size else (0.0, 1.0)
    width = high - low
    if not width > 1e-12 * max(abs(low), abs(high), 1e-290):
        width = max(abs(low), 1.0)
    return low - margin * width, high + margin * width
