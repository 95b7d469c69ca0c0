"""The command line: the only place that prints."""

from __future__ import annotations

import sys
from collections.abc import Callable
from enum import StrEnum
from pathlib import Path
from typing import Annotated

import typer

app = typer.Typer(
    add_completion=False, rich_markup_mode=None, pretty_exceptions_enable=False, no_args_is_help=True,
    help="From a differential equation to an op-amp integrator circuit that obeys it.",
)  # fmt: skip

#: Exit codes.
FOLLOWS, FAILS, BAD_INPUT, INTERRUPTED = 0, 1, 2, 130


class Think(StrEnum):
    """How long to search."""

    low = "low"
    normal = "normal"
    high = "high"


@app.command()
def plan(
    file: Annotated[Path, typer.Argument(help="Problem file (TOML).", metavar="FILE")],
    into: Annotated[Path | None, typer.Option(help="Folder of the plan; default outputs/<name of FILE>.")] = None,
    accept: Annotated[float, typer.Option(min=0.0, help="Largest error that counts as following [% of peak].")] = 5.0,
    as_json: Annotated[bool, typer.Option("--json", help="Print plan.json and nothing else.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", help="Print nothing but faults.")] = False,
    no_pictures: Annotated[bool, typer.Option("--no-pictures", help="Draw nothing.")] = False,
    trust_paths: Annotated[bool, typer.Option("--trust-paths", help="Let FILE name files outside its folder.")] = False,
    think: Annotated[Think, typer.Option(help="How long to search.")] = Think.normal,
) -> None:
    """Plan the circuit for a problem file and write the plan folder.

    Exit code 0: follows the equation; 1: planned but inaccurate, overloaded or not buildable; 2: bad input.
    """
    folder = into or Path("outputs") / file.stem

    def work() -> int:
        from patchplan.report.folder import may_write

        may_write(folder)
        with_words = not (quiet or as_json)
        code, text = _planned(file, accept, trust_paths, think, folder, not no_pictures, with_words)
        if as_json:
            text = (folder / "plan.json").read_text(encoding="utf-8")
        if as_json or not quiet:
            typer.echo(text, nl=False)
        return code

    raise typer.Exit(_guarded(work))


@app.command()
def options(
    file: Annotated[Path, typer.Argument(help="Problem file (TOML).", metavar="FILE")],
    accept: Annotated[str, typer.Option(help="Pick the cheapest build within this error [% of peak].")] = "",
    spread: Annotated[str, typer.Option(help="And within this spread between boards [% of peak].")] = "",
    op_amp: Annotated[list[str] | None, typer.Option(help="Op amp to compare; may be repeated, as all below.")] = None,
    series: Annotated[list[str] | None, typer.Option(help="Series of the resistors, such as E96.")] = None,
    tolerance: Annotated[
        list[str] | None, typer.Option(help="Tolerance of resistors (and capacitors), such as 1%,2%.")
    ] = None,
    supply: Annotated[list[str] | None, typer.Option(help="12 for rails of -12 V and 12 V, or -5,12.")] = None,
    speed: Annotated[list[str] | None, typer.Option(help='free, "real time", or how many times faster.')] = None,
    into: Annotated[Path | None, typer.Option(help="Folder; default outputs/<name of FILE>_options.")] = None,
    plan_into: Annotated[Path | None, typer.Option(help="Write the full plan of the pick to this folder.")] = None,
    as_json: Annotated[bool, typer.Option("--json", help="Print options.json and nothing else.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", help="Print nothing but faults.")] = False,
    no_pictures: Annotated[bool, typer.Option("--no-pictures", help="Draw nothing.")] = False,
    trust_paths: Annotated[bool, typer.Option("--trust-paths", help="Let FILE name files outside its folder.")] = False,
    think: Annotated[Think, typer.Option(help="How long to search the values of the pick.")] = Think.normal,
) -> None:
    """Compare builds of one problem: error, spread, parts, packages and supply current, and pick one.

    Without axes a grid of about thirty is made from the catalogue. Exit code 0: done; 1: no build meets --accept, or
    none can be built; 2: bad input.
    """
    folder = into or Path("outputs") / f"{file.stem}_options"
    axes = {"op_amps": op_amp, "series": series, "tolerances": tolerance, "supplies": supply, "speeds": speed}

    def work() -> int:
        from patchplan.compared import compared

        code, text, files = compared(
            file, folder, plan_into, accept=accept, spread=spread, axes={k: v or [] for k, v in axes.items()},
            pictures=not no_pictures, trust_paths=trust_paths, think=think.value, with_words=not (quiet or as_json),
        )  # fmt: skip
        if as_json:
            text = files["options.json"].decode()
        if as_json or not quiet:
            typer.echo(text, nl=False)
        return code

    raise typer.Exit(_guarded(work))


@app.command()
def start(
    file: Annotated[Path, typer.Argument(help="File to write.", metavar="[FILE]")] = Path("problem.toml"),
) -> None:
    """Write a commented problem file to begin from; an existing file is left alone."""

    def work() -> int:
        text = Path(__file__).with_name("report").joinpath("start.toml").read_bytes()
        try:
            with file.open("xb") as stream:
                stream.write(text)
        except FileExistsError:
            _complain(f"{file} exists and was left alone. Name another file, or move this one.")
            return BAD_INPUT
        typer.echo(f"Written to {file}. Next: patchplan plan {file}")
        return FOLLOWS

    raise typer.Exit(_guarded(work))


@app.command()
def parts() -> None:
    """List the op amps, multipliers and switches of the catalogue."""

    def work() -> int:
        from patchplan.circuit.catalogue import load_catalogue
        from patchplan.report.parts_list import parts_list

        typer.echo(parts_list(load_catalogue()), nl=False)
        return FOLLOWS

    raise typer.Exit(_guarded(work))


def main() -> None:
    """Entry point of the ``patchplan`` command."""
    app(prog_name="patchplan")


def _planned(
    file: Path, accept: float, trust_paths: bool, think: Think, folder: Path, pictures: bool, with_words: bool
) -> tuple[int, str]:
    """Read, plan and write; the exit code and what to say."""
    from patchplan.report.progress import shown_progress

    with shown_progress(with_words) as progress:
        progress("Reading the problem")
        from patchplan.circuit.catalogue import catalogue_names
        from patchplan.equation.explicit import system_of
        from patchplan.equation.reader import read_problem

        problem = read_problem(file, part_names=catalogue_names(), trust_paths=trust_paths)
        # A faulty file is told of before the rooms below are loaded.
        system = system_of(problem)
        from patchplan.errors import CannotBuild
        from patchplan.pipeline import plan as make_plan
        from patchplan.report.summary import refusal, summary
        from patchplan.report.write import write_plan, write_refusal

        colour = sys.stdout.isatty()
        try:
            made = make_plan(problem, accept=accept, think=think.value, progress=progress, system=system)
        except CannotBuild as error:
            write_refusal(problem, str(error), folder)
            return FAILS, refusal(problem.title, str(error), folder, colour=colour)
        progress("Writing the plan")
        write_plan(made, folder, pictures=pictures)
    return (FOLLOWS if made.verdict.verdict == "follows" else FAILS), summary(made, folder, colour=colour)


def _guarded(work: Callable[[], int]) -> int:
    """Exit code of some work; what the user can mend is said without a traceback."""
    from patchplan.errors import PatchplanError

    try:
        return work()
    except PatchplanError as error:
        _complain(str(error))
    except OSError as error:
        place = f"{error.filename}: " if error.filename else ""
        _complain(f"{place}{error.strerror or error}. Nothing more was written.")
    except KeyboardInterrupt:
        _complain("Interrupted. The plan folder is as it was.")
        return INTERRUPTED
    return BAD_INPUT


def _complain(text: str) -> None:
    """Say what is wrong; a sentence of its own in lines of a terminal, one with a place and a caret as it stands."""
    if "\n" not in text:
        from textwrap import fill

        text = fill(text, 80, break_long_words=False, break_on_hyphens=False)
    typer.echo(text, err=True)
