"""The work behind ``patchplan options``: read, compare, pick, write."""

from __future__ import annotations

import sys
from collections.abc import Mapping, Sequence
from pathlib import Path

from patchplan.errors import PatchplanError

DONE, FAILS = 0, 1


def compared(
    file: Path, folder: Path, plan_into: Path | None, *, accept: str, spread: str, axes: Mapping[str, Sequence[str]],
    pictures: bool, trust_paths: bool, think: str, with_words: bool,
) -> tuple[int, str, dict[str, bytes]]:  # fmt: skip
    """Exit code, what to say, and the files written.

    Raises
    ------
    PatchplanError
        Where something asked for cannot be used; nothing is written then.
    """
    from patchplan.compare.asked import axes_of, percent_of
    from patchplan.compare.records import Wish
    from patchplan.report.folder import may_write
    from patchplan.report.progress import shown_progress

    if not accept and (spread or plan_into):
        raise PatchplanError(
            f"{'--spread' if spread else '--plan-into'} needs a pick. Add --accept, such as --accept 1%."
        )
    wish = Wish(percent_of(accept, "--accept"), percent_of(spread, "--spread") if spread else None) if accept else None
    may_write(folder, "options.json")
    if plan_into:
        may_write(plan_into)
    with shown_progress(with_words) as progress:
        progress("Reading the problem")
        from patchplan.circuit.catalogue import catalogue_names, load_catalogue
        from patchplan.equation.explicit import system_of
        from patchplan.equation.reader import read_problem

        problem = read_problem(file, part_names=catalogue_names(), trust_paths=trust_paths)
        system = system_of(problem)
        asked = axes_of(load_catalogue(problem.own_parts), **axes)
        from patchplan.builds import options, pick
        from patchplan.report.options_files import options_files, write_options
        from patchplan.report.options_words import options_summary

        comparison = options(problem, axes=asked, progress=progress, system=system)
        picked = pick(problem, comparison, wish, think=think, progress=progress, system=system) if wish else None
        progress("Writing the comparison")
        files = options_files(comparison, problem.build, wish=wish, picked=picked, pictures=pictures)
        write_options(files, folder)
        text = options_summary(comparison, problem.build, folder, wish=wish, picked=picked, colour=sys.stdout.isatty())
        if plan_into and picked and picked.plan:
            from patchplan.report.write import write_plan

            write_plan(picked.plan, plan_into, pictures=pictures)
            text += f"  The full plan of the pick is in {plan_into}\n"
    failed = all(o.fault for o in comparison.options) or (picked is not None and picked.option is None)
    return (FAILS if failed else DONE), text, files
