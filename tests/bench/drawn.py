"""One random problem while it is put together: inputs, wishes for the board, the text of the problem file."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

Rng = np.random.Generator


@dataclass
class Drawn:
    """One problem while it is being put together.

    Attributes
    ----------
    orders
        Unknown -> its order.
    start
        Signal with primes -> start value.
    parameters
        Name -> (value, low, high) of an adjustable parameter.
    inputs
        Name -> expression in t, or rows (times, values) of a recording.
    jumps
        Times at which an input or its slope jumps.
    rate
        Typical rate of the problem [1/problem time].
    sizes
        Unknown -> its typical size.
    """

    kind: str
    duration: float
    rate: float
    equations: list[str] = field(default_factory=list)
    definitions: dict[str, str] = field(default_factory=dict)
    orders: dict[str, int] = field(default_factory=dict)
    start: dict[str, float] = field(default_factory=dict)
    sizes: dict[str, float] = field(default_factory=dict)
    parameters: dict[str, tuple[float, float, float]] = field(default_factory=dict)
    inputs: dict[str, str | tuple[np.ndarray, np.ndarray]] = field(default_factory=dict)
    jumps: list[float] = field(default_factory=list)
    watch: list[str] = field(default_factory=list)
    terminals: dict[str, tuple[float, float]] = field(default_factory=dict)
    time_unit: str = "s"
    build: dict[str, object] = field(default_factory=dict)


UNITS = {"s": 1.0, "ms": 1e-3, "us": 1e-6, "min": 60.0, "h": 3600.0}
OP_AMPS = {
    15.0: ("TL07x", "OPA2277", "OPA2134", "OPA4140", "LT1365", "generic_jfet_3_mhz", "generic_fast_20_mhz"),
    5.0: ("OPA4140", "OPA2134", "LT1365", "OPA2277"),
}


def num(x: float) -> str:
    """Three digits of a number, as text."""
    return f"{x:.3g}"


def signed(rng: Rng, low: float, high: float) -> float:
    """A number of random sign whose magnitude lies in [low, high]."""
    return float(rng.uniform(low, high) * rng.choice([-1, 1]))


def add_input(rng: Rng, drawn: Drawn, *, smooth: bool = False) -> str:
    """A new input of size 1; its name."""
    name, T = f"u{len(drawn.inputs) + 1}", drawn.duration
    a, b = sorted(rng.uniform(0.05, 0.9, 2) * T)
    a, b = float(num(a)), float(num(b + 0.05 * T))
    amplitude, om, period = num(rng.uniform(0.5, 2)), num(rng.uniform(0.3, 3) * drawn.rate), num(T / rng.uniform(1, 6))
    kind = "sine" if smooth else rng.choice(
        ["sine", "square", "step", "pulse", "ramp", "triangle", "sawtooth", "recording", "sum", "decay"]
    )  # fmt: skip
    cycles = np.arange(1, 2 * T / float(period) + 1) * float(period) / 2
    texts: dict[str, tuple[str, list[float]]] = {
        "sine": (f"{amplitude}*sin({om}*t)", []),
        "square": (f"{amplitude}*square(t, {period})", list(cycles)),
        "step": (f"-{amplitude}*step(t - {num(a)})", [a]),
        "pulse": (f"{amplitude}*pulse(t, {num(a)}, {num(b - a)})", [a, a + float(num(b - a))]),
        "ramp": (f"{num(1 / (b - a))}*(ramp(t - {num(a)}) - ramp(t - {num(b)}))", [a, b]),
        "triangle": (f"{amplitude}*triangle(t, {period})", list(cycles)),
        "sawtooth": (f"{amplitude}*sawtooth(t, {period})", list(cycles)),
        "sum": (f"0.5 + {amplitude}*cos({om}*t)^2 - step(t - {num(a)})", [a]),
        "decay": (f"{amplitude}*exp(-t/{num(T / 3)})*cos({om}*t)", []),
    }
    if kind == "recording":
        times = np.linspace(0, T, int(rng.integers(5, 60)))
        values = np.round(np.cumsum(rng.normal(size=times.size)), 3)
        drawn.inputs[name] = (np.array([float(f"{x:.9g}") for x in times]), values / max(1.0, np.abs(values).max()))
        drawn.inputs[name][0][-1] = T
        drawn.jumps += drawn.inputs[name][0][1:-1].tolist()
    else:
        text, jumps = texts[str(kind)]
        drawn.inputs[name] = text
        drawn.jumps += jumps
    return name


def add_definition(rng: Rng, drawn: Drawn) -> None:
    """An algebraic signal that is watched."""
    names = list(drawn.start)[:3]
    parts = [f"{num(signed(rng, 0.3, 2) / drawn.rate ** m.count(chr(39)))}*{m}" for m in names]
    text = " + ".join(parts).replace("+ -", "- ")
    if rng.random() < 0.3:
        first = names[0]
        text = f"{num(rng.uniform(0.5, 2))}*{first}*{names[-1]} + {first}"
    drawn.definitions["out"] = text


def add_wishes(rng: Rng, drawn: Drawn) -> None:
    """Watched signals, time unit and the build table."""
    names = [*drawn.orders, *drawn.definitions]
    if rng.random() < 0.6 or "out" in drawn.definitions:
        some = [m for m in names if rng.random() < 0.7] or names[:1]
        drawn.watch = [f"{rng.choice(['', '', '', '+', '-'])}{m}" for m in some]
    drawn.time_unit = str(rng.choice(list(UNITS), p=[0.6, 0.1, 0.1, 0.1, 0.1]))
    build = drawn.build
    supply = float(rng.choice([15.0, 12.0, 5.0], p=[0.65, 0.2, 0.15]))
    if supply == 5.0 and not drawn.kind.startswith(("linear", "second", "mass", "input d")) and rng.random() < 0.9:
        # No multiplier of the catalogue runs on it; a few are left in for the refusal.
        supply = 15.0
    if supply != 15.0:
        build["supply"] = supply
    elif rng.random() < 0.1:
        build["supply"] = [-12.0, 15.0]
    if supply == 5.0 or rng.random() < 0.4:
        choice = OP_AMPS[5.0 if supply == 5.0 else 15.0]
        build["op_amp"] = str(rng.choice(choice))
    build["resistors"] = str(rng.choice(["E12", "E24", "E96"]))
    build["capacitors"] = str(rng.choice(["E3", "E6", "E12"]))
    build["run"] = str(rng.choice(["once", "repeat", "free"], p=[0.6, 0.2, 0.2]))
    wish = rng.random()
    seconds = UNITS[drawn.time_unit]
    if wish < 0.15:
        build["speed"] = "real time"
    elif wish < 0.4:
        build["speed"] = float(num(10 ** rng.uniform(1, 3.3) * seconds / drawn.rate))


def add_terminals(seed: int, drawn: Drawn, peaks: dict[str, float]) -> None:
    """Let the outside dictate volts per unit of one signal, sometimes with an offset.

    Parameters
    ----------
    peaks
        Signal -> peak of the true solution.
    """
    rng = np.random.default_rng((seed, 1))
    if rng.random() > 0.2:
        return
    signal = str(rng.choice(sorted(peaks)))
    rail = drawn.build.get("supply", 15.0)
    room = 0.4 * (rail if isinstance(rail, float) else 12.0)
    offset = float(num(rng.uniform(0.1, 0.5) * room)) if rng.random() < 0.5 else 0.0
    drawn.terminals[signal] = (float(num(rng.uniform(0.3, 1) * (room - offset) / (peaks[signal] or 1.0))), offset)
    drawn.build.setdefault("speed", "free")


def text_of(drawn: Drawn) -> str:
    """The problem file."""
    lines = [f'title = "{drawn.kind}"', "equations = ["]
    lines += [f'  "{e}",' for e in drawn.equations] + [f'  "{n} = {e}",' for n, e in drawn.definitions.items()]
    lines += ["]", f"duration = {drawn.duration!r}", f'time_unit = "{drawn.time_unit}"']
    if drawn.watch:
        lines.append(f"watch = {drawn.watch}".replace("'", '"'))
    lines.append("\n[parameters]")
    for name, (value, low, high) in drawn.parameters.items():
        lines.append(
            f"{name} = {value!r}" if low == high else f"{name} = {{ from = {low}, to = {high}, value = {value} }}"
        )
    lines += ["\n[start]", *(f'"{name}" = {value!r}' for name, value in drawn.start.items()), "\n[inputs]"]
    for name, given in drawn.inputs.items():
        file = f'{{ file = "{name}.csv", time = "t", value = "v" }}'
        lines.append(f"{name} = " + (f'"{given}"' if isinstance(given, str) else file))
    lines.append("\n[terminals]" if drawn.terminals else "")
    for name, (scale, offset) in drawn.terminals.items():
        more = f", offset = {offset}" if offset else ""
        lines.append(f"{name} = {{ volts_per_unit = {scale}{more} }}")
    lines.append("\n[build]")
    lines += [f'{k} = "{v}"' if isinstance(v, str) else f"{k} = {v}" for k, v in drawn.build.items()]
    return "\n".join(lines) + "\n"
