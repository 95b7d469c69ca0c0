"""Stock files: what they say, and every fault with file and line, all at once."""

from __future__ import annotations

import os

import pytest

from patchplan.equation.problem import StockRow
from patchplan.equation.reader import read_problem
from tests.equation.test_reader_faults import GOOD, faults_of


def stocked(tmp_path, rows, kind="resistors", **options):
    (tmp_path / "stock.csv").write_bytes(rows if isinstance(rows, bytes) else rows.encode())
    path = tmp_path / "p.toml"
    path.write_text(GOOD + f'[build]\n{kind} = "stock.csv"\n', encoding="utf-8")
    return path


def test_rows_are_read_with_suffixes_units_and_serial_numbers(tmp_path):
    rows = "Value,Qty,Tol,Serial No,measured_value,shelf\n4.7k,20,1%,,,A1\n10k Ω,,,7a,9.987k,\n\n22000,3,,,,B2\n"
    build = read_problem(stocked(tmp_path, rows)).build
    assert build.resistors == "stock.csv"
    assert build.resistor_stock is not None
    assert build.resistor_stock.rows == (
        StockRow(4700.0, 20, 0.01, "", None, 2),
        StockRow(10e3, 1, None, "7a", 9987.0, 3),
        StockRow(22e3, 3, None, "", None, 5),
    )
    assert build.capacitor_stock is None


def test_capacitors_take_farads(tmp_path):
    rows = "capacitance (F),count\n100n F,4\n1u,2\n"
    build = read_problem(stocked(tmp_path, rows, "capacitors")).build
    assert build.capacitor_stock is not None
    assert [row.value for row in build.capacitor_stock.rows] == [1e-7, 1e-6]


@pytest.mark.parametrize(
    ("rows", "found"),
    [
        ("value,count\n10k,3\n4k7,2\n", '"stock.csv", line 3: "4k7" is not a number'),
        ("value,count\n10k,many\n", 'line 2: "many" is no count of pieces'),
        ("value,count\n10k,-1\n", 'line 2: "-1" is no count'),
        ("value,count\n10k,\n", "line 2: the count is missing"),
        ("value,count\n,4\n", "line 2: the value is missing"),
        ("value,count\n-10k,4\n", 'line 2: "-10k" is not above zero'),
        ("value,count\n100n F,4\n", 'line 2: the unit "F" is not understood'),
        ("value,count,tolerance\n10k,4,90%\n", 'line 2: "90%" is no tolerance'),
        ("value,count,serial\n10k,2,A\n", 'the serial number "A" stands for 2 parts'),
        ("value,serial\n10k,A\n11k,A\n", 'line 3: the serial number "A" stands in line 2 already'),
        ("value,count,measured\n10k,1,9.9k\n", "line 2: a measured part has no serial number"),
        ("value,serial,measured\n10k,A,9.9\n", 'line 2: "9.9" measured is far from "10k"'),
        ("value (kohm),count\n10,1\n", 'the unit of "value (kohm)" is not converted'),
        ("value,count,qty\n10,1,1\n", 'two columns for "count"'),
        ("ohms,count\n10,1\n", 'there is no column "value"'),
        ("value,tolerance\n10k,1%\n", 'there is no column "count"'),
        ("value;count\n10k;1\n", "parted by semicolons"),
        ("value\tcount\n10k\t1\n", "parted by tabs"),
        ("value,count\n", "it lists no parts"),
        ("\n", "it is empty"),
        (b"value,count\n\xff,1\n", "is not UTF-8"),
        ('value,count\n10k,"1\n', "cannot be read"),
    ],
)
def test_faulty_stock_files(tmp_path, rows, found):
    error = faults_of(stocked(tmp_path, rows))
    assert found in error.faults[0].found
    assert "stock.csv" in error.faults[0].found
    assert '"stock.csv"' in error.rendered
    assert error.faults[0].remedy.endswith(".")


def test_all_faults_of_a_stock_file_are_told_at_once(tmp_path):
    error = faults_of(stocked(tmp_path, "value,count\nx,1\n10k,y\n0,2\n"))
    assert [f.found.partition(":")[0] for f in error.faults] == [f'"stock.csv", line {line}' for line in (2, 3, 4)]


def test_a_stock_file_outside_the_folder_needs_trust(tmp_path):
    (tmp_path / "far.csv").write_text("value,count\n10k,3\n", encoding="utf-8")
    folder = tmp_path / "problems"
    folder.mkdir()
    path = folder / "p.toml"
    path.write_text(GOOD + '[build]\nresistors = "../far.csv"\n', encoding="utf-8")
    assert "lies outside the problem file's folder" in faults_of(path).faults[0].found
    assert read_problem(path, trust_paths=True).build.resistor_stock is not None
    os.symlink(tmp_path / "far.csv", folder / "link.csv")
    path.write_text(GOOD + '[build]\nresistors = "link.csv"\n', encoding="utf-8")
    assert "lies outside" in faults_of(path).faults[0].found
