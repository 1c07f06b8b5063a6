"""Costs on blocks: each member is that of the parts, put together."""

import numpy as np
import pytest

import ssn

V = np.array([2.0, -0.3, 1.5, 0.5, -2.0, 3.0, 0.1, -0.2])


def example():
    parts = [ssn.Simplex(1.0), ssn.SparseCost(0.5, -1.0, 1.0), ssn.PositiveSemidefiniteCone(2)]
    return ssn.Product(parts, [3, 2, 3], names=["shares", "controls", "matrix"]), parts


BLOCKS = (slice(0, 3), slice(3, 5), slice(5, 8))


def test_every_member_is_that_of_the_parts():
    cost, parts = example()
    for member, options in (
        ("prox", (0.7,)), ("margins", (0.7,)), ("smoothed_prox", (0.7, 0.1)),
    ):  # fmt: skip
        whole = getattr(cost, member)(V, *options)
        for part, block in zip(parts, BLOCKS, strict=True):
            np.testing.assert_array_equal(whole[block], getattr(part, member)(V[block], *options))
    for member, options in (("prox_derivative", (0.7,)), ("smoothed_prox_derivative", (0.7, 0.1))):
        whole = getattr(cost, member)(V, *options).apply(np.eye(8))
        for part, block in zip(parts, BLOCKS, strict=True):
            alone = getattr(part, member)(V[block], *options).apply(np.eye(block.stop - block.start))
            np.testing.assert_allclose(whole[block, block], alone, atol=1e-15)
            whole[block, block] = 0.0
        assert not whole.any()


def test_pieces_carry_the_names_of_the_blocks():
    cost, parts = example()
    pieces = cost.pieces(V, 0.7)
    assert list(pieces) == ["shares: control", "controls: control", "matrix: eigenvalues"]
    np.testing.assert_array_equal(pieces["controls: control"], parts[1].pieces(V[3:5], 0.7)["control"])
    assert pieces.legend["matrix: eigenvalues"] == ("zero", "positive")
    assert pieces.sizes()["controls: control"]["lower"] == 1
    assert "block 0: control" in ssn.Product(parts, [3, 2, 3]).pieces(V, 1.0)


def test_values_are_added_with_the_weights_of_the_blocks():
    cost, parts = example()
    u = cost.prox(V, 0.7)
    weights = np.array([1.0, 1.0, 1.0, 2.0, 3.0, 1.0, 1.0, 1.0])
    assert cost.value(u) == parts[1].value(u[3:5])
    assert cost.value(u, weights) == parts[1].value(u[3:5], weights[3:5])
    assert cost.value(V) == np.inf


def test_multipliers_have_the_signs_of_the_parts():
    cost, parts = example()
    u = cost.prox(V, 0.7)
    xi = (V - u) / 0.7
    found = cost.multipliers(u, xi)
    assert set(found) == {"normal", "sparsity", "bounds"}
    np.testing.assert_allclose(sum(found.values()), xi)
    own = parts[1].multipliers(u[3:5], xi[3:5])
    for name in ("sparsity", "bounds"):
        np.testing.assert_array_equal(found[name][3:5], own[name])
        assert not found[name][:3].any() and not found[name][5:].any()
    assert found["bounds"][4] < 0  # at the lower bound
    assert not found["normal"][3:5].any()


def test_what_holds_of_all_parts_holds_of_the_product():
    convex = ssn.Product([ssn.Bounds(0.0, 1.0), ssn.SparseCost(1.0)], [2, 2])
    assert convex.convex and convex.separable and convex.piecewise_affine
    assert convex.prox_derivative(np.ones(4), 0.5).diagonal.tolist() == [0.0, 0.0, 1.0, 1.0]
    coupled = ssn.Product([ssn.Bounds(0.0, 1.0), ssn.EuclideanBall(1.0)], [2, 2])
    assert not coupled.separable and not coupled.piecewise_affine
    assert coupled.prox_derivative(np.ones(4), 0.5).diagonal is None
    assert not ssn.Product([ssn.Bounds(0.0, 1.0), ssn.CountCost(1.0)], [2, 2]).convex
    assert ssn.Product([ssn.Simplex(1.0), ssn.CountCost(1.0)], [2, 2]).conjugate_value(np.ones(4)) is None
    both = ssn.Product([ssn.Simplex(1.0), ssn.L1Ball(2.0)], [2, 2])
    assert both.conjugate_value(np.array([1.0, 2.0, 3.0, -4.0])) == 10.0


def test_a_problem_on_two_blocks_is_two_problems():
    rng = np.random.default_rng(4)
    matrices, targets = rng.standard_normal((2, 8, 4)), rng.standard_normal((2, 8))
    costs = [ssn.Simplex(1.0), ssn.SparseCost(0.4)]
    whole = np.zeros((16, 8))
    whole[:8, :4], whole[8:, 4:] = matrices
    together = ssn.solve(
        ssn.CompositeProblem(smooth=ssn.LeastSquares(whole, targets.ravel()), cost=ssn.Product(costs, [4, 4]))
    ).require()
    for k, cost in enumerate(costs):
        alone = ssn.solve(
            ssn.CompositeProblem(smooth=ssn.LeastSquares(matrices[k], targets[k]), cost=cost)
        ).require()
        np.testing.assert_allclose(together.x[4 * k : 4 * k + 4], alone.x, atol=1e-8)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: ssn.Product([], []), "one entry a block"),
        (lambda: ssn.Product([ssn.Simplex(1.0)], [2, 3]), "one entry a block"),
        (lambda: ssn.Product([ssn.Simplex(1.0)], [0]), r"sizes\[0\] must be at least 1"),
        (lambda: ssn.Product([ssn.Simplex(1.0), 3], [1, 1]), r"costs\[1\] must have the members"),
        (lambda: ssn.Product([ssn.SecondOrderCone(3)], [4]), r"costs\[0\]: SecondOrderCone has blocks of 3"),
        (lambda: ssn.Product([ssn.Simplex(1.0)] * 2, [1, 1], ["a", "a"]), "must differ"),
        (lambda: ssn.Product([ssn.Simplex(1.0)], [2]).check_size(3), "not 3"),
        (
            lambda: ssn.Product([ssn.Bounds(0, 1), ssn.Simplex(1.0)], [1, 2]).check_weights(
                np.arange(1.0, 4.0)
            ),
            r"costs\[1\]: Simplex projects in the inner product",
        ),
    ],
)
def test_unusable_input_is_named(make, message):
    with pytest.raises(ssn.InputError, match=message):
        make()
