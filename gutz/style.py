"""How every figure of `gutz` looks: colours, type sizes, words made safe for drawing.

In:  nothing.
Out: constants and small functions; the one place to change a colour.

The phase colours were chosen here to differ in lightness as well as hue, so that they stay apart for
colour-blind readers and in grey print; every region is named in words as well. Maps of numbers run evenly
from light to dark.
"""

from typing import Any

from matplotlib.colors import Colormap, LinearSegmentedColormap

from gutz.phases import Phase

PHASE_COLOURS: dict[Phase, str] = {
    Phase.UNDECIDED: "#ffffff",
    Phase.VACUUM: "#f4f1ea",
    Phase.NORMAL: "#d8d2c6",
    Phase.MOTT: "#e9c46f",
    Phase.SUPERFLUID: "#2f5d8c",
    Phase.SUPERFLUID_1: "#8fb4d6",
    Phase.SUPERFLUID_2: "#6a93a3",
    Phase.PAIRED: "#7c2f63",
    Phase.COUNTERFLOW: "#c4662c",
    Phase.DENSITY_WAVE: "#b3bd7a",
    Phase.NEEL: "#5c6b2f",
    Phase.SUPERSOLID: "#45a296",
    Phase.SEPARATED: "#d8a8c0",
    Phase.COLLAPSE: "#46413c",
}

INK = "#26231f"
PALE_INK = "#6d675f"
PAPER = "#ffffff"
LINE_COLOURS = ("#2f5d8c", "#c4662c", "#7c2f63", "#5c6b2f")
LINE_STYLES = ("-", "--", "-.", ":")
HATCH = "////"

TITLE_SIZE = 11.0
TEXT_SIZE = 9.0
SMALL_SIZE = 7.5
LABEL_SIZES = (10.5, 9.0, 7.5)
DPI = 160
FONT = ("DejaVu Sans",)

RAMP: Colormap = LinearSegmentedColormap.from_list(
    "gutz", ["#fbf6ea", "#dfdcbf", "#a9c5ac", "#6aa5a4", "#3d7a96", "#2c4f7e", "#232a55"]
)
"""Light to dark, for numbers of one sign."""

BALANCE: Colormap = LinearSegmentedColormap.from_list(
    "gutz_balance", ["#6b2f14", "#b8622b", "#e2b48c", "#f7f4ee", "#9bbcd6", "#3f73a3", "#1f355f"]
)
"""Brown below zero, blue above, for numbers of both signs."""

RC: dict[Any, Any] = {
    "font.family": FONT,
    "font.size": TEXT_SIZE,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.8,
    "axes.titlesize": TEXT_SIZE,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "text.color": INK,
    "text.usetex": False,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": TEXT_SIZE - 0.5,
    "ytick.labelsize": TEXT_SIZE - 0.5,
    "hatch.linewidth": 0.5,
    "hatch.color": INK,
    "pdf.fonttype": 42,
    "svg.hashsalt": "gutz",
}
"""Settings of matplotlib, applied around each drawing and never globally."""


def clean(words: str, most: int = 110) -> str:
    """User text fit for drawing: printable characters only, cut to a length that fits."""
    kept = "".join(mark if mark.isprintable() else " " for mark in words[: 4 * most]).strip()
    return kept if len(kept) <= most else kept[: most - 1] + "…"


def ink_on(colour: str) -> str:
    """Dark or light ink, whichever can be read on a colour (W3C relative luminance, contrast at its best)."""
    channels = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return INK if 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2] > 0.2 else PAPER


def quantity(words: str, unit: str) -> str:
    """An axis label: words, and the unit in brackets where there is one."""
    return clean(f"{words} ({unit})" if unit not in ("", "1") else words)
