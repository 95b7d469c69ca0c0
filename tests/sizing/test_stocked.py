"""Plans from parts on hand: whole problem files, and the counts of the boards that come of them."""

from __future__ import annotations

import random
from collections import Counter
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from patchplan.equation.reader import read_problem
from patchplan.pipeline import plan
from patchplan.report.records import Plan
from patchplan.report.write import plan_folder
from patchplan.sizing import stocked
from patchplan.sizing.series import values_between

OSCILLATOR = """equations = ["x'' = -x"]
duration = 6.3
[start]
x = 1.0
"x'" = 0.0
"""
#: A start value, an adjustable coefficient, an inverter and a step made from the negative reference.
RIG = """equations = ["z'' = -4*z - c*z' + F"]
duration = 4
watch = ["z"]
[parameters]
c = { from = 0.4, to = 2.0, value = 0.8 }
[start]
z = 0.5
"z'" = 0.0
[inputs]
F = "-2*step(t - 1)"
"""
CROSSING = """equations = ["x' = -x + c*u"]
duration = 3
[parameters]
c = { from = -1, to = 2, value = 1 }
[inputs]
u = "sin(3*t)"
[start]
x = 0.0
"""


def stock_text(kind: str, seed: int, *, series: str, most: int, measured: bool = False) -> str:
    """An invented stock: up to ``most`` pieces of each value of a series, by a seed."""
    draw = random.Random(seed)
    limits = (2e3, 1e6) if kind == "resistors" else (1e-9, 1e-6)
    rows = ["value,count,tolerance,serial,measured"]
    for value in values_between(series, *limits):
        count = draw.randint(0, most)
        if measured:
            off = [draw.uniform(-0.05, 0.05) for _ in range(count)]
            rows += [f"{value:.9g},1,,{kind[0]}{value:.3g}-{i},{value * (1 + x):.6g}" for i, x in enumerate(off)]
        elif count:
            rows.append(f"{value:.9g},{count},1%,,")
    return "\n".join(rows) + "\n"


def planned(folder: Path, problem: str, build: str = "", **stocks: str) -> Plan:
    for kind, text in stocks.items():
        (folder / f"{kind}.csv").write_text(text, encoding="utf-8")
        build += f'{kind} = "{kind}.csv"\n'
    path = folder / "p.toml"
    path.write_text(f"{problem}[build]\n{build}", encoding="utf-8")
    return plan(read_problem(path), think="low")


def check_counts(made: Plan) -> None:
    """The board itself: no value more often than the file lists it, no serial number twice."""
    assert made.circuit is not None
    build = made.problem.build
    for kind, stock in (("resistor", build.resistor_stock), ("capacitor", build.capacitor_stock)):
        if stock is None:
            continue
        used: Counter[tuple[float, str]] = Counter()
        for part in made.circuit.parts:
            if part.kind == kind:
                used[(part.marked or part.value), part.serial] += 1
        have: Counter[tuple[float, str]] = Counter()
        for row in stock.rows:
            have[row.value, row.serial] += row.count
        assert not used - have


@pytest.mark.parametrize("problem", [OSCILLATOR, RIG, CROSSING], ids=["oscillator", "rig", "crossing"])
@settings(max_examples=3, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(seed=st.integers(0, 10**6), most=st.integers(1, 3))
def test_a_board_takes_no_more_than_there_is(tmp_path, problem, seed, most):
    made = planned(
        tmp_path, problem, resistors=stock_text("resistors", seed, series="E12", most=most),
        capacitors=stock_text("capacitors", seed, series="E6", most=most),
    )  # fmt: skip
    if made.circuit is None:
        assert any("stock" in fault for fault in made.sizing.faults)
    else:
        check_counts(made)


def test_measured_parts_beat_nominal_ones(tmp_path):
    """Error and spread together: an oscillator from 5 % parts that were measured, against a plan from series."""
    nominal = planned(tmp_path, OSCILLATOR)
    made = planned(
        tmp_path, OSCILLATOR, resistors=stock_text("resistors", 1, series="E12", most=3, measured=True),
        capacitors=stock_text("capacitors", 2, series="E3", most=3, measured=True),
    )  # fmt: skip
    check_counts(made)
    assert made.verdict.verdict == "follows"
    assert made.verdict.max_error_percent < 0.1
    assert max(abs(c.error_percent) for c in made.sizing.coefficients) < 0.02
    assert made.verdict.spread_percent < nominal.verdict.spread_percent / 5
    passive = [p for p in made.circuit.parts if p.kind in ("resistor", "capacitor")]
    assert all(p.serial and p.marked and p.tolerance == 0.0 for p in passive)
    files = plan_folder(made, pictures=False)
    assert {"resistors.csv", "capacitors.csv"} <= files.keys()
    for part in passive:
        assert part.serial.encode() in files["parts.csv"]
        assert part.serial in files["report.html"].decode()
        assert f"{part.value:.9g}".encode() in files["parts.csv"]


def test_what_is_missing_is_told(tmp_path):
    few = "value,count\n10k,2\n22k,1\n47k,1\n100k,1\n"
    made = planned(tmp_path, OSCILLATOR, resistors=few)
    assert made.verdict.verdict == "not_buildable"
    (fault,) = made.sizing.faults
    assert fault.startswith("The stock has too few resistors: ")
    assert " on hand" in fault
    number = int(fault.partition("With ")[2].partition(" more")[0])
    # What it says is true: with so many more of each named value the board can be built.
    rows = dict(row.split(",") for row in few.splitlines()[1:])
    for clause in fault.partition(": ")[2].partition(". With")[0].split("; "):
        words = clause.split()
        rows[words[2] + words[3].removesuffix("Ω")] = words[0]
    assert number == sum(map(int, rows.values())) - 5
    enough = planned(tmp_path, OSCILLATOR, resistors="value,count\n" + "".join(f"{v},{n}\n" for v, n in rows.items()))
    assert enough.verdict.verdict == "follows"
    check_counts(enough)


def test_only_what_lacks_is_told(tmp_path):
    """One measured capacitor for two integrators; a measured resistor lies beside a pile of its marked value."""
    stock = "value,count,serial,measured\n"
    ohms = "10k,30,,\n22k,12,,\n47k,10,,\n100k,25,,\n1M,6,,\n10k,1,R1,9.9873k\n10k,1,R2,10.0312k\n"
    made = planned(tmp_path, OSCILLATOR, resistors=stock + ohms, capacitors=f"{stock}100n,1,C1,101.3n\n")
    assert made.sizing.faults == (
        "The stock has too few capacitors: 2 of 100 nF are needed, 1 on hand. With 1 more, of these values or of "
        "others near them, the board can be built.",
    )
    both = "100n,1,C1,101.3n\n100n,1,,\n"
    assert planned(tmp_path, OSCILLATOR, resistors=stock + ohms, capacitors=stock + both).verdict.verdict == "follows"


def test_the_larger_lack_comes_first(tmp_path):
    """Nothing of both kinds; a measured part is not asked for twice."""
    stock = "value,count,serial,measured\n"
    made = planned(
        tmp_path, OSCILLATOR, resistors=f"{stock}10k,1,R1,9.9873k\n", capacitors=f"{stock}100n,1,C1,101.3n\n"
    )
    first, second = made.sizing.faults
    more = int(first.partition("With ")[2].partition(" more")[0])
    assert first.startswith(f"The stock has too few resistors: {more + 1} of 10 kΩ are needed, 1 on hand.")
    assert second.startswith("The stock has too few capacitors: 2 of 100 nF are needed, 1 on hand. With 1 more")
    capacitors = f"{stock}100n,1,C1,101.3n\n100n,1,,\n"
    resistors = f"{stock}10k,1,R1,9.9873k\n10k,{more},,\n"
    assert planned(tmp_path, OSCILLATOR, resistors=resistors, capacitors=capacitors).verdict.verdict == "follows"


def test_a_stock_outside_the_limits_is_refused(tmp_path):
    from patchplan.errors import CannotBuild

    with pytest.raises(CannotBuild, match=r"resistors\.csv has no resistor between 2000 and 1e\+06"):
        planned(tmp_path, OSCILLATOR, resistors="value,count\n100,50\n")


PENDULUM = """equations = ["x'' = -2500*x"]
duration = 0.19
[start]
x = 1.0
"x'" = 0.0
"""


@pytest.mark.parametrize(("pieces", "possible"), [(7, False), (30, True)])
def test_what_is_said_of_real_time_is_what_the_stock_gives(tmp_path, pieces, possible):
    """20 ms of R times C by 10 kohm at 1 uF: two in series, if there are pieces for them."""
    stocks = {"resistors": f"value,count\n10k,{pieces}\n", "capacitors": "value,count\n1u,2\n"}
    free = planned(tmp_path, PENDULUM, **stocks)
    assert free.verdict.verdict == "follows"
    assert free.speed_curve is not None
    reason = free.speed_curve.reason
    assert reason.startswith("Real time is possible" if possible else "Real time lies inside the window, but no values")
    slow = planned(tmp_path, PENDULUM, 'speed = "real time"\n', **stocks)
    assert (slow.verdict.verdict == "follows") is possible
    assert slow.speed_curve is not None
    assert (slow.speed_curve.judgement == "possible") is possible


def test_pairs_give_what_single_pieces_do_not(tmp_path):
    """11 ms of R times C in real time from 10 and 22 kohm at 1 uF; single pieces leave 21 % of the loop.

    What is left here is the operate switches' share.
    """
    stocks = {"resistors": "value,count\n10k,20\n22k,20\n", "capacitors": "value,count\n1u,2\n"}
    made = planned(tmp_path, PENDULUM.replace("2500", "8264"), 'speed = "real time"\n', **stocks)
    check_counts(made)
    assert made.verdict.verdict == "follows"
    assert max(map(abs, made.sizing.loop_errors)) < 0.005
    joins = {leg.join for sized in made.sizing.stages.values() for leg in sized.legs}
    assert joins & {"series", "parallel"}
    assert any("Pairs stand for" in note for note in made.sizing.notes)


def test_few_different_values_where_the_stock_has_many(tmp_path, monkeypatch):
    found = []
    for fewer in (stocked._fewer_values, lambda *_: None):
        monkeypatch.setattr(stocked, "_fewer_values", fewer)
        made = planned(tmp_path, RIG, resistors=stock_text("resistors", 5, series="E24", most=9))
        check_counts(made)
        assert made.verdict.max_error_percent < 0.5
        assert made.circuit is not None
        found.append(len({p.value for p in made.circuit.parts if p.kind == "resistor"}))
    assert found[0] < found[1]


def test_a_worse_pile_counts_in_the_spread(tmp_path):
    rows = stock_text("resistors", 5, series="E24", most=9)
    close, loose = (planned(tmp_path, OSCILLATOR, resistors=rows.replace("1%", t)) for t in ("0.1%", "5%"))
    same = replace(close.problem.build, resistor_stock=None) == replace(loose.problem.build, resistor_stock=None)
    assert same
    assert loose.verdict.spread_percent > close.verdict.spread_percent


def test_the_curve_knows_which_parts_are_taken(tmp_path):
    """Loose parts that stay on the shelf spread no board, at this speed or another."""
    loose = "2.7k,40,20%,,\n"
    measured = stock_text("resistors", 1, series="E12", most=3, measured=True)
    capacitors = stock_text("capacitors", 2, series="E3", most=3, measured=True)
    made = planned(tmp_path, OSCILLATOR, resistors=measured + loose, capacitors=capacitors)
    check_counts(made)
    assert made.circuit is not None
    assert made.speed_curve is not None
    assert all(p.tolerance == 0.0 for p in made.circuit.parts if p.kind == "resistor")
    assert made.speed_curve.chosen[1] == pytest.approx(made.verdict.spread_percent, rel=0.1)
    assert made.speed_curve.real_time[1] < 1.0
