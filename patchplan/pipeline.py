"""The straight run from a problem to a plan, and the choice between a few of them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict, dataclass, replace
from typing import Any

from patchplan.check.compare import check_circuit
from patchplan.check.records import Verdict
from patchplan.check.worst import worst_of_all
from patchplan.circuit.build import build_circuit
from patchplan.circuit.catalogue import load_catalogue
from patchplan.circuit.switched import with_references
from patchplan.circuit.target import check_multiplier, target_of
from patchplan.compare.records import SpeedCurve
from patchplan.compare.speed_curve import speed_curve
from patchplan.equation.explicit import build_system, system_of
from patchplan.equation.faults import rendered
from patchplan.equation.problem import Build, Problem
from patchplan.equation.system import System
from patchplan.equation.uncertain import uncertain_system
from patchplan.errors import Fault, ProblemFaults
from patchplan.form.offsets import find_form
from patchplan.form.realise import FORMS
from patchplan.form.records import Form
from patchplan.form.rewrite import Rewritten, with_forms
from patchplan.horizon import within_horizon
from patchplan.patch.build import build_patch
from patchplan.patch.records import Patch
from patchplan.ranges import Ranges, find_ranges
from patchplan.reach.records import Reach
from patchplan.reach.reference import find_reach
from patchplan.report.records import Plan
from patchplan.sensitivity import Sensitivity, find_sensitivity
from patchplan.shortlist import Forms, as_written, consider, handicap, shortlist, told
from patchplan.sizing.crowding import crowding
from patchplan.sizing.records import Sizing, Target
from patchplan.sizing.size import size
from patchplan.sizing.trimming import find_trimming, with_trimmers

#: A plan with offsets has more wires and must better the plan without by this factor in error and spread together.
OFFSET_COST = 1.25
#: A plan with more multipliers must better the one with fewer by this factor.
MULTIPLIER_COST = 1.5
_LEFT_OUT = "The tolerance of {} is not in the ranges: it changes a function of time or a start from within."
#: Branch-and-bound nodes that the search for the fewest sign stages may take.
SIGN_NODES = {"low": 100, "normal": 500, "high": 20000}


@dataclass(frozen=True, slots=True)
class Choices:
    """Every free decision of a plan.

    Attributes
    ----------
    offsets
        Whether signals far from zero may be carried as a difference.
    speed
        "free", "real time", or how many times faster than the problem; None takes the problem file's wish.
    think
        How long to search: low, normal or high.
    blocks
        Form of linear blocks, as (name of the output, form); blocks that are not named stay as written.
    factoring
        Whether sums may be taken out as factors where that saves multipliers.
    summers
        Inputs of integrators, as ``x<-x*y``, in front of which a summer stands because of a resistor limit.
    """

    offsets: bool = True
    speed: str | float | None = None
    think: str = "normal"
    blocks: Forms = ()
    factoring: bool = True
    summers: tuple[str, ...] = ()


def plan(
    problem: Problem, *, accept: float = 5.0, think: str = "normal", progress: Callable[[str], None] | None = None,
    system: System | None = None,
) -> Plan:  # fmt: skip
    """Plan a problem with the best of a short list of choices.

    Parameters
    ----------
    accept
        Largest nominal error of a plan that follows its equation [% of peak].
    progress
        Called with the name of each step as it begins.
    system
        The problem's System, where it is at hand.

    Raises
    ------
    ProblemFaults
        Where the problem file cannot be used.
    CannotBuild
        Where no part of the catalogue serves the wishes (supply, reference).
    """
    system = system or system_of(problem)
    solved: dict[Forms, Reach] = {}

    def attempt(choices: Choices) -> Plan:
        forms = choices.blocks
        if forms not in solved:
            (progress or _quiet)("Solving the problem")
            solved[forms] = reach_of(problem, system, with_forms(system, dict(forms)))
        return plan_with(problem, choices, accept=accept, progress=progress, system=system, reach=solved[forms])

    try:
        build = problem.build
        considered = () if build.forms else consider(problem, system)
        likely = (asked_forms(build, system),) if build.forms else shortlist(considered)
        runs = [attempt(Choices(offsets=build.offsets is not False, think=think, blocks=forms)) for forms in likely]
        plain_forms = as_written(considered)
        if not build.forms and plain_forms not in solved and all(_merit(run)[0] for run in runs):
            runs.append(attempt(replace(Choices(**runs[0].choices), blocks=plain_forms)))
        found = _bettered(min(runs, key=lambda run: _merit(run, handicap(run))), attempt)
    except ProblemFaults as error:
        raise rendered(error, problem) from None
    found = replace(found, sizing=_with_suggestion(found, accept))
    return replace(found, considered=told(considered, [*runs, found], found), speed_curve=_curve(found, accept))


def _bettered(found: Plan, attempt: Callable[[Choices], Plan]) -> Plan:
    """The plan, or a better one that differs from it in one choice after the other.

    Each choice is tried only where the plan at hand asks for it: it carries offsets, takes sums out as factors, runs
    into a resistor limit, or is inaccurate.
    """

    def changed(**choices: Any) -> Plan:
        return attempt(replace(Choices(**found.choices), **choices))

    if found.problem.build.offsets is None and set(found.form.offsets) - set(found.form.scales):
        plain = changed(offsets=False)
        found = found if _merit(found, OFFSET_COST) < _merit(plain) else plain
    if found.patch.factors:
        plain = changed(factoring=False)
        found = plain if _merit(plain, MULTIPLIER_COST) < _merit(found) else found
    summers = crowding(found.patch, found.sizing, found.target) if found.sizing.faults else ()
    if summers:
        found = min(found, changed(summers=summers), key=_merit)
    if found.verdict.verdict == "inaccurate" and found.choices["think"] == "normal":
        found = min(found, changed(think="high"), key=_merit)
    return found


def _quiet(step: str) -> None:
    """No progress is shown."""


def _with_suggestion(found: Plan, accept: float) -> Sizing:
    """The sizing with the trimmers that would help, where the board has none."""
    sizing = found.sizing
    if found.circuit is None or sizing.trimming is not None:
        return sizing
    near = within_horizon(found.sensitivity, linear=found.form.system.is_linear)
    return replace(
        sizing,
        trimming=find_trimming(found.form, found.patch, found.ranges, near, sizing, found.target, accept=accept),
    )


def _curve(found: Plan, accept: float) -> SpeedCurve:
    """Error and spread against speed of the plan that was taken."""
    return speed_curve(
        found.form, found.patch, found.ranges, found.sensitivity, found.target, found.sizing,
        run=found.problem.build.run, accept=accept,
    )  # fmt: skip


def plan_with(
    problem: Problem, choices: Choices, *, accept: float = 5.0, progress: Callable[[str], None] | None = None,
    system: System | None = None, reach: Reach | None = None,
) -> Plan:  # fmt: skip
    """One straight run with all decisions taken.

    ``system`` and ``reach`` are what an earlier run with the same forms of blocks went by, where they are at hand.
    """
    say = progress or _quiet
    build = problem.build
    say("Reading the equations")
    system = system or build_system(problem)
    catalogue = load_catalogue(problem.own_parts)
    target = target_of(build, catalogue)
    written = with_forms(system, dict(choices.blocks))
    if reach is None:
        say("Solving the problem")
        reach = reach_of(problem, system, written)
    form = form_of(problem, choices, written, reach, target)
    say("Drawing the patch")
    patch, ranges, sensitivity = drawn(build, choices, form, reach, differential=target.multiplier.differential)
    if patch.counts().get("multiplier"):
        check_multiplier(build, catalogue)
    say("Choosing values")
    sizing = sized(build, choices, form, patch, ranges, sensitivity, target, accept=accept)
    warnings = (*form.notes, *reach.warnings, *sizing.notes, *_unset_starts(form, build))
    found = Plan(
        problem, system, reach, form, patch, ranges, sensitivity, target, sizing, None,
        not_buildable(sizing.faults), asdict(choices), warnings,
    )  # fmt: skip
    if sizing.faults:
        return found
    reach = worst_of_all(reach, form, patch, sizing)
    warnings = (*form.notes, *reach.warnings, *sizing.notes, *_unset_starts(form, build))
    patch, sizing = with_references(patch, sizing, target, float(form.system.duration))
    circuit = build_circuit(form, patch, sizing, target, build, catalogue, stand_ins=reach.reference.waveforms)
    say("Checking the board")
    verdict = check_circuit(
        circuit, reach.reference, sensitivity, patch, sizing, target, accept=accept, system=form.system,
        others=reach.worst[1:],
    )  # fmt: skip
    found = replace(found, reach=reach, patch=patch, sizing=sizing)
    return replace(found, circuit=circuit, verdict=verdict, warnings=(*warnings, *circuit.notes, *verdict.warnings))


def asked_forms(build: Build, system: System) -> Forms:
    """The forms of linear blocks that the file asks for.

    Raises
    ------
    ProblemFaults
        Where there is no such block, or it can't take the form.
    """
    remedy = f"Name the output of a linear block and one of {', '.join(FORMS)}."
    for name, form in build.forms:
        if form not in FORMS:
            raise ProblemFaults([Fault(f"{form} is no form of a block.", remedy, f"build.forms.{name}")])
    try:
        with_forms(system, dict(build.forms))
    except ValueError as error:
        raise ProblemFaults([Fault(str(error), remedy, "build.forms")]) from None
    return build.forms


def reach_of(problem: Problem, system: System, written: Rewritten) -> Reach:
    """Ranges of all signals, over the plant's own uncertainty too, for boards within the build's tolerances."""
    uncertain, left_out = uncertain_system(problem, system)
    reach = find_reach(written.extended, problem.ranges, problem.build, uncertain=uncertain)
    return replace(reach, warnings=(*reach.warnings, *(_LEFT_OUT.format(name) for name in left_out)))


def form_of(problem: Problem, choices: Choices, written: Rewritten, reach: Reach, target: Target) -> Form:
    """The Form that the choices ask for."""
    swing = min(-target.op_amp.low, target.op_amp.high)
    form = find_form(written.system, reach, problem.terminals, offsets=choices.offsets, swing=swing, sums=written.sums)
    return replace(form, notes=(*written.notes, *form.notes))


def drawn(
    build: Build, choices: Choices, form: Form, reach: Reach, *, differential: bool = True
) -> tuple[Patch, Ranges, Sensitivity]:
    """What follows from a Form, whatever the parts but for the inputs of multipliers."""
    patch = build_patch(
        form,
        hold=build.run != "free",
        node_limit=SIGN_NODES[choices.think],
        factoring=choices.factoring,
        summers=choices.summers,
        differential=differential,
    )
    ranges = find_ranges(patch, form, reach)
    return patch, ranges, find_sensitivity(form, patch, ranges)


def sized(
    build: Build, choices: Choices, form: Form, patch: Patch, ranges: Ranges, sensitivity: Sensitivity, target: Target,
    *, accept: float,
) -> Sizing:  # fmt: skip
    """Values for one Target."""
    speed = build.speed if choices.speed is None else choices.speed
    # Trimmed boards differ so little that rounding shows.
    think = "high" if build.trim and choices.think == "normal" else choices.think
    sizing = size(form, patch, ranges, sensitivity, target, speed=speed, run=build.run, think=think, accept=accept)
    if not build.trim:
        return sizing
    near = within_horizon(sensitivity, linear=form.system.is_linear)
    trimming = find_trimming(form, patch, ranges, near, sizing, target, accept=accept, fitted=True)
    return with_trimmers(patch, near, replace(sizing, trimming=trimming))


def not_buildable(faults: tuple[str, ...]) -> Verdict:
    """Verdict of a plan that the parts at hand cannot realise."""
    return Verdict("not_buildable", 0.0, 0.0, 0.0, None, (), (), (), warnings=faults)


def _unset_starts(form: Form, build: Build) -> tuple[str, ...]:
    """A free run has nothing on the board that sets start values: which ones the file asks for all the same."""
    moved = [s.name for s in form.system.states if s.start]
    if build.run != "free" or not moved:
        return ()
    return (
        f"A free run sets no start values: the check begins at those of the file, but the board begins near 0 V "
        f'({", ".join(moved)}). run = "once" under [build] sets them.',
    )


def _merit(found: Plan, handicap: float = 1.0) -> tuple[int, float]:
    """Smaller is better: verdict first, then nominal error plus spread of the worst watched signal.

    Both are taken as shares of the signal's whole peak, whatever its error base, so that plans with and without offsets
    compare.
    """
    order = ("follows", "inaccurate", "overload", "not_buildable")
    reference, sensitivity = found.reach.reference, found.sensitivity
    base = dict(zip(sensitivity.watched, sensitivity.base, strict=True))
    worst = 0.0
    for signal in found.verdict.signals:
        peak = abs(reference.of(signal.name)).max() or 1.0
        worst = max(worst, (signal.max_error_percent + signal.spread_percent) * float(base[signal.name]) / float(peak))
    return order.index(found.verdict.verdict), worst * handicap
