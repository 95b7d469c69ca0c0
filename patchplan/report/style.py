"""All colours, fonts and sizes of pictures, pages and the terminal."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

#: Hues by their job, on light paper.
LIGHT: Mapping[str, str] = {
    "ink": "#1f2a33", "paper": "#fbfaf6", "circuit": "#b4552d", "solution": "#3c6e8f",
    "inside": "#5d7f3b", "over": "#7d3c68", "sand": "#d9cfb8", "quiet": "#6b7278",
}  # fmt: skip

#: The same hues, lighter, on a dark page; sand turns into a dim band.
DARK: Mapping[str, str] = {
    "ink": "#e8e4d9", "paper": "#1b2329", "circuit": "#e08a60", "solution": "#7fb2d4",
    "inside": "#9dc274", "over": "#c987b3", "sand": "#4a4a40", "quiet": "#a4abb0",
}  # fmt: skip

#: Line forms, so that no meaning hangs on colour alone.
SOLUTION_LINE: Mapping[str, Any] = {"color": LIGHT["solution"], "linewidth": 1.1, "linestyle": "-"}
CIRCUIT_LINE: Mapping[str, Any] = {"color": LIGHT["circuit"], "linewidth": 1.6, "linestyle": (0, (4, 2.5))}
DIFFERENCE_LINE: Mapping[str, Any] = {"color": LIGHT["circuit"], "linewidth": 1.0}
EDGE_LINE: Mapping[str, Any] = {"color": LIGHT["quiet"], "linewidth": 0.8, "linestyle": "-"}
ZERO_LINE: Mapping[str, Any] = {"color": LIGHT["quiet"], "linewidth": 0.6, "linestyle": ":"}
HORIZON_LINE: Mapping[str, Any] = {"color": LIGHT["over"], "linewidth": 0.9, "linestyle": (0, (1, 2))}
#: Curves against speed: the total, and its causes in turn.
TOTAL_LINE: Mapping[str, Any] = {"color": LIGHT["circuit"], "linewidth": 2.0, "linestyle": "-"}
CHOSEN_POINT: Mapping[str, Any] = {"color": LIGHT["ink"], "marker": "o", "markersize": 5.0, "linestyle": ""}
CAUSE_LINES: tuple[Mapping[str, Any], ...] = tuple(
    {"color": LIGHT[hue], "linewidth": 1.0, "linestyle": (0, dash)}
    for hue, dash in (
        ("solution", (5, 2)),
        ("inside", (1, 1.5)),
        ("over", (7, 2, 1, 2)),
        ("solution", (2, 1)),
        ("inside", (10, 3)),
        ("over", (4, 1.5, 1, 1.5, 1, 1.5)),
    )
)
#: Opacity of the sand band behind the curves.
BAND_OPACITY = 0.35

#: Part of a limit that a curve must use for the limit to be drawn.
FAIR_PART = 0.35

#: Inches.
PICTURE_WIDTH = 7.4
SIGNAL_HEIGHT = 4.2
SPEED_HEIGHT = 5.2
ROW_HEIGHT = 0.27
CHART_MARGIN = 1.0
#: Left and bottom edge, width and height of the panels of a signal's picture, parts of the picture.
UPPER_PANEL = (0.13, 0.40, 0.74, 0.50)
LOWER_PANEL = (0.13, 0.12, 0.74, 0.21)
SPEED_UPPER = (0.12, 0.54, 0.61, 0.39)
SPEED_LOWER = (0.12, 0.10, 0.61, 0.39)
SPEED_NAME = -0.15
#: Left edge and width of a chart, parts of the picture; between them its bottom edge in inches.
CHART_PANEL = (0.34, 0.55, 0.62)
#: The panel of a comparison of builds, its legend at the right; forms of its marks, their size and that of the ring
#: around the pick [points]; how far marks of one count of parts stand apart, part of a count.
OPTIONS_PANEL = (0.10, 0.12, 0.66, 0.78)
MARKS = ("o", "s", "^", "D", "v", "P", "X")
MARK, RING = 5.5, 11.0
ASIDE = 0.5
#: Places of the names and numbers of the vertical axes, parts of the panel's width.
LEFT_NAME, RIGHT_NAME, RIGHT_NUMBERS = -0.11, 1.11, 1.015
#: Room above and below the curves, part of their swing.
PAD = 0.09
#: Bars, parts of a row.
BAR, BAND_BAR = 0.45, 0.84
#: Points.
TICK = 3.5
SMALL = 7.5
LABEL = 8.5

#: Comes with matplotlib, so that text is laid out alike everywhere.
SANS = ("DejaVu Sans",)

#: Settings of matplotlib; text stays text in SVG, and identifiers do not change from run to run.
PICTURE_SETTINGS: Mapping[str, Any] = {
    "figure.facecolor": LIGHT["paper"], "axes.facecolor": LIGHT["paper"], "savefig.facecolor": LIGHT["paper"],
    "text.color": LIGHT["ink"], "axes.labelcolor": LIGHT["ink"], "axes.edgecolor": LIGHT["quiet"],
    "xtick.color": LIGHT["ink"], "ytick.color": LIGHT["ink"], "axes.titlecolor": LIGHT["ink"],
    "font.family": list(SANS), "font.size": 9.0, "axes.titlesize": 10.0,
    "axes.titlelocation": "left", "axes.titley": 1.0,
    "axes.linewidth": 0.8, "axes.grid": False, "legend.frameon": False, "legend.fontsize": 8.5,
    "ytick.labelsize": 8.5, "xtick.labelsize": 8.5,
    "svg.fonttype": "none", "svg.hashsalt": "patchplan", "path.simplify_threshold": 0.4,
    "axes.formatter.useoffset": False, "axes.formatter.limits": (-4, 5), "mathtext.default": "regular",
}  # fmt: skip

#: Terminal colours, used on a terminal only.
TERMINAL: Mapping[str, str] = {"title": "\x1b[1m", "good": "\x1b[32m", "bad": "\x1b[35m", "end": "\x1b[0m"}


def page_variables(hues: Mapping[str, str]) -> str:
    """CSS custom properties of one set of hues."""
    return " ".join(f"--{name}: {hue};" for name, hue in hues.items())


def themed(svg: str) -> str:
    """SVG whose hues follow the page's light or dark setting; for embedding only."""
    for name, hue in LIGHT.items():
        svg = svg.replace(hue, f"var(--{name})")
    return svg
