"""From a matplotlib figure to an inline SVG that follows the page: its text, colours and ids."""

from __future__ import annotations

import contextlib
import io
import math
import re
import warnings
import xml.etree.ElementTree as ET
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from html import escape
from typing import TYPE_CHECKING, Any

from glidefit.writing.colours import INK, page_colour
from glidefit.writing.wording import visible

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

WIDTH = 400  # px of a figure at its natural size
FONT = 11.0

_STYLE: dict[Any, Any] = {
    "svg.fonttype": "none",
    "svg.hashsalt": "glidefit",
    "text.parse_math": False,
    "path.simplify": False,
    "font.size": FONT,
    "text.color": INK,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.facecolor": "none",
    "figure.facecolor": "none",
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": FONT - 1,
    "ytick.labelsize": FONT - 1,
    "axes.labelsize": FONT,
}
_NUMBER = re.compile(r"-?\d+\.\d+")
_DOT = re.compile(r"M (\S+) (\S+) L \1 \2(?= |$)")
_KEPT_STYLE = {"fill", "fill-opacity", "opacity", "text-anchor", "font-size", "font-weight"}
_KEPT_STYLE |= {f"stroke{end}" for end in ("", "-width", "-opacity", "-dasharray")}
_KEPT_STYLE |= {"stroke-linecap", "stroke-linejoin"}


@dataclass(frozen=True, slots=True, kw_only=True)
class Key:
    """One entry of a legend: a mark and what it stands for."""

    hue: str  # stand-in colour
    marker: str
    text: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Drawing:
    """A figure ready for the page."""

    svg: str
    heading: str
    caption: str
    legend: tuple[Key, ...] = ()


@contextlib.contextmanager
def drawing_style() -> Iterator[None]:
    """The style of all figures, whatever the user's own matplotlib settings are."""
    import matplotlib as mpl

    with mpl.rc_context(), warnings.catch_warnings():
        # The browser brings its own letters; matplotlib only needs their width.
        warnings.filterwarnings("ignore", message=r"Glyph .* missing from font")
        mpl.rcdefaults()
        mpl.rcParams.update(_STYLE)
        yield


def canvas(height: float, *, width: float = WIDTH) -> Figure:
    """An empty figure of this size in px."""
    from matplotlib.backends.backend_svg import FigureCanvasSVG
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width / 72, height / 72))
    FigureCanvasSVG(figure)
    return figure


def panel(figure: Figure, *, left: float, top: float, right: float, bottom: float) -> Axes:
    """Axes whose edges keep these distances in px from the edges of the figure."""
    width, height = figure.get_size_inches() * 72
    return figure.add_axes(
        (
            left / width,
            bottom / height,
            (width - left - right) / width,
            (height - top - bottom) / height,
        )
    )


def draw_dots(
    ax: Axes, x: Sequence[float], y: Sequence[float], *, colour: str, size: float, alpha: float
) -> None:
    """Dots as strokes of no length with round ends: thousands of them stay a light path."""
    from matplotlib.patches import PathPatch
    from matplotlib.path import Path

    points = [point for point in zip(x, y, strict=True) for _ in range(2)]
    if points:
        ax.add_patch(
            PathPatch(
                Path(points, [Path.MOVETO, Path.LINETO] * (len(points) // 2)),
                fill=False,
                ec=colour,
                lw=size,
                capstyle="round",
                joinstyle="round",
                alpha=alpha,
            )
        )


def svg_text(figure: Figure, *, key: str, title: str, description: str) -> str:
    """The figure as an inline SVG.

    Parameters
    ----------
    key : str
        Starts every id, so that several figures share a page.
    title, description : str
        Alternative text: what is shown, and its main numbers.
    """
    out = io.StringIO()
    figure.savefig(out, format="svg", metadata=dict.fromkeys(("Date", "Creator", "Format", "Type")))
    root = ET.fromstring(visible(out.getvalue()))
    used = {
        found
        for element in root.iter()
        for value in element.attrib.values()
        for found in re.findall(r"^#(.+)$|^url\(#(.+)\)$", value)
        for found in found
        if found
    }
    body = "".join(_element(child, key=key, used=used) for child in root)
    return framed(body, key=key, view=root.attrib["viewBox"], title=title, description=description)


def framed(body: str, *, key: str, view: str, title: str, description: str) -> str:
    """An SVG element around its body, with its alternative text."""
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="{view}" role="img" '
        f'aria-labelledby="{key}-title {key}-desc" stroke-linejoin="round">'
        f'<title id="{key}-title">{escape(visible(title))}</title>'
        f'<desc id="{key}-desc">{escape(visible(description))}</desc>{body}</svg>'
    )


def _element(element: ET.Element, *, key: str, used: set[str]) -> str:
    """An element rewritten: short numbers, colours of the page, only the ids that are used."""
    tag = element.tag.rpartition("}")[2]
    if tag in {"metadata", "style"}:
        return ""
    attributes = {}
    for name, value in element.attrib.items():
        name = name.rpartition("}")[2]
        if name == "id":
            if value in used:
                attributes["id"] = f"{key}-{value}"
        elif name == "style":
            attributes |= _style(value)
        elif name == "transform":
            if not value.startswith("rotate(-0 "):
                attributes["transform"] = _short(value)
        elif value.startswith(("#", "url(#")):
            attributes[name] = value.replace("#", f"#{key}-", 1)
        else:
            attributes[name] = _DOT.sub(r"M\1 \2h0", _short(" ".join(value.split())))
    inside = "".join(_element(child, key=key, used=used) for child in element)
    inside = escape((element.text or "").strip(), quote=False) + inside
    if not attributes and tag in {"g", "defs"}:
        return inside if tag == "g" or not inside else f"<defs>{inside}</defs>"
    start = "".join(f' {name}="{escape(value)}"' for name, value in attributes.items())
    return f"<{tag}{start}>{inside}</{tag}>" if inside else f"<{tag}{start}/>"


def _style(text: str) -> dict[str, str]:
    """Style declarations as attributes; colours that follow the page stay a style."""
    found: dict[str, str] = {}
    variables: list[str] = []
    for part in text.split(";"):
        name, _, value = (piece.strip() for piece in part.partition(":"))
        if name == "font":  # a shorthand in some versions of matplotlib
            name, value = "font-size", next(w for w in value.split() if w.endswith("px"))
        if name not in _KEPT_STYLE:
            continue
        if name in {"fill", "stroke"}:
            value = page_colour(value)
        if value.startswith("var("):
            variables.append(f"{name}:{value}")
        else:
            found[name] = _short(value)
    if variables:
        found["style"] = ";".join(variables)
    return found


def _short(text: str) -> str:
    return _NUMBER.sub(lambda match: f"{float(match[0]):.2f}".rstrip("0").rstrip("."), text)


def log_ticks(low: float, high: float) -> list[float]:
    """Round numbers between two positive ends: decades, or finer if these are too few."""
    from matplotlib.ticker import MaxNLocator

    first, last = math.floor(math.log10(low)), math.ceil(math.log10(high))
    for steps in ((1,), (1, 3), (1, 2, 5)):
        ticks = [m * 10.0**p for p in range(first, last + 1) for m in steps]
        inside = [t for t in ticks if low <= t <= high]
        if len(inside) >= 3:
            break
    else:
        inside = [float(t) for t in MaxNLocator(5).tick_values(low, high) if low <= t <= high]
    every = -(-len(inside) // 6)
    return inside[::every]


def plain_tick(value: float, _position: Any = None) -> str:
    """A number on an axis, with a true minus sign."""
    return f"{value:g}".replace("-", "−")


def set_log_axis(axis: Any, low: float, high: float) -> None:
    """Plain numbers on a logarithmic axis."""
    axis.set_major_locator(_fixed(log_ticks(low, high)))
    axis.set_minor_locator(_fixed([]))
    axis.set_major_formatter(plain_tick)


def set_linear_axis(axis: Any, *, ticks: int = 5) -> None:
    """Few plain numbers on a linear axis."""
    from matplotlib.ticker import MaxNLocator

    axis.set_major_locator(MaxNLocator(nbins=ticks, steps=[1, 2, 2.5, 5, 10]))
    axis.set_major_formatter(plain_tick)


def _fixed(ticks: Sequence[float]) -> Any:
    from matplotlib.ticker import FixedLocator

    return FixedLocator(list(ticks))
