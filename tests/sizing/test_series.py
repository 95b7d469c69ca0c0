"""Series values against the `eseries` package, an independent table of IEC 60063."""

import eseries
import pytest

from patchplan.sizing.series import SERIES, series_values, values_between


@pytest.mark.parametrize("name", SERIES)
def test_mantissas_equal_the_table_of_eseries(name):
    table = eseries.series(getattr(eseries, name))
    scale = min(table)
    assert series_values(name) == pytest.approx([v / scale for v in table], rel=1e-12)


@pytest.mark.parametrize("name", ["E6", "E24", "E96"])
@pytest.mark.parametrize(("low", "high"), [(2e3, 1e6), (1e-9, 1e-6), (4.7e3, 4.7e3), (3.3e-10, 9.1e-10)])
def test_values_between_equal_the_range_of_eseries(name, low, high):
    expected = list(eseries.erange(getattr(eseries, name), low, high))
    assert values_between(name, low, high) == pytest.approx(expected, rel=1e-9)


def test_values_are_the_floats_of_their_decimal_text():
    assert 4.7e-9 in values_between("E6", 1e-9, 1e-6)
    assert 47e3 in values_between("E24", 2e3, 1e6)


def test_e24_is_not_contained_in_e96():
    assert set(series_values("E24")) - set(series_values("E96"))


def test_unknown_series_is_named_with_the_known_ones():
    with pytest.raises(ValueError, match=r"no series 'E7'\. The series are E3, E6, E12, E24, E48, E96, E192\."):
        series_values("E7")
