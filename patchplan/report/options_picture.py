"""Error against parts count of every build, as SVG."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from patchplan.compare.records import Comparison, Option, Wish
from patchplan.report import style
from patchplan.report.pictures import new_figure, svg_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes

#: Errors are drawn from here on [%]; below it a board is as good as its check.
LEAST_ERROR = 1e-4


def options_picture(comparison: Comparison, *, wish: Wish | None = None, picked: Option | None = None) -> str:
    """One mark a build, its form by op amp; full where no other build beats it, ringed where it is the pick."""
    import matplotlib

    built = [o for o in comparison.options if not o.fault]
    settings: Any = dict(style.PICTURE_SETTINGS)
    with matplotlib.rc_context(settings):
        figure = new_figure(style.SIGNAL_HEIGHT)
        axes = figure.add_axes(style.OPTIONS_PANEL)
        axes.set_title("Builds compared: predicted error against parts")
        _marks(axes, built)
        _front(axes, built)
        if picked is not None:
            place = _place(picked, built)
            axes.plot(*place, "o", ms=style.RING, mfc="none", mec=style.LIGHT["ink"], label="picked", zorder=4)
        _frame(axes, built, wish)
        return svg_text(figure)


def _op_amps(built: list[Option]) -> list[str]:
    return list(dict.fromkeys(o.build.op_amp for o in built))


def _place(option: Option, built: list[Option]) -> tuple[float, float]:
    """Place of a mark; op amps stand side by side within one count of parts."""
    names = _op_amps(built)
    aside = (names.index(option.build.op_amp) - (len(names) - 1) / 2) * style.ASIDE / max(len(names), 1)
    return option.parts + aside, max(option.error_percent, LEAST_ERROR)


def _marks(axes: Axes, built: list[Option]) -> None:
    for number, name in enumerate(_op_amps(built)):
        mark = style.MARKS[number % len(style.MARKS)]
        for best in (False, True):
            chosen = [_place(o, built) for o in built if o.build.op_amp == name and o.best is best]
            axes.plot(
                [x for x, _ in chosen], [y for _, y in chosen], mark, ms=style.MARK,
                mec=style.LIGHT["circuit" if best else "quiet"],
                mfc=style.LIGHT["circuit"] if best else "none", zorder=3 if best else 2,
            )  # fmt: skip
        # For the legend alone: the form of the mark says which op amp, whether full or not.
        axes.plot([], [], mark, ms=style.MARK, mec=style.LIGHT["ink"], mfc="none", label=name)
    axes.plot([], [], "s", ms=style.MARK, color=style.LIGHT["circuit"], label="full: no other\nbuild beats it")


def _front(axes: Axes, built: list[Option]) -> None:
    """Least error that each count of parts buys; no line where more parts buy nothing."""
    least: list[tuple[int, float]] = []
    for option in sorted(built, key=lambda o: (o.parts, o.error_percent)):
        error = max(option.error_percent, LEAST_ERROR)
        if not least or error < least[-1][1]:
            least.append((option.parts, error))
    if len(least) == 1:
        return
    end = max(o.parts for o in built) + style.ASIDE
    axes.step(
        [x for x, _ in least] + [end], [y for _, y in least] + [least[-1][1]], where="post", zorder=1, **style.EDGE_LINE
    )


def _frame(axes: Axes, built: list[Option], wish: Wish | None) -> None:
    from matplotlib.ticker import FuncFormatter, MaxNLocator

    axes.set_yscale("log")
    axes.set_xlim(min(o.parts for o in built) - 1.0, max(o.parts for o in built) + 1.0)
    axes.xaxis.set_major_locator(MaxNLocator(integer=True))
    errors = [max(o.error_percent, LEAST_ERROR) for o in built]
    limit = [wish.error_percent] if wish is not None and wish.error_percent > 0 else []
    axes.set_ylim(min(errors + limit) / 2, 2 * max(errors + limit))
    for level in limit:
        axes.axhline(level, **style.HORIZON_LINE)
        place: dict[str, Any] = {"xycoords": axes.get_yaxis_transform(), "textcoords": "offset points"}
        axes.annotate(f"accepted: {level:g} %", (0.01, level), (0, 2), fontsize=style.SMALL, **place)
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, place: f"{value:g}"))
    axes.set_xlabel("parts to fit, packages included")
    axes.set_ylabel("predicted error [% of peak]", fontsize=style.LABEL)
    axes.legend(loc="upper left", bbox_to_anchor=(1.0, 1.0), borderaxespad=0.2)
