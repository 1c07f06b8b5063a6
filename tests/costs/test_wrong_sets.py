"""Wrong variants of sets and nonconvex costs: one mistake each, caught by a named check of the contract."""

import numpy as np
import pytest

import ssn
from ssn.costs.convex_set import smooth_plus, threshold
from ssn.costs.derivative import BlockDerivative, DiagonalDerivative, LowRankDerivative, SpectralDerivative
from tests.costs import nonconvex, sets
from tests.costs import test_contract as contract
from tests.costs.wrong import is_caught


class SimplexByClippingAndScaling(ssn.Simplex):
    """Negative parts cut, the rest scaled to the total: feasible, but not nearest."""

    def _project(self, v):
        positive = np.maximum(v, 0.0) + 1e-12
        return positive * self.total / (self.weights * positive).sum()


class SimplexInThePlainProduct(ssn.Simplex):
    """The threshold sees the weights, the projection forgets that they are those of the inner product."""

    @property
    def inner_weights(self):
        return np.ones(())


class SimplexDerivativeWithoutTheThreshold(ssn.Simplex):
    """The threshold taken as constant."""

    def _derivative(self, v):
        return DiagonalDerivative((self._gaps(v) > 0).astype(float))


class BallScaledFromZero(ssn.EuclideanBall):
    """Scaled towards zero instead of the centre."""

    def _project(self, v):
        size = self._offset(v)[1]
        return v.copy() if size < self.radius else self.centre + self.radius / size * v


class BallDerivativeWithoutItsRadialPart(ssn.EuclideanBall):
    """The projection varies along the radius, too."""

    def _derivative(self, v):
        size = self._offset(v)[1]
        return DiagonalDerivative(np.full(v.shape, min(1.0, self.radius / max(size, 1e-300))))


class L1BallByTheSimplexEverywhere(ssn.L1Ball):
    """Points inside are moved to the sphere."""

    def _project(self, v):
        t = threshold(np.abs(v), self.weights, self.radius)
        return np.sign(v) * np.maximum(np.abs(v) - t, 0.0)


class L1BallDerivativeWithoutSigns(ssn.L1Ball):
    """The rank-one term of the simplex, without the signs."""

    def _derivative(self, v):
        found = super()._derivative(v)
        if found.diagonal is None:
            found.factors = np.abs(found.factors)
        return found


class HalfSpaceNormalWithoutWeights(ssn.HalfSpace):
    """Along a instead of a/w: lands on the plane, but not at the nearest point."""

    def _project(self, v):
        excess = self.normal @ v - self.level
        return v - max(0.0, excess) * self.normal / (self.normal @ self.normal)


class HyperplaneFromOneSide(ssn.Hyperplane):
    """An inequality in place of the equation."""

    def _project(self, v):
        return ssn.HalfSpace(self.normal, self.level, self.weights).prox(v, 1.0)


class ConeWithoutItsPolar(ssn.SecondOrderCone):
    """The formula of the boundary also where the projection is zero."""

    def _project(self, v):
        values, axis = self._spectrum(v)
        upper = np.where(values[:, 0] < 0.0, 0.5 * values[:, 1] * 2.0, values[:, 1])
        return self._rebuilt(np.stack([np.maximum(values[:, 0], 0.0), np.abs(upper)], axis=1), axis)


class ConeDerivativeOfTheAxisForgotten(ssn.SecondOrderCone):
    """The axis x / ||x|| taken as constant."""

    def _derivative(self, v):
        found = super()._derivative(v)
        found.across = np.zeros_like(found.across)
        return found


class SemidefiniteEntriesCut(ssn.PositiveSemidefiniteCone):
    """Positive parts of the diagonal entries instead of the eigenvalues."""

    def _project(self, v):
        matrix = self.to_matrix(v)
        return self.to_vector(np.diag(np.maximum(np.diag(matrix), 0.0)))


class SemidefiniteDerivativeWithoutMixedTerms(ssn.PositiveSemidefiniteCone):
    """Eigenvectors taken as constant: no divided differences between kept and cut eigenvalues."""

    def _derivative(self, v):
        values, vectors = self._spectrum(v)
        kept = (values > 0).astype(float)
        return SpectralDerivative(vectors, np.outer(kept, kept), self.to_matrix, self.to_vector)


class ProductWithTheFirstCostEverywhere(ssn.Product):
    """The derivatives of the blocks in the wrong order."""

    def prox_derivative(self, v, step):
        right = super().prox_derivative(v, step)
        return BlockDerivative(
            [
                DiagonalDerivative(np.ones(n)) if k else p
                for k, (p, n) in enumerate(zip(right.parts, self.sizes, strict=True))
            ],
            self.sizes,
        )


class CountJumpOfTheShrinkage(ssn.CountCost):
    """The threshold of L1, step * beta, in place of sqrt(2 step beta)."""

    def _landing(self, price):
        return price


class CountJumpWithoutItsBound(ssn.CountCost):
    """The jump as if there were no bounds."""

    def _jump(self, bound, step):
        return np.where(bound > 0, super()._jump(np.full(np.shape(bound), np.inf), step), np.inf)


class PowerDerivativeWithoutCurvature(ssn.PowerCost):
    """1 on what is kept, as for a count."""

    def prox_derivative(self, v, step):
        return DiagonalDerivative((super().prox_derivative(v, step).diagonal > 0).astype(float))


class PowerJumpTooEarly(ssn.PowerCost):
    """Kept while zero is still better."""

    def _landing(self, price):
        return 0.8 * super()._landing(price)


class SmoothedSimplexOffItsPlane(ssn.Simplex):
    """Smoothed with the threshold of the sharp map: the derivative is not that of the map."""

    def _smoothed(self, v, eps):
        value, slope = smooth_plus(self._gaps(v), eps)
        return value, LowRankDerivative(slope, slope[:, None], np.array([0.5 / slope.sum()]), self.weights)


# wrong variant, and the check of the contract that catches it
WRONG = {
    SimplexByClippingAndScaling: contract.prox_is_optimal,
    SimplexInThePlainProduct: contract.prox_is_optimal,
    SimplexDerivativeWithoutTheThreshold: contract.derivative_is_the_difference_quotient,
    SmoothedSimplexOffItsPlane: contract.smoothed_derivative_is_that_of_the_smoothed_map,
    BallScaledFromZero: contract.prox_is_feasible,
    BallDerivativeWithoutItsRadialPart: contract.derivative_is_the_difference_quotient,
    L1BallByTheSimplexEverywhere: contract.prox_is_optimal,
    L1BallDerivativeWithoutSigns: contract.equal_pieces_are_affine,
    HalfSpaceNormalWithoutWeights: contract.prox_is_firmly_nonexpansive,
    HyperplaneFromOneSide: contract.prox_is_feasible,
    ConeWithoutItsPolar: contract.prox_is_optimal,
    ConeDerivativeOfTheAxisForgotten: contract.derivative_is_the_difference_quotient,
    SemidefiniteEntriesCut: contract.prox_is_optimal,
    SemidefiniteDerivativeWithoutMixedTerms: contract.derivative_is_newton_at_kinks,
    ProductWithTheFirstCostEverywhere: contract.derivative_is_the_difference_quotient,
    CountJumpOfTheShrinkage: contract.prox_is_the_brute_force_minimiser,
    CountJumpWithoutItsBound: contract.prox_is_the_brute_force_minimiser,
    PowerDerivativeWithoutCurvature: contract.derivative_is_the_difference_quotient,
    PowerJumpTooEarly: contract.prox_is_the_brute_force_minimiser,
}


@pytest.mark.parametrize("wrong", WRONG, ids=lambda c: c.__name__)
def test_the_named_check_catches_the_mistake(wrong):
    assert is_caught(wrong, WRONG[wrong])


def test_every_cost_of_these_files_has_a_wrong_variant():
    costs = {*sets.INSTANCES, *nonconvex.INSTANCES}
    assert costs <= set(ssn.costs.CATALOGUE)
    assert {w.__base__ for w in WRONG} == costs
    assert len(WRONG) == 19


@pytest.mark.parametrize("right", [ssn.Simplex, ssn.SecondOrderCone], ids=lambda c: c.__name__)
def test_the_right_twin_is_not_caught(right):
    assert not is_caught(type("Right", (right,), {}), contract.prox_is_optimal)
