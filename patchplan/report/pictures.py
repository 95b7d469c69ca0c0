"""Pictures of a plan as SVG: watched signals, node swings, error budget."""

from __future__ import annotations

import io
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from patchplan.check.records import Curve
from patchplan.circuit.records import NodeMap
from patchplan.quantity import engineering
from patchplan.report import style
from patchplan.report.folder import unused_name
from patchplan.report.records import Plan
from patchplan.report.speed_picture import speed_picture
from patchplan.report.tables import share_of_limit, swing_volts, swinging
from patchplan.report.words import percent, plain

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = NDArray[np.float64]

#: Signals and rows drawn at most; the tables hold all.
MOST_SIGNALS = 12
MOST_ROWS = 40
#: Points drawn of a curve, as pairs of least and largest value.
MOST_POINTS = 3000


def pictures(plan: Plan) -> dict[str, str]:
    """File name -> SVG text: ``signal_*``, ``nodes``, ``budget`` and ``speed.svg``; empty where nothing was built."""
    circuit = plan.circuit
    if circuit is None:
        return {}
    import matplotlib

    settings: Any = dict(style.PICTURE_SETTINGS)
    with matplotlib.rc_context(settings):
        drawn: dict[str, str] = {}
        for curve in plan.verdict.curves[:MOST_SIGNALS]:
            node = circuit.nodes[circuit.watched[curve.name]]
            drawn[unused_name("signal", curve.name, "svg", drawn)] = svg_text(signal_picture(plan, curve, node))
        drawn["nodes.svg"] = svg_text(swing_picture(plan))
        if plan.verdict.budget:
            drawn["budget.svg"] = svg_text(budget_picture(plan))
        if plan.speed_curve and any(plan.speed_curve.error):
            drawn["speed.svg"] = svg_text(speed_picture(plan, plan.speed_curve))
    return drawn


def signal_picture(plan: Plan, curve: Curve, node: NodeMap) -> Figure:
    """The circuit over the equation's solution, and their difference below on the same time axis."""
    figure = new_figure(style.SIGNAL_HEIGHT)
    upper = figure.add_axes(style.UPPER_PANEL)
    lower = figure.add_axes(style.LOWER_PANEL, sharex=upper)
    _signal_panel(upper, plan, curve, node)
    _difference_panel(lower, plan, curve)
    return figure


def _signal_panel(axes: Axes, plan: Plan, curve: Curve, node: NodeMap) -> None:
    axes.set_title(f"{curve.name} at node {node.node}")
    axes.plot(*thinned(curve.times, curve.reference), label="equation", **style.SOLUTION_LINE)
    axes.plot(*thinned(curve.times, curve.circuit), label="circuit", **style.CIRCUIT_LINE)
    seen = np.concatenate([curve.reference, curve.circuit])
    axes.set_ylim(*_view(seen[np.isfinite(seen)], _limits_in_units(node)))
    axes.set_xlim(float(curve.times[0]), float(curve.times[-1]))
    _label(axes, f"{curve.name} [problem units]")
    axes.tick_params(labelbottom=False)
    axes.legend(loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=2, borderaxespad=0.2)
    _band(axes, node)
    _right_scale(axes, node.sign * node.volts_per_unit, node.offset_volts, f"v({node.node}) [V]")
    if plan.verdict.horizon is not None:
        _horizon(axes, plan.verdict.horizon)


def _band(axes: Axes, node: NodeMap) -> None:
    """Sand where the node may go, with its edges marked in volts, as far as they lie in view."""
    low, high = _limits_in_units(node)
    axes.axhspan(low, high, color=style.LIGHT["sand"], alpha=style.BAND_OPACITY, linewidth=0)
    bottom, top = axes.get_ylim()
    place: dict[str, Any] = {"xycoords": axes.get_yaxis_transform(), "textcoords": "offset points"}
    for edge, shift, side in ((low, -1.5, "top"), (high, 1.5, "bottom")):
        if bottom <= edge <= top:
            volts = node.sign * node.volts_per_unit * edge + node.offset_volts
            axes.axhline(edge, **style.EDGE_LINE)
            # The label stands outside the band, where no curve should be.
            axes.annotate(f"limit {volts:+.3g} V", (0.01, edge), (0, shift), va=side, fontsize=style.SMALL, **place)


def _right_scale(axes: Axes, factor: float, offset: float, name: str) -> None:
    """Scale at the right edge that reads ``factor * left + offset``.

    Drawn by hand: a second set of axes on top of the first takes twice the time of everything else in the picture.
    """
    from matplotlib.markers import TICKRIGHT

    ends = sorted(factor * end + offset for end in axes.get_ylim())
    ticks = np.array([tick for tick in _few_ticks().tick_values(*ends) if ends[0] <= tick <= ends[1]])
    edge: dict[str, Any] = {"transform": axes.get_yaxis_transform(), "clip_on": False}
    heights = (ticks - offset) / factor
    axes.plot(
        np.ones(ticks.size), heights, marker=TICKRIGHT, linestyle="", color=style.LIGHT["ink"], ms=style.TICK, **edge
    )
    for tick, height in zip(ticks, heights, strict=True):
        axes.text(style.RIGHT_NUMBERS, height, f"{tick:z.4g}".replace("-", "\N{MINUS SIGN}"), va="center", **edge)
    axes.text(
        style.RIGHT_NAME, 0.5, name, transform=axes.transAxes, rotation=90, ha="center", va="center", size=style.LABEL
    )


def _difference_panel(axes: Axes, plan: Plan, curve: Curve) -> None:
    difference = curve.circuit - curve.reference
    axes.axhline(0.0, **style.ZERO_LINE)
    axes.plot(*thinned(curve.times, difference), **style.DIFFERENCE_LINE)
    # Beyond the horizon of a chaotic system the difference says nothing and would dwarf what comes before.
    counted = np.isfinite(difference) & (curve.times <= (plan.verdict.horizon or np.inf))
    reach = 1.15 * float(np.max(np.abs(difference), initial=0.0, where=counted)) or 1.0
    axes.set_ylim(-reach, reach)
    _label(axes, "difference\n[problem units]")
    axes.set_xlabel(f"problem time [{plan.system.time_unit}]; 1 {plan.system.time_unit} takes "
                    f"{engineering(plan.sizing.time_scale, 's')} on the board")  # fmt: skip
    _right_scale(axes, 100 / error_base(plan, curve), 0.0, "[% of peak]")
    if plan.verdict.horizon is not None:
        axes.axvline(plan.verdict.horizon, **style.HORIZON_LINE)


def _label(axes: Axes, text: str) -> None:
    """Name of a left axis at a fixed place, so that the panels of a picture agree, and few ticks."""
    axes.set_ylabel(text, fontsize=style.LABEL)
    axes.yaxis.set_label_coords(style.LEFT_NAME, 0.5)
    axes.yaxis.set_major_locator(_few_ticks())


def _few_ticks() -> Any:
    from matplotlib.ticker import MaxNLocator

    return MaxNLocator(4, steps=[1, 2, 2.5, 5, 10])


def error_base(plan: Plan, curve: Curve) -> float:
    """What 100 % error means for a watched signal [problem units]."""
    if curve.name in plan.sensitivity.watched:
        return float(plan.sensitivity.base[plan.sensitivity.watched.index(curve.name)]) or 1.0
    return float(np.max(np.abs(curve.reference))) or 1.0


def _horizon(axes: Axes, time: float) -> None:
    axes.axvline(time, **style.HORIZON_LINE)
    # The name stands where there is room, clear of the limits' names at the left edge.
    late = time > sum(axes.get_xlim()) / 2
    place: dict[str, Any] = {"xycoords": axes.get_xaxis_transform(), "textcoords": "offset points"}
    axes.annotate(
        "compared up to here",
        (time, 0.98),
        (-3 if late else 3, 0),
        ha="right" if late else "left",
        va="top",
        fontsize=style.SMALL,
        color=style.LIGHT["over"],
        **place,
    )


def swing_picture(plan: Plan) -> Figure:
    """Swing of every node against its limits, those closest to their limit first."""
    rows = [(*swing_volts(plan, node), node.limit_volts, node) for node in swinging(plan)]
    left_out = len(rows) - MOST_ROWS
    rows = sorted(rows, key=lambda row: -share_of_limit(plan, row[-1]))[:MOST_ROWS]
    low, high, limit = (np.array(column) for column in tuple(zip(*rows, strict=True))[:3])
    share = np.array([share_of_limit(plan, row[-1]) for row in rows])
    failed = {peak.node for peak in plan.verdict.nodes if not peak.ok}
    over = [node.node in failed for *_, node in rows]
    places = range(len(rows))
    figure, axes = _chart(
        len(rows), "Node swings against their limits" + (f", {left_out} smaller ones left out" if left_out > 0 else "")
    )
    axes.barh(places, 2 * limit, style.BAND_BAR, -limit, color=style.LIGHT["sand"], alpha=style.BAND_OPACITY)
    axes.barh(places, high - low, style.BAR, low, color=[style.LIGHT["over" if bad else "inside"] for bad in over])
    for place, (edge, used, bad) in enumerate(zip(limit, share, over, strict=True)):
        text = f"{100 * used:.0f} % of {plain(edge)} V" + (", over" if bad else "")
        _beside(axes, edge * max(used, 1.0), place, text)
    widest = float(np.max(limit * np.maximum(share, 1.0)))
    axes.set_xlim(-1.08 * widest, 1.65 * widest)
    axes.set_yticks(
        places, [_clipped(f"{node.node} ({'-' if node.sign < 0 else '+'}{node.signal})") for *_, node in rows]
    )
    axes.set_xlabel("node voltage [V]")
    return figure


def _beside(axes: Axes, end: float, place: int, text: str) -> None:
    """Text a little to the right of the end of a bar; SVG drops blanks that would hold it off."""
    axes.annotate(text, (end, place), (3, 0), textcoords="offset points", va="center", fontsize=style.SMALL)


def budget_picture(plan: Plan) -> Figure:
    """Error budget, largest cause first."""
    rows = sorted(plan.verdict.budget, key=lambda cause: -cause.error_percent)[:15]
    figure, axes = _chart(len(rows), "Where the error comes from")
    values = [row.error_percent for row in rows]
    axes.barh(range(len(rows)), values, style.BAR, color=style.LIGHT["circuit"])
    for place, value in enumerate(values):
        _beside(axes, value, place, percent(value))
    axes.set_xlim(0.0, 1.18 * max(values) or 1.0)
    axes.set_yticks(range(len(rows)), [_clipped(row.cause) for row in rows])
    axes.set_xlabel("error [% of peak]")
    return figure


def thinned(times: Array, values: Array) -> tuple[Array, Array]:
    """The curve with least and largest value of each stretch of rows, so that no peak is lost.

    Returns
    -------
    tuple
        Times and values, shape ``(n,)`` with n about :data:`MOST_POINTS` at most.
    """
    if times.size <= MOST_POINTS:
        return times, values
    length = -(-times.size // (MOST_POINTS // 2))
    whole = times.size // length * length
    blocks = values[:whole].reshape(-1, length)
    starts = np.arange(0, whole, length)
    picks = [[0], starts + blocks.argmin(axis=1), starts + blocks.argmax(axis=1), np.arange(whole, times.size)]
    chosen = np.unique(np.concatenate(picks))
    return times[chosen], values[chosen]


def _view(seen: Array, limits: tuple[float, float]) -> tuple[float, float]:
    """Ends of the left axis: the curves, and each limit that they use a fair part of."""
    low, high = (float(seen.min()), float(seen.max())) if seen.size else (-1.0, 1.0)
    middle, half = (limits[0] + limits[1]) / 2, (limits[1] - limits[0]) / 2
    if low < middle - style.FAIR_PART * half:
        low = min(low, limits[0])
    if high > middle + style.FAIR_PART * half:
        high = max(high, limits[1])
    pad = style.PAD * (high - low) or 0.1 * abs(high) or 1.0
    return low - pad, high + pad


def _limits_in_units(node: NodeMap) -> tuple[float, float]:
    scale = node.sign * node.volts_per_unit
    low, high = sorted((edge - node.offset_volts) / scale for edge in (-node.limit_volts, node.limit_volts))
    return low, high


def _chart(rows: int, title: str) -> tuple[Figure, Axes]:
    """Figure with one row an entry, the first on top."""
    height = style.CHART_MARGIN + style.ROW_HEIGHT * max(rows, 2)
    figure = new_figure(height)
    left, bottom, width = style.CHART_PANEL
    axes = figure.add_axes((left, bottom / height, width, (height - style.CHART_MARGIN) / height))
    axes.set_title(title)
    axes.set_ylim(max(rows, 2) - 0.5, -0.5)
    axes.tick_params(axis="y", length=0)
    return figure, axes


def new_figure(height: float) -> Figure:
    """An empty picture of the usual width [inch]."""
    from matplotlib.figure import Figure

    return Figure(figsize=(style.PICTURE_WIDTH, height))


def svg_text(figure: Figure) -> str:
    """The picture as SVG, the same bytes for the same picture."""
    buffer = io.StringIO()
    figure.savefig(buffer, format="svg", metadata={"Date": None, "Creator": None})
    return buffer.getvalue()


def _clipped(text: str, most: int = 34) -> str:
    return text if len(text) <= most else text[: most - 1] + "…"
