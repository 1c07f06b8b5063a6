"""How to draw the sets and their products, and how to find their points without a projection."""

from __future__ import annotations

from typing import Any

import numpy as np
from hypothesis import strategies as st

import ssn

POSITIVE = st.sampled_from([0.25, 1.0, 2.5, 7.0])
COEFFICIENTS = st.one_of(st.integers(-8, 8).map(lambda k: k / 4), st.floats(-2, 2).map(lambda x: round(x, 3)))


def weights_for(draw: Any, n: int) -> Any:
    numbers = st.sampled_from([0.5, 1.0, 2.0, 1.3])
    kind = draw(st.sampled_from(["none", "number", "array"]))
    if kind == "array":
        return draw(st.lists(numbers, min_size=n, max_size=n))
    return None if kind == "none" else draw(numbers)


def array(draw: Any, n: int) -> np.ndarray:
    return np.array(draw(st.lists(COEFFICIENTS, min_size=n, max_size=n)))


@st.composite
def simplices(draw: Any, most: int = 5) -> tuple[Any, int]:
    n = draw(st.integers(1, most))
    return ssn.costs.Simplex(draw(POSITIVE), weights_for(draw, n)), n


@st.composite
def euclidean_balls(draw: Any, most: int = 5) -> tuple[Any, int]:
    n = draw(st.integers(1, most))
    centre = array(draw, n) if draw(st.booleans()) else draw(COEFFICIENTS)
    return ssn.costs.EuclideanBall(draw(POSITIVE), centre, weights_for(draw, n)), n


@st.composite
def l1_balls(draw: Any, most: int = 5) -> tuple[Any, int]:
    n = draw(st.integers(1, most))
    return ssn.costs.L1Ball(draw(POSITIVE), weights_for(draw, n)), n


def linear(kind: Any) -> Any:
    @st.composite
    def instances(draw: Any) -> tuple[Any, int]:
        n = draw(st.integers(1, 5))
        normal = array(draw, n)
        normal[draw(st.integers(0, n - 1))] = draw(st.sampled_from([-2.0, 0.5, 1.0]))
        return kind(normal, draw(COEFFICIENTS), weights_for(draw, n)), n

    return instances()


@st.composite
def cones(draw: Any, most: int = 6) -> tuple[Any, int]:
    block = draw(st.integers(1, min(4, most)))
    return ssn.costs.SecondOrderCone(block), block * draw(st.integers(1, most // block))


@st.composite
def semidefinite_cones(draw: Any) -> tuple[Any, int]:
    order = draw(st.integers(1, 3))
    return ssn.costs.PositiveSemidefiniteCone(order), order * (order + 1) // 2


@st.composite
def shrinkages(draw: Any) -> tuple[Any, int]:
    beta, upper = draw(st.sampled_from([0.0, 0.5, 1.0])), draw(st.sampled_from([1.0, 2.5, np.inf]))
    return ssn.SparseCost(beta, -1.0, upper), draw(st.integers(1, 2))


@st.composite
def products(draw: Any) -> tuple[Any, int]:
    """At least one part that couples its components."""
    coupled = st.one_of(simplices(3), euclidean_balls(3), l1_balls(3), cones(3))
    parts = [draw(coupled), draw(shrinkages()), draw(st.one_of(shrinkages(), simplices(1), cones(1)))]
    parts = draw(st.permutations(parts[: draw(st.integers(1, 3))]))
    costs, sizes = zip(*parts, strict=True)
    return ssn.costs.Product(costs, sizes), sum(sizes)


INSTANCES = {
    ssn.costs.Simplex: simplices(),
    ssn.costs.EuclideanBall: euclidean_balls(),
    ssn.costs.L1Ball: l1_balls(),
    ssn.costs.HalfSpace: linear(ssn.costs.HalfSpace),
    ssn.costs.Hyperplane: linear(ssn.costs.Hyperplane),
    ssn.costs.SecondOrderCone: cones(),
    ssn.costs.PositiveSemidefiniteCone: semidefinite_cones(),
    ssn.costs.Product: products(),
}

# error of the smoothed map divided by eps, for n <= 6 and weights in [0.5, 2]
SMOOTHING = {
    ssn.costs.Simplex: 41.0,
    ssn.costs.EuclideanBall: 2.0,
    ssn.costs.L1Ball: 41.0,
    ssn.costs.HalfSpace: 2.0,
    ssn.costs.Hyperplane: 0.0,
    ssn.costs.SecondOrderCone: 1.0,
    ssn.costs.PositiveSemidefiniteCone: 1.5,
    ssn.costs.Product: 41.0,
}


def in_simplex(cost: Any, x: np.ndarray) -> np.ndarray:
    x = np.abs(x) + 0.01
    return x * cost.total / np.sum(cost.weights * x)


def in_ball(cost: Any, x: np.ndarray) -> np.ndarray:
    d = x - cost.centre
    return cost.centre + d * min(
        1.0, 0.999 * cost.radius / max(1e-300, np.sqrt(np.sum(cost.weights * d * d)))
    )


def in_l1_ball(cost: Any, x: np.ndarray) -> np.ndarray:
    return x * min(1.0, cost.radius / max(1e-300, np.sum(cost.weights * np.abs(x))))


def in_half_space(cost: Any, x: np.ndarray) -> np.ndarray:
    """Along one axis, not along the normal."""
    excess, k = cost.normal @ x - cost.level, int(np.argmax(np.abs(cost.normal)))
    moved = x.copy()
    if excess > 0 or isinstance(cost, ssn.costs.Hyperplane):
        moved[k] -= excess / cost.normal[k]
        if abs(moved[k]) <= 1e-14 * abs(x[k]):  # rounding
            moved[k] = 0.0
    return moved


def in_cone(cost: Any, x: np.ndarray) -> np.ndarray:
    rows = x.reshape(-1, cost.block).copy()
    rows[:, 0] = np.maximum(rows[:, 0], np.linalg.norm(rows[:, 1:], axis=1))
    return rows.ravel()


def in_semidefinite_cone(cost: Any, x: np.ndarray) -> np.ndarray:
    matrix = cost.to_matrix(x)
    return cost.to_vector(matrix @ matrix) / (1 + np.linalg.norm(matrix))


def in_product(cost: Any, x: np.ndarray) -> np.ndarray:
    parts = np.split(x, np.cumsum(cost.sizes)[:-1])
    return np.concatenate([a_point(c, part) for c, part in zip(cost.costs, parts, strict=True)])


def a_point(cost: Any, x: np.ndarray) -> np.ndarray:
    if type(cost) in FEASIBLE:
        return FEASIBLE[type(cost)](cost, x)
    return np.minimum(np.maximum(x, cost.lower), cost.upper)


FEASIBLE = {
    ssn.costs.Simplex: in_simplex,
    ssn.costs.EuclideanBall: in_ball,
    ssn.costs.L1Ball: in_l1_ball,
    ssn.costs.HalfSpace: in_half_space,
    ssn.costs.Hyperplane: in_half_space,
    ssn.costs.SecondOrderCone: in_cone,
    ssn.costs.PositiveSemidefiniteCone: in_semidefinite_cone,
    ssn.costs.Product: in_product,
}
