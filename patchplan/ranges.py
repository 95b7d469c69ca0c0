"""Ranges of every node of the patch, from the runs and bounds that Reach found."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class NodeRange:
    """Range of the signal at one node (without the node's sign), problem units of the Form's shifted variable.

    Attributes
    ----------
    rate
        Largest magnitude of the signal's time derivative [1/problem time], inf where a source jumps.
    """

    node: str
    low: float
    high: float
    rate: float
    known_by: str

    @property
    def peak(self) -> float:
        """Largest magnitude."""
        return max(abs(self.low), abs(self.high))


@dataclass(frozen=True)
class Ranges:
    """All nodes' ranges, and their signals over the nominal run.

    Attributes
    ----------
    nodes
        By node.
    times
        Shape ``(n_times,)`` [problem time], the Reference's.
    values, rates
        Node -> shape ``(n_times,)``: the Form's signal (without the node's sign) and its time derivative.
    """

    nodes: Mapping[str, NodeRange]
    times: Array
    values: Mapping[str, Array]
    rates: Mapping[str, Array]
