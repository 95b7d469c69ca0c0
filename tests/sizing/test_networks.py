"""Networks of three resistors against the plain equations of their nodes."""

from __future__ import annotations

import numpy as np
import pytest

from patchplan.sizing.networks import LAST, largest_transfer, networks
from patchplan.sizing.records import Leg
from patchplan.sizing.series import values_between

E24 = values_between("E24", 2e3, 1e6)


def solved(first: float, shunt: float, last: float) -> tuple[float, float]:
    """Volts per ampere into a virtual ground, and the resistance seen from there, from Kirchhoff's laws."""
    g1, g2, g3 = 1 / first, 1 / shunt, 1 / last
    middle = g1 / (g1 + g2 + g3)  # 1 V at the source, the summing node at 0 V
    pushed = g3 / (g1 + g2 + g3)  # the source at 0 V, 1 V at the summing node
    return 1 / (g3 * middle), 1 / (g3 * (1 - pushed))


@pytest.mark.parametrize("parts", networks(E24)[:: len(networks(E24)) // 7])
def test_transfer_and_what_the_summing_node_sees(parts: tuple[float, float, float]) -> None:
    transfer, into = solved(*parts)
    assert Leg(parts).transfer == pytest.approx(transfer)
    assert Leg(parts).into == pytest.approx(into)


@pytest.mark.parametrize("parts", networks(E24)[:: len(networks(E24)) // 7])
def test_spread_is_the_root_of_the_slopes(parts: tuple[float, float, float]) -> None:
    """Each resistor moved by a millionth."""
    moves = [
        np.log(solved(*(r * (1 + 1e-6 * (i == k)) for i, r in enumerate(parts)))[0] / solved(*parts)[0]) / 1e-6
        for k in range(3)
    ]
    assert Leg(parts).spread == pytest.approx(np.linalg.norm(moves), rel=1e-4)


def test_networks_are_purchasable_close_together_and_light_on_the_summing_node() -> None:
    found = networks(E24)
    transfer = np.array([Leg(p).transfer for p in found])
    assert set(sum(found, ())) <= set(E24)
    assert (np.diff(transfer) > 0).all()
    inside = transfer[transfer < 100 * E24[-1]]
    gaps = np.diff(np.log(inside))
    # Half a percent is the tolerance of half of 1 % resistors; a step of E24 (IEC 60063) is about 0.095.
    assert np.quantile(gaps, 0.95) < 0.005
    assert gaps.max() < 0.095 / 2
    assert inside[0] < 1.03 * E24[-1]
    assert min(p[2] for p in found) >= E24[-LAST]
    assert max(transfer) <= largest_transfer(E24)
    assert largest_transfer(E24) == pytest.approx(solved(E24[-1], E24[0], E24[-1])[0])


def test_a_stock_of_one_value_has_its_one_network() -> None:
    assert networks((1e4,)) == ((1e4, 1e4, 1e4),)
