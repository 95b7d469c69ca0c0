"""Where a run begins: the hold mode's point of rest, then the outputs that go with it."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from patchplan.check.drive import drive_of, high_lines
from patchplan.check.model import Model
from patchplan.check.network import Network, build_network
from patchplan.circuit.records import Circuit

Array = NDArray[np.float64]


def hold_state(circuit: Circuit, waveforms: Mapping[str, tuple[Array, Array]] | None = None) -> dict[str, float]:
    """Volts of every net at the start of the run, just after the operate switches have closed.

    Parameters
    ----------
    circuit
        The board. ``circuit.start`` counts for integrators that no hold network sets, and in a run that is never reset.
    waveforms
        Stand-ins for inputs known only by their bounds: name -> (times, values) in problem time and units.

    Returns
    -------
    dict
        Net -> volts.
    """
    sources = tuple(p for p in circuit.parts if p.kind == "source")
    drive = drive_of(circuit, sources, waveforms or {})
    stretch = drive.stretch(0.0, drive.jumps[0] if drive.jumps else circuit.duration)
    network = build_network(circuit, high=high_lines(circuit, stretch.middle))
    inputs = stretch.over(np.zeros(1))[:, 0]
    state = start_state(circuit, network, inputs)
    volts = network.voltage @ state + network.voltage_input @ inputs
    return dict(zip(network.nets, volts.tolist(), strict=True))


def start_state(circuit: Circuit, network: Network, inputs: Array) -> Array:
    """States at the start of the run, shape ``(n_states,)`` [V].

    The capacitors keep what the hold mode gave them; op amps and multipliers have settled to it.

    Parameters
    ----------
    network
        The board's operate mode.
    inputs
        Inputs at time 0.
    """
    size, n_c = len(network.states), network.n_capacitors
    capacitor = np.arange(size) < n_c
    state = np.zeros(size)
    pinned = _wanted(circuit, network)
    state[: len(pinned)] = np.nan_to_num(pinned)
    if circuit.run != "free":
        hold = Model(build_network(circuit, "hold"))
        held = np.concatenate([~np.isnan(pinned), np.zeros(size - n_c, bool)])
        state = hold.rest(state, inputs, held)
    return Model(network).rest(state, inputs, capacitor)


def _wanted(circuit: Circuit, network: Network) -> Array:
    """Capacitor voltages that ``circuit.start`` sets, nan where it says nothing, shape ``(n_capacitors,)`` [V]."""
    amp_input = {p.nets[2]: p.nets[1] for p in circuit.parts if p.kind == "op amp"}
    wanted = np.full(network.n_capacitors, np.nan)
    for i, (a, b) in enumerate(network.capacitor_nets):
        for out, other, sign in ((a, b, 1.0), (b, a, -1.0)):
            if out in circuit.start and amp_input.get(out) == other:
                wanted[i] = sign * circuit.start[out]
    return wanted
