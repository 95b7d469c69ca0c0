"""Start-up and a whole plan against what Python and the libraries cost anyhow, as ratios taken in one run."""

from __future__ import annotations

import subprocess
import sys
import tempfile
import time
from pathlib import Path

PATCHPLAN = (sys.executable, "-c", "from patchplan.cli import main; main()")
ROOT = Path(__file__).parents[2]
HELP = ([*PATCHPLAN, "--help"], [sys.executable, "-c", "import typer"])
LIBRARIES = "import sympy, scipy.integrate, scipy.optimize, matplotlib.figure"


def seconds(command: list[str]) -> float:
    """Wall time of one run of a command [s]; a failing command is an error."""
    begin = time.perf_counter()
    subprocess.run(command, cwd=ROOT, check=True, stdout=subprocess.DEVNULL)
    return time.perf_counter() - begin


def best_ratio(ours: list[str], theirs: list[str], *, runs: int) -> tuple[float, float]:
    """Best times of both [s], run in turn so that a busy machine slows both; the first pair only warms the disk."""
    pairs = [(seconds(ours), seconds(theirs)) for _ in range(runs + 1)][1:]
    return min(a for a, _ in pairs), min(b for _, b in pairs)


def line(what: str, ours: float, against: str, theirs: float, target: float) -> str:
    """One line of the result."""
    return f"{what:32}{ours:6.2f} s   {against:18}{theirs:6.2f} s   ratio {ours / theirs:.2f} (at most {target:g})"


def main() -> None:
    """Print both ratios with their targets."""
    runs = int(sys.argv[1]) if len(sys.argv) > 1 else 5
    ours, theirs = best_ratio(*HELP, runs=runs)
    print(line("patchplan --help", ours, "import typer", theirs, 3))
    with tempfile.TemporaryDirectory() as folder:
        plan = [*PATCHPLAN, "plan", "equations/oscillator.toml", "--into", f"{folder}/plan"]
        ours, theirs = best_ratio([*plan, "--quiet"], [sys.executable, "-c", LIBRARIES], runs=runs)
    print(line("patchplan plan, with pictures", ours, "import libraries", theirs, 2))


if __name__ == "__main__":
    main()
