"""Runs ngspice, a general-purpose simulator from outside, and reads what it wrote."""

from __future__ import annotations

import os
import shutil
import subprocess
import tempfile
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray


def run_ngspice(text: str, *, seconds: float = 60.0) -> tuple[dict[str, NDArray], NDArray]:
    """Waveforms by node name, and the time or frequency, of a netlist run unchanged in batch mode."""
    if shutil.which("ngspice") is None:
        if os.environ.get("CI") == "true":
            pytest.fail("ngspice is missing; install the Debian package ngspice.")
        pytest.skip("ngspice is not installed")
    with tempfile.TemporaryDirectory() as folder:
        Path(folder, "circuit.cir").write_text(text, encoding="utf-8")
        done = subprocess.run(
            ["ngspice", "-b", "-r", "out.raw", "circuit.cir"],
            cwd=folder, capture_output=True, text=True, timeout=seconds, check=False,
        )  # fmt: skip
        raw = Path(folder, "out.raw")
        assert done.returncode == 0, done.stdout + done.stderr
        assert raw.exists(), done.stdout + done.stderr
        return read_raw(raw.read_bytes())


def read_raw(data: bytes) -> tuple[dict[str, NDArray], NDArray]:
    """Voltages by node name and the scale of the first plot of a binary raw file."""
    head, _, body = data.partition(b"Binary:\n")
    lines = head.decode().splitlines()
    fields = dict(line.split(": ", 1) for line in lines if ": " in line)
    n_vectors, n_points = int(fields["No. Variables"]), int(fields["No. Points"])
    first = lines.index("Variables:") + 1
    names = [line.split()[1] for line in lines[first : first + n_vectors]]
    kind = np.complex128 if "complex" in fields["Flags"] else np.float64
    table = np.frombuffer(body, kind, n_vectors * n_points).reshape(n_points, n_vectors)
    nodes = {n[2:-1]: table[:, i] for i, n in enumerate(names) if n.startswith("v(")}
    return nodes, table[:, 0].real
