"""The colours of pages and figures, light and dark, each told apart from its ground.

Contrast is that of WCAG 2: at least 4.5 for text and 3 for marks. The hues are those of Okabe
and Ito; on white the reddish purple is darkened, in the dark the light ones take over.
"""

from __future__ import annotations

from collections.abc import Mapping

LIGHT: Mapping[str, str] = {
    "paper": "#fffefb",
    "ink": "#1f2328",
    "quiet": "#5c6269",
    "rule": "#d9d6cd",
    "wash": "#f5f3ec",
    "link": "#0a5a94",
    "alert": "#a33c00",
    "alert-wash": "#fdf1e7",
    "hue1": "#0072b2",
    "hue2": "#c85400",
    "hue3": "#008560",
    "hue4": "#a8558a",
}
DARK: Mapping[str, str] = {
    "paper": "#15181c",
    "ink": "#e4e1d9",
    "quiet": "#a2a7ad",
    "rule": "#3a3f46",
    "wash": "#1d2126",
    "link": "#7cc0ec",
    "alert": "#ff9d5c",
    "alert-wash": "#2b2018",
    "hue1": "#56b4e9",
    "hue2": "#f08a3c",
    "hue3": "#2fbe93",
    "hue4": "#d98fb8",
}

# Stand-ins that figures are drawn with; in the page they become variables of the style sheet.
INK = "#010203"
PAPER = "#fdfcfe"
HUES = ("#0072b2", "#c85400", "#008560", "#a8558a")
MARKERS = ("o", "s", "^", "D", "v", "P", "X")

_STAND_INS: Mapping[str, str] = {
    INK: "currentColor",
    PAPER: "var(--paper)",
    **{hue: f"var(--hue{n})" for n, hue in enumerate(HUES, start=1)},
}


def page_colour(colour: str) -> str:
    """What a stand-in becomes in the page; every other colour is a mistake.

    Raises
    ------
    ValueError
        For a colour that would not follow light and dark.
    """
    colour = colour.lower()
    if colour == "none" or colour in _STAND_INS:
        return _STAND_INS.get(colour, colour)
    raise ValueError(f"{colour} is no colour of the page")


def hue(index: int) -> str:
    """Colour of the index-th group: four hues, then ink, then again."""
    return (*HUES, INK)[index % 5]


def marker(index: int) -> str:
    """Marker of the index-th group; with its hue it is the same again after 35 groups."""
    return MARKERS[index % len(MARKERS)]


def contrast(first: str, second: str) -> float:
    """Contrast ratio of two colours ``#rrggbb``, 1 to 21.

    References
    ----------
    WCAG 2.2, "contrast ratio" and "relative luminance".
    """
    bright, dark = sorted((_luminance(first), _luminance(second)), reverse=True)
    return (bright + 0.05) / (dark + 0.05)


def _luminance(colour: str) -> float:
    channels = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def style_variables(colours: Mapping[str, str]) -> str:
    """Declarations for the style sheet: ``--paper: #fffefb; ...``."""
    return " ".join(f"--{name}: {colour};" for name, colour in colours.items())
