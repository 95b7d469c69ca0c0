"""One problem planned with many builds: what they share is found once, values are chosen for each, one is checked."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

from patchplan.circuit.catalogue import load_catalogue
from patchplan.circuit.target import check_multiplier, target_of
from patchplan.compare.front import cheapest_first, marked
from patchplan.compare.grid import grid_of, other_speeds, product_of
from patchplan.compare.rate import rated
from patchplan.compare.records import Axes, Comparison, Option, Wish
from patchplan.equation.build_text import with_build
from patchplan.equation.explicit import system_of
from patchplan.equation.faults import rendered
from patchplan.equation.problem import Build, Problem
from patchplan.equation.system import System
from patchplan.errors import CannotBuild, ProblemFaults
from patchplan.form.records import Form
from patchplan.form.rewrite import with_forms
from patchplan.patch.records import Patch
from patchplan.pipeline import Choices, asked_forms, drawn, form_of, plan, reach_of, sized
from patchplan.ranges import Ranges
from patchplan.reach.records import Reach
from patchplan.report.records import Picked, Plan
from patchplan.sensitivity import Sensitivity
from patchplan.shortlist import consider, shortlist
from patchplan.sizing.records import Sizing, Target

#: Plans that are checked in full at most before a pick is given up.
MOST_CHECKED = 5


def options(
    problem: Problem, *, axes: Axes | None = None, accept: float = 5.0, think: str = "low",
    progress: Callable[[str], None] | None = None, system: System | None = None,
) -> Comparison:  # fmt: skip
    """Figures of many builds of one problem, none of them simulated.

    Parameters
    ----------
    axes
        What to vary; by default a grid of at most thirty is made from the catalogue.
    accept
        Error allowed [% of peak]: what a DC-limit resistor of a free run is weighed against.
    think
        How long to search the values of each.
    progress
        Called with the name of each step as it begins.
    system
        The problem's System, where it is at hand.

    Raises
    ------
    ProblemFaults
        Where the problem file cannot be used.
    """
    axes = axes or Axes()
    shared = _Shared(problem, system or system_of(problem), accept, think)
    say = progress or (lambda step: None)
    say("Solving the problem")
    stated = any(key.startswith("build.reference") for key in problem.spans)
    try:
        forms = _forms(shared)
        if axes.given:
            builds = product_of(forms, axes, reference_stated=stated)
        else:
            builds = grid_of(forms, shared.catalogue, _speeds(shared, forms[0]), reference_stated=stated)
        rows = []
        for number, build in enumerate(builds, 1):
            say(f"Choosing values, build {number} of {len(builds)}")
            rows.append(shared.option(build))
    except ProblemFaults as error:
        raise rendered(error, problem) from None
    return Comparison(problem.title, marked(rows), problem.time_unit)


def pick(
    problem: Problem, comparison: Comparison, wish: Wish, *, think: str = "normal",
    progress: Callable[[str], None] | None = None, system: System | None = None,
) -> Picked:  # fmt: skip
    """The cheapest build that meets a wish, planned and checked in full.

    Where the check finds that a prediction was too good, the next cheapest is tried, :data:`MOST_CHECKED` at most.
    """
    refuted: list[tuple[Option, Plan]] = []
    for option in cheapest_first(comparison.options, wish)[:MOST_CHECKED]:
        changed = with_build(problem, option.build)
        found = plan(changed, accept=wish.error_percent, think=think, progress=progress, system=system)
        close = wish.spread_percent is None or found.verdict.spread_percent <= wish.spread_percent
        if found.verdict.verdict == "follows" and close:
            return Picked(option, found, tuple(refuted))
        refuted.append((option, found))
    return Picked(None, None, tuple(refuted))


def _forms(shared: _Shared) -> list[Build]:
    """The file's build in every form of the equations that deserves a run, the usual one first."""
    build = shared.problem.build
    likely = (asked_forms(build, shared.system),) if build.forms else shortlist(consider(shared.problem, shared.system))
    builds = [replace(build, forms=forms) for forms in likely]
    if build.offsets is not None:
        return builds
    try:
        form = shared.form(builds[0], target_of(build, shared.catalogue))[1]
    except CannotBuild:
        return builds
    if not set(form.offsets) - set(form.scales):
        return builds
    return [replace(b, offsets=True) for b in builds] + [replace(builds[0], offsets=False)]


def _speeds(shared: _Shared, usual: Build) -> list[str | float]:
    """Speeds around the one that the file's own build runs at."""
    try:
        sizing = shared.sizing(usual, target_of(usual, shared.catalogue))[-1]
    except CannotBuild:
        return []
    second = float(shared.problem.time_unit_seconds)
    return list(other_speeds(usual, sizing.window, sizing.time_scale, second))


@dataclass
class _Shared:
    """What builds share, found on first use."""

    problem: Problem
    system: System
    accept: float
    think: str
    reaches: dict[Build, Reach] = field(default_factory=dict)
    drawings: list[tuple[Reach, Form, tuple[Patch, Ranges, Sensitivity]]] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.catalogue = load_catalogue(self.problem.own_parts)

    def option(self, build: Build) -> Option:
        """Figures of one build, or why it cannot be."""
        try:
            target = target_of(build, self.catalogue)
            reach, form, drawing, sizing = self.sizing(build, target)
            return rated(build, self.catalogue, reach, form, *drawing, sizing, target)
        except CannotBuild as error:
            return Option(build, fault=str(error))

    def sizing(self, build: Build, target: Target) -> tuple[Reach, Form, tuple[Patch, Ranges, Sensitivity], Sizing]:
        """All records up to the values of one build."""
        reach, form = self.form(build, target)
        drawing = self._drawing(build, reach, form)
        if drawing[0].counts().get("multiplier"):
            check_multiplier(build, self.catalogue)
        return reach, form, drawing, sized(build, self._choices(build), form, *drawing, target, accept=self.accept)

    def form(self, build: Build, target: Target) -> tuple[Reach, Form]:
        """The equations as a build carries them, and the ranges of their signals."""
        choices = self._choices(build)
        written = with_forms(self.system, dict(choices.blocks))
        usual = self.problem.build
        # Ranges hold for boards within tolerance; nothing else of a build moves them.
        key = replace(
            usual, resistor_tolerance=build.resistor_tolerance, capacitor_tolerance=build.capacitor_tolerance,
            forms=build.forms,
        )  # fmt: skip
        if key not in self.reaches:
            self.reaches[key] = reach_of(replace(self.problem, build=key), self.system, written)
        reach = self.reaches[key]
        return reach, form_of(self.problem, choices, written, reach, target)

    def _choices(self, build: Build) -> Choices:
        return Choices(offsets=build.offsets is not False, think=self.think, blocks=build.forms)

    def _drawing(self, build: Build, reach: Reach, form: Form) -> tuple[Patch, Ranges, Sensitivity]:
        for known, same, drawing in self.drawings:
            if known is reach and same == form:
                return drawing
        differential = self.catalogue.multipliers[build.multiplier].differential
        drawing = drawn(build, self._choices(build), form, reach, differential=differential)
        self.drawings.append((reach, form, drawing))
        return self.drawings[-1][2]
