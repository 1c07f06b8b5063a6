"""Long arrays, which go through the proximal maps in blocks, against the same components a few at a time."""

import numpy as np
import pytest

import ssn
from ssn.costs.blocks import BLOCK, by_blocks
from ssn.costs.grouping import Groups

SIZE = 2 * BLOCK + 777
RNG = np.random.default_rng(5)
WIDTH = RNG.choice([0.0, 0.5, 1.0, 2.0, np.inf], SIZE)
BETA = RNG.choice([0.0, 0.3, 1.0], SIZE)
POINTS = np.sort(np.round(RNG.standard_normal((SIZE, 3)), 1) + [-0.01, 0.0, 0.01], axis=1)
TILT = np.sort(np.round(RNG.standard_normal((SIZE, 4)), 1), axis=1)

# a function of a slice each: the cost of those components
COSTS = {
    "bounds": lambda cut: ssn.Bounds(-1.0, 1.0),
    "bounds that vary": lambda cut: ssn.Bounds(-WIDTH[cut], 1.0),
    "one bound": lambda cut: ssn.Bounds(-np.inf, 0.5),
    "fixed": lambda cut: ssn.Bounds(0.5, 0.5),
    "L1": lambda cut: ssn.SparseCost(0.5, -1.0, 2.0),
    "L1 that varies": lambda cut: ssn.SparseCost(BETA[cut], -1.0, WIDTH[cut]),
    "L1 without bounds": lambda cut: ssn.SparseCost(BETA[cut]),
    "piecewise": lambda cut: ssn.PiecewiseQuadraticCost(
        [-0.5, 0.5, 3.0], [-1.0, 0.0, 1.0, 2.0], [1.0, 0.0, 0.5, 0.5], lower=-2.0, upper=2.0
    ),
    "no kink": lambda cut: ssn.PiecewiseQuadraticCost([], [0.3], [1.0]),
    "no jump": lambda cut: ssn.PiecewiseQuadraticCost([0.0], [0.0, 0.0], [1.0, 2.0]),
    "fixed piecewise": lambda cut: ssn.PiecewiseQuadraticCost([0.0], [-1.0, 1.0], lower=0.3, upper=0.3),
    "piecewise that varies": lambda cut: ssn.PiecewiseQuadraticCost(
        POINTS[cut], TILT[cut], lower=-1.0, upper=np.maximum(WIDTH[cut], -0.5)
    ),
    "many kinks": lambda cut: ssn.PiecewiseQuadraticCost(np.linspace(-2, 2, 70), np.linspace(-2, 2, 71)),
    "Huber": lambda cut: ssn.HuberCost(0.5, 0.3),
    "multi-bang": lambda cut: ssn.MultiBangCost([-1.0, 0.0, 1.0], 0.5),
}


def argument():
    """Many components exactly at kinks, some infinite, one NaN."""
    v = np.round(2.0 * np.random.default_rng(6).standard_normal(SIZE), 1)
    v[::1001], v[1::1001] = np.inf, -np.inf
    v[BLOCK + 3] = np.nan
    return v


@pytest.mark.parametrize("step", [0.5, 2.0])
@pytest.mark.parametrize("name", COSTS)
def test_blocks_give_the_same_bits(name, step):
    v = argument()
    kept = v.copy()
    whole = COSTS[name](slice(None))
    with np.errstate(invalid="ignore"):
        results = [
            whole.prox(v, step),
            whole.prox_derivative(v, step).diagonal,
            whole.pieces(v, step)["control"],
        ]
        parts = []
        for begin in range(0, SIZE, 1000):
            cut = slice(begin, min(begin + 1000, SIZE))
            cost = COSTS[name](cut)
            parts.append(
                (
                    cost.prox(v[cut], step),
                    cost.prox_derivative(v[cut], step).diagonal,
                    cost.pieces(v[cut], step)["control"],
                )
            )
    for result, pieces in zip(results, zip(*parts, strict=True), strict=True):
        np.testing.assert_array_equal(result, np.concatenate(pieces))
    np.testing.assert_array_equal(v, kept)


@pytest.mark.parametrize("name", [name for name in COSTS if not name.startswith("fixed")])
def test_nan_stays_nan(name):
    v = np.zeros(SIZE)
    v[BLOCK + 3] = np.nan
    assert np.isnan(COSTS[name](slice(None)).prox(v, 0.5)[BLOCK + 3])


SHAPE = (6, 50, 70)
LAYOUTS = {
    "first axis": {"shape": SHAPE, "axis": 0},
    "middle axis": {"shape": SHAPE, "axis": 1},
    "last axis": {"shape": SHAPE, "axis": 2},
    "in a row": {"groups": np.arange(21000) // 10},
    "uneven, in a row": {"groups": np.sort(np.random.default_rng(9).integers(0, 900, 21000))},
    "scattered": {"groups": np.random.default_rng(7).permutation(np.arange(21000) // 10)},
}


@pytest.mark.parametrize("inner", ["ones", "vary"])
@pytest.mark.parametrize("name", LAYOUTS)
def test_groups_of_all_layouts(name, inner):
    """Against the textbook formulas, one group at a time."""
    layout, rng = LAYOUTS[name], np.random.default_rng(8)
    weights = 1.0 if inner == "ones" else rng.uniform(0.5, 2.0, 21000)
    number = (Groups.along(**layout) if "shape" in layout else Groups.given(layout["groups"])).number
    beta = rng.uniform(0.0, 3.0, number) * (rng.random(number) > 0.1)
    cost = ssn.GroupSparseCost(beta, inner_weights=weights, **layout)
    v, h, step = rng.standard_normal(21000), rng.standard_normal(21000), 2.0
    image, slope = cost.prox(v, step), cost.prox_derivative(v, step).apply(h)
    labels, a = cost.groups.labels, np.broadcast_to(weights, 21000)
    order = np.argsort(labels, kind="stable")
    zeros = 0
    for group, members in enumerate(np.split(order, np.flatnonzero(np.diff(labels[order])) + 1)):
        length, t = np.sqrt(np.sum(a[members] * v[members] ** 2)), step * beta[group]
        if length <= t:
            zeros += 1
            assert not image[members].any()
            assert not slope[members].any()
            continue
        y = v[members] / length
        np.testing.assert_allclose(image[members], (length - t) * y, rtol=1e-12, atol=1e-14)
        along = np.sum(a[members] * y * h[members])
        expected = (1 - t / length) * h[members] + t / length * along * y
        np.testing.assert_allclose(slope[members], expected, rtol=1e-11, atol=1e-12)
    assert number > zeros > 0 or number < 500


def test_scratch_arrays_have_the_length_of_the_block():
    seen = []

    def fill(cut, out, spare, flag):
        seen.append((cut.stop - cut.start, out.size, spare.size, flag.size))
        out[:] = np.arange(cut.start, cut.stop)

    result = by_blocks(fill, BLOCK + 5, scratch=[np.float64, np.bool_])
    np.testing.assert_array_equal(result, np.arange(BLOCK + 5))
    assert seen == [(BLOCK,) * 4, (5,) * 4]
