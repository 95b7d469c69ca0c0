"""Predicted error and spread against speed as a picture."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from patchplan.compare.records import SpeedCurve
from patchplan.report import style
from patchplan.report.records import Plan

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = NDArray[np.float64]
#: Causes drawn at most in one panel, those that matter most anywhere.
MOST_CAUSES = 6
#: A panel reaches this far below the lowest total, on to the next decade; causes that are smaller everywhere are left
#: out.
BELOW = 3.0


def speed_picture(plan: Plan, curve: SpeedCurve) -> Figure:
    """Error above, spread below, each with its causes, against how many times faster than real time the board runs."""
    from matplotlib.figure import Figure

    unit = float(plan.system.time_unit_seconds)
    speeds = unit / np.array(curve.time_scales)
    figure = Figure(figsize=(style.PICTURE_WIDTH, style.SPEED_HEIGHT))
    upper = figure.add_axes(style.SPEED_UPPER)
    lower = figure.add_axes(style.SPEED_LOWER, sharex=upper)
    own = unit / plan.sizing.time_scale
    panels = ((upper, "error", curve.error, curve.parts, curve.chosen[0]),
              (lower, "spread", curve.spread, curve.spreads, curve.chosen[1]))  # fmt: skip
    for axes, word, total, causes, chosen in panels:
        _panel(axes, word, speeds, np.array(total), causes)
        axes.plot([own], [chosen], label="this plan", **style.CHOSEN_POINT)
        axes.legend(loc="upper left", bbox_to_anchor=(1.01, 1.02), borderaxespad=0.0)
        _marks(axes, unit / np.array(plan.sizing.window), name=axes is upper)
    ends = np.append(unit / np.array(plan.sizing.window), (own, 1.0))
    upper.set_xlim(float(ends.min()) / 1.6, float(ends.max()) * 1.6)
    upper.set_title("Predicted error and spread against speed, with exact values")
    upper.tick_params(labelbottom=False)
    lower.set_xlabel("speed [times real time]")
    return figure


def _panel(axes: Axes, word: str, speeds: Array, total: Array, causes: Mapping[str, Sequence[float]]) -> None:
    low, high = _decades(total, causes)
    axes.plot(speeds, total, label=word, **style.TOTAL_LINE)
    seen = [cause for cause in causes if max(causes[cause]) > low]
    seen.sort(key=lambda cause: -float(np.max(np.array(causes[cause]) / np.maximum(total, low))))
    for cause, line in zip(seen[:MOST_CAUSES], style.CAUSE_LINES, strict=False):
        values = np.array(causes[cause])
        axes.plot(speeds, np.where(values > 0, values, np.nan), label=cause, **line)
    axes.set_xscale("log")
    axes.set_yscale("log")
    axes.set_ylim(low, high)
    for axis in (axes.xaxis, axes.yaxis):
        axis.set_major_formatter(_plain_power)
        axis.set_minor_formatter("")
    axes.set_ylabel(f"{word} [% of peak]", fontsize=style.LABEL)
    axes.yaxis.set_label_coords(style.SPEED_NAME, 0.5)


def _decades(total: Array, causes: Mapping[str, Sequence[float]]) -> tuple[float, float]:
    """Whole decades that hold the total and what is not far below it."""
    positive = total[total > 0]
    least = float(positive.min()) if positive.size else 1.0
    most = max(float(total.max()), *(max(shares) for shares in causes.values()), least)
    return 10.0 ** np.floor(np.log10(least / BELOW)), 10.0 ** np.ceil(np.log10(1.2 * most))


def _plain_power(value: float, _: float) -> str:
    """A decade as a person writes it: 0.01, 1, 10 000."""
    return f"{value:,.0f}".replace(",", " ") if value >= 1 else f"{value:.12f}".rstrip("0")


def _marks(axes: Axes, window: Array, *, name: bool) -> None:
    """Sand where the window is, and a line at real time."""
    axes.axvspan(float(window.min()), float(window.max()), color=style.LIGHT["sand"], alpha=style.BAND_OPACITY, lw=0)
    axes.axvline(1.0, **style.HORIZON_LINE)
    if name:
        place: dict[str, Any] = {"xycoords": axes.get_xaxis_transform(), "textcoords": "offset points"}
        axes.annotate(
            "real time", (1.0, 0.98), (3, 0), va="top", fontsize=style.SMALL, color=style.LIGHT["over"], **place
        )
