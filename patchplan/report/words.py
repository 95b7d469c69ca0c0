"""All sentences that a person reads, and how numbers are written for people."""

from __future__ import annotations

import math

from patchplan.check.records import Cause, NodePeak, Verdict
from patchplan.circuit.packages import counts_to_fit
from patchplan.quantity import engineering
from patchplan.report.records import Plan

NOT_BUILDABLE = "Cannot be built with these parts."


def percent(value: float) -> str:
    """Two digits as a percentage: ``0.31 %``."""
    if not math.isfinite(value):
        return "an unknown share"
    if abs(value) < 0.001:
        return "0 %" if value == 0 else "below 0.001 %"
    return f"{value:.0f} %" if abs(value) >= 99.5 else f"{value:.2g} %"


def plain(value: float, digits: int = 3) -> str:
    """A number with as many digits as it deserves and no exponent where one can be spared."""
    text = f"{value:.{digits}g}"
    return f"{value:.0f}" if "e" in text and 1 <= abs(value) < 1e6 else text


def counted(number: int, noun: str) -> str:
    """``1 package``, ``27 parts``, ``no multiplier``."""
    if number == 0:
        return f"no {noun}"
    return f"{number} {noun}" + ("" if number == 1 else "s")


def headline(plan: Plan) -> str:
    """The verdict in one sentence: what does not work comes first."""
    verdict = plan.verdict
    if verdict.verdict == "not_buildable" or plan.circuit is None:
        return NOT_BUILDABLE
    largest = percent(verdict.max_error_percent)
    if verdict.verdict == "overload":
        return f"Does not work: {_list([n.node for n in verdict.nodes if not n.ok])} would leave the linear range."
    if verdict.verdict == "inaccurate":
        return f"Does not follow the equation closely enough: the error reaches {largest} of peak."
    within = f"Follows the equation within {largest.removeprefix('below ')} of peak"
    if verdict.horizon is not None:
        unit = plan.system.time_unit
        within += f" up to {plain(verdict.horizon)} {unit}, as far as a chaotic system can be followed"
    spread = percent(verdict.spread_percent)
    driven = {node.limit_volts for node in plan.circuit.nodes.values() if node.role not in ("source", "reference")}
    inside = f"inside {driven.pop():.1f} V" if len(driven) == 1 else "inside its limit"
    return f"{within} (boards spread {spread}); every node stays {inside}."


def reasons(plan: Plan) -> tuple[str, ...]:
    """Why a plan does not work, one sentence each; empty where it does."""
    verdict = plan.verdict
    faults = plan.sizing.faults
    if verdict.verdict == "overload":
        return tuple(n.cause or _overload(n) for n in verdict.nodes if not n.ok)
    if verdict.verdict == "inaccurate":
        return tuple(f"{c.cause}: {percent(c.error_percent)}." for c in verdict.budget[:3])
    return faults if verdict.verdict == "not_buildable" or plan.circuit is None else ()


#: What lowers an error, by the cause that the check names.
_REMEDIES = (
    ("rounding", "Take a finer resistor series, or wider limits of values, under [build]."),
    ("bandwidth", "Take faster op amps or multipliers, or a slower speed, under [build]."),
    ("slew", "Take op amps of a higher slew rate, or a slower speed, under [build]."),
    ("gain", "Take op amps of a higher open-loop gain under [build]."),
    ("bias", "Take op amps of a lower bias current, or a faster speed, under [build]."),
    ("switch", "Take larger resistors (resistor_limits) under [build], or a switch of lower resistance."),
    ("op amps", "Take better op amps and multipliers, or another speed, under [build]."),
)


def remedies(plan: Plan) -> tuple[str, ...]:
    """What would mend a plan that does not work."""
    build, verdict = plan.problem.build, plan.verdict
    if verdict.verdict == "overload":
        return tuple(dict.fromkeys(_more_room(plan, node.node) for node in verdict.nodes if not node.ok))
    if verdict.verdict != "inaccurate":
        return ()
    ways = remedy_of(_largest(verdict).cause) if verdict.budget else []
    if build.speed != "free":
        ways.append('Let the planner choose the speed: speed = "free" under [build].')
    return (*ways, "Or accept more with --accept, if the rig can live with it.")


def remedy_of(cause: str) -> list[str]:
    """What lowers a cause of error: one sentence, or none."""
    return [way for part, way in _REMEDIES if part in cause][:1]


def _more_room(plan: Plan, node: str) -> str:
    """What gives the signal at an overloaded node more room."""
    mapped = plan.circuit.nodes.get(node) if plan.circuit else None
    signal = mapped.signal.removesuffix(".out") if mapped else node
    if signal in plan.problem.terminals:
        return f"Ask for fewer volts per unit at the terminal of {signal}."
    if signal in plan.problem.ranges:
        return f"Widen the range of {signal} under [ranges]: the solution leaves it."
    return f"State a wider range of {signal} under [ranges], so that its scale factor leaves more room."


def speed(plan: Plan) -> tuple[str, ...]:
    """How fast the board runs, the window of speeds, and whether real time lies in it."""
    sizing, unit = plan.sizing, plan.system.time_unit
    second = float(plan.system.time_unit_seconds)
    if not sizing.time_scale > 0:
        return ()
    takes = f"1 {unit} of the problem takes {engineering(sizing.time_scale, 's')} on the board"
    first = f"Runs {_factor(second / sizing.time_scale)}: {takes}."
    slow, fast = (second / end if end else math.inf for end in (sizing.window[1], sizing.window[0]))
    kinds = [_kind(plan, "slow", sizing.window[1]), _kind(plan, "fast", sizing.window[0])]
    window = f"The window is {times_faster(slow)} to {times_faster(fast)} times real time."
    ends = (
        f"Slow end, {kinds[0]}: {_sentence(sizing.limits[1])}",
        f"Fast end, {kinds[1]}: {_sentence(sizing.limits[0])}",
    )
    meaning = " ".join(text for kind, text in _KINDS_OF_ENDS if kind in kinds)
    judged = plan.speed_curve.reason if plan.speed_curve else ""
    if math.isclose(sizing.time_scale, second) and plan.speed_curve and plan.speed_curve.judgement == "possible":
        judged = ""
    return tuple(s for s in (first, " ".join((window, *ends, meaning)), sizing.outside, judged) if s)


#: What the two kinds of ends of the window mean.
_KINDS_OF_ENDS = (
    ("soft", "Beyond a soft end a board can be built, at a larger error."),
    ("hard", "Beyond a hard end no values reach."),
)


def _kind(plan: Plan, end: str, time_scale: float) -> str:
    """Whether an end of the window is hard or soft."""
    rows = [x for x in plan.sizing.speed_limits if x.end == end and x.time_scale == time_scale]
    return "hard" if any(x.hard for x in rows) else "soft"


def made_of(plan: Plan) -> str:
    """Stages, packages and parts in one sentence."""
    counts, patch = plan.patch.counts(), plan.patch
    pieces = [counted(counts.get(kind, 0), kind) for kind in ("integrator", "summer", "inverter", "multiplier")]
    if patch.sign_stages and patch.sign_stages <= patch.sign_stages_lower_bound:
        summing = sum(s.signal.startswith("part of ") for s in patch.stages)
        if counts.get("inverter", 0):
            pieces[2] += " (fewest possible)"
        elif summing:
            pieces[1] += f" ({summing} for signs, fewest possible)"
    sentence = ", ".join(p for p in pieces if not p.startswith("no ") or p.endswith("multiplier"))
    if plan.circuit is None:
        return sentence + "."
    packages, to_fit = counts_to_fit(plan.circuit.parts)
    return f"{sentence}; {counted(packages, 'package')}, {counted(to_fit, 'part')}.{sign_gap(plan)}"


def sign_gap(plan: Plan) -> str:
    """How far the count of sign stages may be from the fewest, where the search stopped before it knew."""
    count, least = plan.patch.sign_stages, plan.patch.sign_stages_lower_bound
    if not plan.patch.signs_open or count <= least:
        return ""
    more = "" if plan.choices.get("think") == "high" else "; --think high searches on"
    return f" {count} of the stages only turn signs, at least {least} are needed (a gap of {count / least:.2f}){more}."


def forms(plan: Plan) -> tuple[str, ...]:
    """A sentence on each linear block whose form was chosen among several."""
    sentences = []
    for row in (r for r in plan.considered if r.chosen and not r.reason):
        rivals = [r for r in plan.considered if r.block == row.block and r.tolerance_percent is not None]
        written = next(r for r in plan.considered if r.block == row.block)
        spread, other = percent(row.tolerance_percent or 0.0), percent(written.tolerance_percent or 0.0)
        if row is written:
            sentences.append(
                f"{row.block} keeps its companion form, the best of {len(rivals)} weighed (parts spread it {spread})."
            )
        else:
            sentences.append(
                f"{row.block} is built in the form {row.form}: parts spread it {spread}, in its companion form {other} "
                f"({row.stages} stages instead of {written.stages})."
            )
    return tuple(sentences)


def trims(plan: Plan) -> tuple[str, ...]:
    """What trimmers do, or would do, to the spread: one sentence, or none."""
    trimming = plan.sizing.trimming
    if trimming is None or not trimming.trimmers:
        return ()
    before, after = percent(100 * trimming.before), percent(100 * trimming.after)
    which = counted(len(trimming.trimmers), "trimmer")
    if trimming.fitted:
        verb = "takes" if len(trimming.trimmers) == 1 else "take"
        return (f"{which}, set as the bring-up sheet says, {verb} the spread by parts from {before} to {after}.",)
    return (f"{which} would take the spread by parts from {before} to {after}: trim = true under [build].",)


def largest_error(plan: Plan) -> str:
    """The top of the error budget, "" where there is none."""
    if not plan.verdict.budget:
        return ""
    top = _largest(plan.verdict)
    return f"Largest error: {top.cause}, {percent(top.error_percent)}."


def story(plan: Plan) -> tuple[str, ...]:
    """The plan told in about five sentences."""
    return tuple(
        s for s in (headline(plan), *speed(plan), made_of(plan), *forms(plan), *trims(plan), largest_error(plan)) if s
    )


CAUTIONS = (
    "Supplies: set the current limit low for the first power-up, and check polarity and volts before the op amps are "
    "in place. A reversed supply destroys every package at once.",
    "Driven machines: an actuator, motor or loop under test can move without warning when a plan starts, saturates or "
    "loses a wire. Keep people out of its reach, and have a stop that does not go through this board.",
    "Local codes and licensed practice come first. This plan is a calculation, no release for use on people, on mains, "
    "or where a failure can hurt.",
    "Figures of the catalogue may be from memory, as it says there: confirm them with the maker's data sheet.",
)

BARE = "Look over the board bare: no shorts between the rails and ground, every decoupling capacitor at its package."
RAILS = "Without packages, apply {low:.3g} V and {high:.3g} V and measure both rails at every socket.{logic}"
LOGIC = " Pins named LOGIC want the supply of the control lines, 5 V."
FIT = "Switch off, fit the packages, set the current limit to what the packages need at rest and half as much again."
REFERENCE = "Switch on. Measure {ref}: it should stand at {volts:.4g} V within {tolerance}."
NO_REFERENCE = "Switch on and measure both rails again. This board needs no reference."
HOLD = (
    "Keep OPERATE low: the board is in hold. Set sources and other control lines to what they are at time 0, wait "
    "{wait} (ten time constants of the slowest start network), and check the volts below, node by node."
)
SET_DIALS = (
    "With the power off, turn each dial to its planned value before anything is measured or trimmed: {dials}. An "
    "ohmmeter shows it while the wiper is not connected; later the mark of the dial does."
)
DIAL = "{ref} to {at} % of its travel, {ohm} from end a ({net}) to the wiper"
SET_TRIMMERS = "Set the trimmers in the order of the table of trimming, by runs from the start values."
NO_HOLD = "This board has no hold: it runs from power-up. Check each node against the limits of its swing."
OPERATE = (
    "Take OPERATE high and start the sources in the same moment; a run lasts {run}. Compare each watched terminal with "
    "its picture."
)
RUN = "Start the sources; the pictures show the first {run}. Compare each watched terminal with its picture."
WHEN_OPERATE = "for the run, {run}; low (hold) for at least {rest} before each run"
CONTROL_NOTE = (
    "Times are circuit time, counted from the start of operate. High closes the normally open contacts, low the "
    "normally closed ones. A line is a logic signal from outside; nothing on the board drives it."
)
TRIM_NOTE = (
    "Set them from the top down, each until the signal stands as told in a run from its start. Resistors, capacitors "
    "and multiplier scales alone spread boards by {before} without trimmers and by {after} once all stand."
)
TRIM_ONCE = " Once is enough: what is set later hardly moves what was set before."
TRIM_ROUNDS = " Go through them {rounds} times: what is set later moves a little what was set before."
TRIM_WISH = " The board has none of them; trim = true under [build] fits them."
TRIM_START = "in hold"
TRIM_TIME = "at {time} of circuit time"
SERIAL_NOTE = (
    "These are the pieces that were measured or numbered: each belongs where it stands here, and nowhere else."
)
KNOB_NOTE = "{ref} sets {knob} from {low:.4g} to {high:.4g}; as planned it stands at {at} % of its travel, {shape}."
LINEAR = "linear"
BENT = "up to {bend} of the travel off a straight line"
DIAL_NOTE = (
    "Travel is counted from the end at which the table begins. It is a little longer than the range, so that tracks at "
    "both ends of their tolerance cover the range."
)
PIN_NOTE = "Confirm the pin numbers with the maker's data sheet. Names in capitals are control lines and spare pins."
STATIC_NOTE = (
    "Integrators stand at their start values; summers, inverters and multipliers follow from them. The allowance "
    "covers the tolerances of the parts and usual offsets. A node far off points at the stage that drives it."
)


def printable(text: str) -> str:
    """Text without control characters: a problem file may come from anybody, and a terminal obeys them."""
    return "".join(letter if letter.isprintable() else "?" for letter in text)


def _overload(node: NodePeak) -> str:
    limit, time = f"{plain(node.limit_volts)} V", engineering(node.time, "s")
    return f"Node {node.node} reaches {plain(node.peak_volts)} V at {time} of circuit time; its limit is {limit}."


def _largest(verdict: Verdict) -> Cause:
    """Largest cause of the nominal board's error; what a part may be off by is a matter between boards."""
    causes = [c for c in verdict.budget if ", if " not in c.cause] or list(verdict.budget)
    return max(causes, key=lambda cause: cause.error_percent)


def _factor(factor: float) -> str:
    if math.isclose(factor, 1.0, rel_tol=1e-6):
        return "in real time"
    return (
        f"{times_faster(factor)} times faster than real time"
        if factor >= 1
        else f"{times_faster(1 / factor)} times slower than real time"
    )


def times_faster(factor: float) -> str:
    """Factors from 1000 up with blanks between groups, small ones as fractions."""
    if not math.isfinite(factor):
        return "any number of"
    if factor < 0.1:
        return f"1/{times_faster(1 / factor)}"
    rounded = float(f"{factor:.3g}")
    return f"{rounded:,.0f}".replace(",", " ") if rounded >= 1000 else plain(rounded)


def _sentence(text: str) -> str:
    return text if text.endswith(".") or not text else text + "."


def _list(items: list[str]) -> str:
    return items[0] if len(items) == 1 else ", ".join(items[:-1]) + " and " + items[-1] if items else ""
