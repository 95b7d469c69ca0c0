"""Random problems of many kinds, each drawn from a seed."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from tests.bench.drawn import Drawn, Rng, add_definition, add_input, add_wishes, num, signed


def draw(seed: int) -> Drawn:
    """The problem of a seed, its wishes for the board included; terminals are left to :func:`add_terminals`."""
    rng = np.random.default_rng(seed)
    kinds: list[Callable[[Rng], Drawn]] = [
        linear, linear, polynomial, polynomial, second_order, masses, third_order, time_varying, switched, classic,
        base_moved,
    ]  # fmt: skip
    drawn = kinds[int(rng.integers(len(kinds)))](rng)
    if rng.random() < 0.5:
        add_definition(rng, drawn)
    add_wishes(rng, drawn)
    return drawn


def _new(rng: Rng, kind: str, names: list[str], order: int) -> Drawn:
    """Unknowns with sizes and start values, and a pace."""
    rate = float(10.0 ** rng.choice([-2, 0, 0, 0, 1, 2]))
    drawn = Drawn(kind, float(num(rng.uniform(4, 20) / rate)), rate)
    common = float(10.0 ** rng.choice([-3, 0, 0, 2]))
    for name in names:
        size = common * float(10.0 ** rng.choice([0, 0, 0, -1, 1]))
        drawn.sizes[name], drawn.orders[name] = size, order
        for k in range(order):
            value = 0.0 if rng.random() < 0.25 else signed(rng, 0.2, 1.5) * size * rate**k
            drawn.start[name + "'" * k] = float(num(value))
    return drawn


def row_text(rng: Rng, left: str, terms: list[tuple[float, str]]) -> str:
    """An equation; sometimes both sides are multiplied by a number."""
    factor = float(num(rng.uniform(0.2, 5))) if rng.random() < 0.2 else 1.0
    right = " ".join(f"{'-' if c < 0 else '+'} {num(abs(c))}{'*' + m if m else ''}" for c, m in terms if float(num(c)))
    right = (right or "0").removeprefix("+ ")
    right = "-" + right[2:] if right.startswith("- ") else right
    return f"{left} = {right}" if factor == 1 else f"{num(factor)}*{left} = {num(factor)}*({right})"


def make_knobs(rng: Rng, drawn: Drawn, rows: list[list[tuple[float, str]]]) -> None:
    """Turn coefficients of one or two terms into adjustable parameters, some through zero, some as divisors."""
    for i in range(int(rng.integers(1, 3))):
        row = rows[int(rng.integers(len(rows)))]
        places = [j for j, (c, m) in enumerate(row) if m and "knob" not in m and float(num(c))]
        if not places:
            continue
        j = places[int(rng.integers(len(places)))]
        c, m = row[j]
        name, value = f"knob{i + 1}", float(num(abs(c)))
        form = rng.choice(["plain", "zero", "divisor"])
        if form == "divisor":
            drawn.parameters[name] = (2.0, 1.5, 3.0)
            row[j] = (2 * c, f"{m}/{name}")
        else:
            low = -0.3 * value if form == "zero" else 0.7 * value
            drawn.parameters[name] = (value, float(num(low)), float(num(1.3 * value)))
            row[j] = (np.sign(c), f"{name}*{m}")


def matrix(rng: Rng, n: int, flavour: str) -> np.ndarray:
    """System matrix of rates near 1."""
    a = rng.normal(size=(n, n)) * (rng.random((n, n)) < 0.7)
    if flavour == "oscillatory":
        a = a - a.T
        if n % 2 or not a.any():
            a -= 0.2 * np.eye(n)
    a /= max(1.0, np.abs(np.linalg.eigvals(a)).max() / 3)
    top = np.linalg.eigvals(a).real.max()
    if flavour == "stable":
        a -= (top + rng.uniform(0.05, 1)) * np.eye(n)
    if flavour == "unstable":
        a -= (top - rng.uniform(0.02, 0.15)) * np.eye(n)
    return a


def linear(rng: Rng) -> Drawn:
    """x' = A x + b u, sometimes about an operating point far from zero."""
    n = int(rng.integers(1, 7))
    flavour = str(rng.choice(["stable", "oscillatory", "unstable"]))
    names = [f"x{i + 1}" for i in range(n)]
    drawn = _new(rng, f"linear {flavour}", names, 1)
    a, shift = matrix(rng, n, flavour) * drawn.rate, {}
    if rng.random() < 0.3:
        drawn.kind += " offset"
        shift = {name: float(num(signed(rng, 10, 100) * drawn.sizes[name])) for name in names}
    label = {m: f"({m} {'-' if c > 0 else '+'} {abs(c):g})" if (c := shift.get(m)) else m for m in names}
    s = drawn.sizes
    rows = [[(a[i, j] * s[p] / s[q], label[q]) for j, q in enumerate(names)] for i, p in enumerate(names)]
    if rng.random() < 0.6:
        i = int(rng.integers(n))
        rows[i].append((signed(rng, 0.2, 1) * s[names[i]] * drawn.rate, add_input(rng, drawn)))
    if rng.random() < 0.3:
        make_knobs(rng, drawn, rows)
    drawn.start = {m: float(num(v)) + shift.get(m, 0.0) for m, v in drawn.start.items()}
    drawn.equations = [row_text(rng, f"{m}'", row) for m, row in zip(names, rows, strict=True)]
    return drawn


def polynomial(rng: Rng) -> Drawn:
    """Quadratic terms that keep x.x, cubic and linear damping, a force."""
    n = int(rng.integers(1, 5))
    names = [f"x{i + 1}" for i in range(n)]
    drawn = _new(rng, "polynomial", names, 1)
    s, r = drawn.sizes, drawn.rate
    # A state that starts at rest and is fed by nothing has no size.
    drawn.start = {m: float(num(signed(rng, 0.2, 1.5) * s[m])) for m in names}

    def term(c: float, i: int, *factors: int) -> tuple[float, str]:
        scale = s[names[i]] / float(np.prod([s[names[j]] for j in factors])) * r
        text = "*".join(f"{names[j]}^{k}" if (k := factors.count(j)) > 1 else names[j] for j in dict.fromkeys(factors))
        return c * scale, text

    rows = [[term(-rng.uniform(0, 1), i, i), term(-rng.uniform(0.1, 0.5), i, i, i, i)] for i in range(n)]
    if rng.random() < 0.4:
        rows[0][0] = (-rows[0][0][0], rows[0][0][1])
    for _ in range(int(rng.integers(0, 3)) if n > 1 else 0):
        i, j = rng.choice(n, 2, replace=False).tolist()
        c = signed(rng, 0.2, 1)
        if rng.random() < 0.5:
            rows[i].append(term(c, i, j, j))
            rows[j].append(term(-c, j, i, j))
        else:
            rows[i].append(term(-abs(c), i, i, j, j))
            rows[j].append(term(c, j, i))
    if rng.random() < 0.6:
        rows[0].append((signed(rng, 0.2, 1) * s[names[0]] * r, add_input(rng, drawn)))
    if rng.random() < 0.3:
        make_knobs(rng, drawn, rows)
    drawn.equations = [row_text(rng, f"{m}'", row) for m, row in zip(names, rows, strict=True)]
    if rng.random() < 0.4 and n > 1:
        a, b = names[:2]
        if rng.random() < 0.5:
            drawn.definitions["e"] = f"{num(1 / s[a])}*{a} - {num(0.5 / s[b])}*{b}"
            drawn.equations[0] = f"{a}' = {drawn.equations[0].split(' = ')[1]} - {num(0.2 * r)}*{a}*e^2"
        else:
            drawn.definitions["p"] = f"{num(1 / s[a] / s[b])}*{a}*{b}"
            drawn.parameters = {
                k: v for k, v in drawn.parameters.items() if k in "".join([drawn.equations[0], *drawn.equations[2:]])
            }
            drawn.equations[1] = f"{b}' = {num(-r)}*{b} + {num(0.3 * r * s[b])}*p - {num(0.3 * r)}*{b}*p^2/{num(1.0)}"
    return drawn


def second_order(rng: Rng) -> Drawn:
    """m z'' = -k z - c z' + F with named parameters."""
    drawn = _new(rng, "second order", ["z"], 2)
    w, m = drawn.rate, float(num(rng.uniform(0.5, 100)))
    k, c = float(num(m * w * w)), float(num(m * w * rng.choice([0.0, 0.02, 0.3, 2.5])))
    drawn.parameters["m"], drawn.parameters["k"] = (m, m, m), (k, k, k)
    knob = bool(c) and rng.random() < 0.5
    drawn.parameters["c"] = (c, float(num(0.3 * c)), float(num(2 * c))) if knob else (c, c, c)
    if not knob and rng.random() < 0.3:
        drawn.parameters["m"] = (m, float(num(0.7 * m)), float(num(1.4 * m)))
    damping = "" if c == 0 else " - c*z'"
    if c == 0:
        del drawn.parameters["c"]
    force = f" + {num(k * drawn.sizes['z'])}*{add_input(rng, drawn)}" if rng.random() < 0.6 else ""
    drawn.equations = [f"m*z'' = -k*z{damping}{force}"]
    return drawn


def base_moved(rng: Rng) -> Drawn:
    """The derivative of an input appears."""
    drawn = _new(rng, "input derivative", ["z"], 2)
    w, u, s = drawn.rate, add_input(rng, drawn, smooth=True), drawn.sizes["z"]
    gain = num(s)
    drawn.equations = [f"z'' = -{num(w * w)}*(z - {gain}*{u}) - {num(rng.uniform(0.1, 1) * w)}*(z' - {gain}*{u}')"]
    return drawn


def masses(rng: Rng) -> Drawn:
    """M x'' + C x' + K x = f, with a full mass matrix."""
    n = int(rng.integers(2, 4))
    names = [f"q{i + 1}" for i in range(n)]
    drawn = _new(rng, "mass matrix", names, 2)
    drawn.sizes = dict.fromkeys(names, drawn.sizes[names[0]])
    w, s = drawn.rate, drawn.sizes[names[0]]
    drawn.start = {k: float(num(signed(rng, 0, 1) * s * w ** k.count("'"))) for k in drawn.start}
    p, q = rng.normal(size=(2, n, n))
    mass, spring = p @ p.T / n + np.eye(n), (q @ q.T / n + 0.5 * np.eye(n)) * w * w
    damping = (0.1 * mass + rng.choice([0, 0.05]) * spring / w / w) * w
    for i in range(n):
        terms = [(mass[i, j], f"{m}''") for j, m in enumerate(names)]
        terms += [(damping[i, j], f"{m}'") for j, m in enumerate(names)]
        terms += [(spring[i, j], m) for j, m in enumerate(names)]
        force = f"{num(s * w * w)}*{add_input(rng, drawn)}" if rng.random() < 0.4 else "0"
        left, _, right = row_text(rng, "L", terms).rpartition("= ")
        drawn.equations.append(f"{right} = {force}" if left == "L " else f"0 = {right} - {force}")
    return drawn


def third_order(rng: Rng) -> Drawn:
    """One equation of third order, stable after Routh and Hurwitz, sometimes with a square of the unknown."""
    drawn = _new(rng, "third order", ["y"], 3)
    w, s = drawn.rate, drawn.sizes["y"]
    drawn.start = {k: float(num(signed(rng, 0, 0.3) * s * w ** k.count("'"))) for k in drawn.start}
    a, b = rng.uniform(0.5, 2, 2)
    c = rng.uniform(0.1, 0.9) * a * b
    terms = [(-a * w, "y''"), (-b * w**2, "y'"), (-c * w**3, "y")]
    if rng.random() < 0.4:
        terms.append((-0.3 * c * w**3 / s**2, "y^3"))
    if rng.random() < 0.6:
        terms.append((0.3 * s * w**3, add_input(rng, drawn)))
    rows = [terms]
    if rng.random() < 0.3:
        make_knobs(rng, drawn, rows)
    drawn.equations = [row_text(rng, "y'''", terms)]
    return drawn


def time_varying(rng: Rng) -> Drawn:
    """Coefficients that are functions of time."""
    drawn = _new(rng, "time varying", ["x"], 2)
    w, s = drawn.rate, drawn.sizes["x"]
    a, om, c = num(rng.uniform(0.1, 0.6)), num(w * rng.uniform(0.3, 3)), num(w * rng.uniform(0, 0.5))
    kind = int(rng.integers(4))
    if kind == 0:
        drawn.equations = [f"x'' = -{num(w * w)}*(1 + {a}*cos({om}*t))*x - {c}*x'"]
    elif kind == 1:
        drawn.equations = [f"x'' = -{num(w**3 / 5)}*t*x - {c}*x'"]
    elif kind == 2:
        drawn.equations = [f"x'' = -{num(w * w)}*x/(1 + {num(w / 10)}*t) - {c}*(1 + sin({om}*t)^2)*x'"]
    else:
        drawn.equations = [f"x'' = -{num(w * w)}*x - {c}*exp(-{num(w / 5)}*t)*x' + {num(w * w * s)}*tanh({num(w)}*t)"]
    return drawn


def switched(rng: Rng) -> Drawn:
    """An input multiplies a state."""
    names = ["x", "y"]
    drawn = _new(rng, "input times state", names, 1)
    s, r = drawn.sizes, drawn.rate
    u = add_input(rng, drawn)
    c = [num(r * rng.uniform(0.2, 1)) for _ in range(3)]
    drawn.equations = [
        f"x' = -{c[0]}*x + {num(0.3 * r)}*{u}*x - {num(r * s['x'] / s['y'])}*y",
        f"y' = {num(r * s['y'] / s['x'])}*x - {c[1]}*y + {num(0.5 * r * s['y'])}*{u}",
    ]
    return drawn


def classic(rng: Rng) -> Drawn:
    """Van der Pol, Duffing and Lotka-Volterra with figures of their own."""
    kind = int(rng.integers(3))
    drawn = _new(rng, ["van der Pol", "Duffing", "Lotka-Volterra"][kind], ["x"], 2)
    w = drawn.rate
    drawn.sizes["x"] = s = 1.0
    drawn.start = {k: float(num(signed(rng, 0.1, 1.5) * w ** k.count("'"))) for k in drawn.start}
    if kind == 0:
        drawn.equations = [f"x'' = mu*(1 - x^2)*x' - {num(w * w)}*x"]
        mu = float(num(w * rng.uniform(0.2, 2)))
        drawn.parameters["mu"] = (
            (mu, float(num(0.5 * mu)), float(num(1.5 * mu))) if rng.random() < 0.5 else (mu, mu, mu)
        )
    elif kind == 1:
        u = add_input(rng, drawn)
        spring = num(-w * w * signed(rng, 0.3, 1))
        right = f"-{num(0.4 * w)}*x' + {spring}*x - {num(w * w)}*x^3 + {num(0.3 * w * w)}*{u}"
        drawn.equations = [f"x'' = {right.replace('+ -', '- ')}"]
    else:
        drawn.orders = {"x": 1, "y": 1}
        drawn.sizes = {"x": s, "y": s}
        drawn.start = {"x": float(num(rng.uniform(0.5, 1.5))), "y": float(num(rng.uniform(0.5, 1.5)))}
        a, b = num(w * rng.uniform(0.5, 1.5)), num(w * rng.uniform(0.5, 1.5))
        drawn.equations = [f"x' = {a}*x - {a}*x*y", f"y' = -{b}*y + {b}*x*y"]
    return drawn
