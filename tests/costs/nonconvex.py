"""How to draw the nonconvex costs."""

from __future__ import annotations

from typing import Any

import numpy as np
from hypothesis import strategies as st

import ssn

PRICES = st.sampled_from([0.0, 0.25, 1.0, 2.5])
WIDTHS = st.sampled_from([0.0, 0.4, 1.5, 3.25, np.inf])


def number_or_list(draw: Any, n: int, numbers: Any) -> Any:
    return draw(st.lists(numbers, min_size=n, max_size=n)) if draw(st.booleans()) else draw(numbers)


def parameters(draw: Any) -> tuple[int, Any, Any, Any]:
    n = draw(st.integers(1, 5))
    lower = -np.asarray(number_or_list(draw, n, WIDTHS))
    return n, number_or_list(draw, n, PRICES), lower, number_or_list(draw, n, WIDTHS)


@st.composite
def count_costs(draw: Any) -> tuple[Any, int]:
    n, beta, lower, upper = parameters(draw)
    return ssn.costs.CountCost(beta, lower, upper), n


@st.composite
def power_costs(draw: Any) -> tuple[Any, int]:
    n, beta, lower, upper = parameters(draw)
    power = draw(st.sampled_from([0.5, 2.0 / 3.0, 0.25, 0.9]))
    return ssn.costs.PowerCost(beta, power, lower, upper), n


INSTANCES = {ssn.costs.CountCost: count_costs(), ssn.costs.PowerCost: power_costs()}
SMOOTHING = {ssn.costs.CountCost: np.inf, ssn.costs.PowerCost: np.inf}  # at the jump; see test_nonconvex.py


@st.composite
def envelopes(draw: Any) -> tuple[Any, int]:
    cost, n = draw(st.one_of(count_costs(), power_costs()))
    return ssn.costs.ConvexEnvelope(cost, draw(st.sampled_from([0.0, 0.3, 1.0, 4.0]))), n
