"""What the terminal shows of a comparison of builds: the table, the pick, or what stands in its way."""

from __future__ import annotations

import re
from pathlib import Path

from patchplan.check.compare import REMEDY
from patchplan.circuit.packages import counts_to_fit
from patchplan.compare.front import excess, nearest
from patchplan.compare.records import Comparison, Option, Wish
from patchplan.equation.build_text import build_lines
from patchplan.equation.problem import Build
from patchplan.quantity import engineering
from patchplan.report import words
from patchplan.report.records import Picked
from patchplan.report.summary import painted, table_lines, wrapped
from patchplan.report.tables import Table

#: Rows of the table on the terminal; options.csv has all.
MOST_ROWS = 40
#: Combinations that cannot be built and are told of one by one.
MOST_FAULTS = 5
CHEAPEST = (
    "fewest packages, then fewest parts, then the coarser resistors, then less current, then the smaller spread and "
    "error (currents within 10 % tie); the catalogue has no prices"
)
#: Figures in which faults of one kind differ.
_NUMBER = re.compile(r"\d+(?:\.\d+)?(?: [num]?[sΩF]\b)?")


def options_summary(
    comparison: Comparison, usual: Build, folder: Path | None = None, *, wish: Wish | None = None,
    picked: Picked | None = None, colour: bool = False,
) -> str:  # fmt: skip
    """The table of builds, which cannot be built, and the pick.

    Parameters
    ----------
    usual
        The problem file's own wishes.
    wish, picked
        What a pick had to meet, and what was found.
    """
    blocks = [painted(words.printable(comparison.title), "title", colour)]
    if picked is not None and wish is not None:
        met = picked.option is not None
        said = pick_words(picked, wish) if met else miss_words(comparison, picked, wish)
        blocks += [painted(wrapped(said[0]), "good" if met else "bad", colour), *map(wrapped, said[1:])]
    blocks += [*map(wrapped, _told(comparison)), ""]
    built = [o for o in comparison.options if not o.fault]
    blocks += [*table_lines(options_table(comparison, usual)), ""] if built else []
    blocks += _faults([o for o in comparison.options if o.fault])
    if picked is not None and picked.option is not None:
        lines = build_lines(usual, picked.option.build)
        blocks.append(wrapped("Under [build], these lines give that plan:" if lines else "It is the file's own build."))
        blocks += [f"    {key} = {value}" for key, value in lines.items()]
    if folder is not None:
        blocks.append(wrapped(f"Written to {folder} (start with options.svg or options.csv)"))
    return "\n".join(blocks) + "\n"


def _told(comparison: Comparison) -> list[str]:
    built = [o for o in comparison.options if not o.fault]
    if not built:
        return ["None of the builds compared can be built."]
    told = [
        f"{words.counted(len(built), 'build')} compared. Error and spread between boards (one standard deviation) are "
        "predicted, not simulated [% of peak]; times: faster than real time; mA: from one rail. * marks those that no "
        "other beats in error, spread, parts, packages and current together."
    ]
    if any(o.build.offsets for o in built):
        told.append(
            "Signals carried with an offset count their error by half their swing; * compares by the whole peak."
        )
    return told


def _faults(options: list[Option]) -> list[str]:
    if not options:
        return []
    groups: dict[str, list[Option]] = {}
    for option in options:
        groups.setdefault(_NUMBER.sub("#", option.fault), []).append(option)
    lines = []
    for alike in list(groups.values())[:MOST_FAULTS]:
        names = "; ".join(build_name(o.build) for o in alike[:MOST_FAULTS])
        names += f" and {len(alike) - MOST_FAULTS} more" if len(alike) > MOST_FAULTS else ""
        whose = " (Figures are those of the first.)" if len({o.fault for o in alike}) > 1 else ""
        lines.append(wrapped(f"Cannot be built: {names}. {alike[0].fault}{whose}"))
    left_out = sum(len(alike) for alike in list(groups.values())[MOST_FAULTS:])
    return lines + ([wrapped(f"And {left_out} more, see options.csv.")] if left_out > 0 else [])


def pick_words(picked: Picked, wish: Wish) -> list[str]:
    """The pick and its checked figures."""
    option, plan = picked.option, picked.plan
    if option is None or plan is None:
        return []
    verdict = plan.verdict
    packages, parts = counts_to_fit(plan.circuit.parts if plan.circuit else ())
    told = [
        f"Cheapest within {wish_name(wish)}: {build_name(option.build)}. Checked in full, it follows within "
        f"{words.percent(verdict.max_error_percent)} of peak (boards spread {words.percent(verdict.spread_percent)}), "
        f"with {words.counted(packages, 'package')} and {words.counted(parts, 'part')}.",
        f"Cheapest: {CHEAPEST}.",
    ]
    return told + _refuted(picked)


def miss_words(comparison: Comparison, picked: Picked, wish: Wish) -> list[str]:
    """That no build meets the wish, what stands in the way, and which comes nearest."""
    if picked.refuted:
        return [f"No build meets {wish_name(wish)} when it is checked in full.", *_refuted(picked)]
    close = nearest(comparison.options, wish)
    if close is None:
        return [f"No build meets {wish_name(wish)}: none can be built."]
    by_spread = wish.spread_percent is not None and excess(close, Wish(wish.error_percent)) < excess(close, wish)
    figure = close.spread_percent if by_spread else close.error_percent
    causes = close.spread_causes if by_spread else close.causes
    first = (
        f"No build meets {wish_name(wish)}. The nearest is {build_name(close.build)}, with "
        f"{'a spread' if by_spread else 'an error'} of {words.percent(figure)}"
    )
    if not causes:
        return [first + "."]
    limit = f". Its largest part is {causes[0].cause}, {words.percent(causes[0].error_percent)}"
    limit += ", of which others cancel a share." if causes[0].error_percent > figure else "."
    ways = [REMEDY[causes[0].cause]] if by_spread else words.remedy_of(causes[0].cause)
    return [first + limit, *(f"To mend it: {way}" for way in ways), _would_do(close, wish)]


def _would_do(close: Option, wish: Wish) -> str:
    """The wish that the nearest build meets."""
    needed = [f"--accept {_up(close.error_percent)}%"] if close.error_percent > wish.error_percent else []
    if wish.spread_percent is not None and close.spread_percent > wish.spread_percent:
        needed.append(f"--spread {_up(close.spread_percent)}%")
    return f"It would do with {' '.join(needed)}."


def _up(value: float) -> str:
    """Two digits, rounded up, so that what is named works."""
    text = f"{value:.2g}"
    if float(text) < value:
        step = 10.0 ** (int(f"{value:e}".partition("e")[2]) - 1)
        text = f"{float(text) + step:.2g}"
    return text


def _refuted(picked: Picked) -> list[str]:
    return [
        f"Predicted to meet it, but refuted by the full check: {build_name(option.build)} "
        f"({plan.verdict.verdict}, {words.percent(plan.verdict.max_error_percent)}, spread "
        f"{words.percent(plan.verdict.spread_percent)})."
        for option, plan in picked.refuted
    ]


def wish_name(wish: Wish) -> str:
    """``an error of 1 %``, or ``an error of 1 % with a spread of 2 %``: as asked for, not rounded."""
    spread = "" if wish.spread_percent is None else f" with a spread of {wish.spread_percent:g} %"
    return f"an error of {wish.error_percent:g} %{spread}"


def options_table(comparison: Comparison, usual: Build | None = None) -> Table:
    """All builds, those that nothing beats first, each kind by rising error; the file's own is marked."""
    built = sorted((o for o in comparison.options if not o.fault), key=lambda o: (not o.best, o.error_percent))
    headers = ("  op amp", "form", "R", "R/C %", "V", "times", "error", "spread", "parts", "pkgs", "mA")
    own = [o for o in built if usual is not None and not build_lines(usual, o.build)]
    shown = built[:MOST_ROWS]
    # The file's own build is worth a row wherever it ranks.
    shown += [o for o in own if o not in shown]
    rows = [_row(option, own=option in own) for option in shown]
    left_out = len(built) - len(shown)
    notes = [f"and {left_out} more in options.csv"] if left_out > 0 else []
    note = "; ".join([*notes, *(["> is the file's own build"] if own else [])])
    if len({form_name(o.build) for o in built}) > 1:
        return Table("Builds", headers, tuple(rows), frozenset(range(3, 11)), note)
    bare = tuple((row[0], *row[2:]) for row in rows)
    return Table("Builds", (headers[0], *headers[2:]), bare, frozenset(range(2, 10)), note)


def _row(option: Option, *, own: bool) -> tuple[str, ...]:
    build = option.build
    return (
        f"{'*' if option.best else ' '}{'>' if own else ' '}{build.op_amp}",
        form_name(build).removeprefix("no offsets") or "plain",
        build.resistors,
        tolerance_name(build).removesuffix(" %"),
        supply_name(build.supply).removesuffix(" V"),
        _faster(option.speed),
        _short(option.error_percent),
        _short(option.spread_percent),
        str(option.parts),
        str(option.packages),
        _short(1e3 * option.supply_current),
    )


def _faster(speed: float) -> str:
    """Two digits, of a fraction those of its denominator: ``40k``, ``4.6``, ``1/21``."""
    return engineering(speed, "", 2) if speed >= 0.1 else f"1/{engineering(1.0 / speed, '', 2)}"


def _short(value: float) -> str:
    return words.percent(value).removesuffix(" %").replace("below ", "<")


def build_name(build: Build) -> str:
    """``TL07x, E24 1 %, ±15 V, real time, no offsets``."""
    speed = build.speed if isinstance(build.speed, str) else f"{words.times_faster(build.speed)} times real time"
    pieces = [
        build.op_amp, f"{build.resistors} {tolerance_name(build)}", supply_name(build.supply),
        *([] if speed == "free" else [speed]), *([form_name(build)] if form_name(build) else []),
    ]  # fmt: skip
    return ", ".join(pieces)


def tolerance_name(build: Build) -> str:
    """Of resistors and capacitors: ``1/2 %``; a stock file states its own: ``stock/2 %``."""
    resistors = "stock" if build.resistor_stock else f"{100 * build.resistor_tolerance:.2g}"
    capacitors = "stock" if build.capacitor_stock else f"{100 * build.capacitor_tolerance:.2g}"
    return f"{resistors}/{capacitors}" + ("" if build.resistor_stock and build.capacitor_stock else " %")


def supply_name(supply: tuple[float, float]) -> str:
    """``±15 V`` or ``-5/12 V``."""
    low, high = supply
    return f"±{high:g} V" if low == -high else f"{low:g}/{high:g} V"


def form_name(build: Build) -> str:
    """Names of the forms asked for, "" where the planner has no choice."""
    names = list(dict.fromkeys(form for _, form in build.forms))
    if build.offsets is not None:
        names.append("offsets" if build.offsets else "no offsets")
    return ", ".join(names)
