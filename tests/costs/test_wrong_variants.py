"""Wrong variants of costs: each is a mistake that somebody makes some day, caught by a named check of the contract."""

import numpy as np
import pytest

import ssn
from tests.costs import test_contract as contract
from tests.costs.wrong import is_caught


class SlopesAtTheWrongEnd(ssn.PiecewiseQuadraticCost):
    """Kinks are entered and left with the derivative on the right of the breakpoint only."""

    def _labels(self, v, step):
        labels = super()._labels(v, step)
        for j, b in enumerate(self._points):
            late = (labels == 2 * j + 2) & (v < b + step * self._right[j])
            labels = np.where(late, 2 * j + 1, labels)
        return labels


class ShrinkageOfAnElasticNetNotDivided(ssn.ElasticNetCost):
    """The proximal map forgets the quadratic, as that of L1 would."""

    def prox(self, v, step):
        return ssn.SparseCost(self.beta, self.lower, self.upper).prox(v, step)


class HuberOfUnitSlope(ssn.HuberCost):
    """Curvature 1/width whatever the weight: the derivative jumps at the ends of the quadratic piece."""

    def prox_derivative(self, v, step):
        return ssn.HuberCost(np.ones(()), self.width, self.target).prox_derivative(v, step)


class HingeWithoutLabels(ssn.HingeLoss):
    """Values do not see the labels."""

    def value(self, u, weights=None):
        terms = self.weight * np.maximum(0.0, self.margin - u)
        return float(terms.sum() if weights is None else weights @ terms)


class QuantileOfTheOtherTail(ssn.QuantileLoss):
    """Values exchange level and 1 - level."""

    def value(self, u, weights=None):
        return ssn.QuantileLoss(1.0 - self.level, self.target, self.weight).value(u, weights)


class DeadZoneOfTwiceTheWidth(ssn.InsensitiveLoss):
    """Width taken for half the width."""

    def prox(self, v, step):
        return ssn.InsensitiveLoss(2.0 * self.width, self.target, self.weight).prox(v, step)


class NormAndBoundsOneAfterTheOther(ssn.GroupSparseCost):
    """Shrink, then clip: right for one component a group only."""

    def prox(self, v, step):
        free = ssn.GroupSparseCost(self.beta, self.groups.labels, inner_weights=self.inner_weights)
        return np.clip(free.prox(v, step), self.lower, self.upper)


class NormDerivativeWithoutItsRankOneTerm(ssn.GroupSparseCost):
    """Only the diagonal of the derivative."""

    def prox_derivative(self, v, step):
        right = super().prox_derivative(v, step)
        return ssn.costs.DiagonalDerivative(right._entries)


class NormsWithoutInnerWeights(ssn.GroupSparseCost):
    """The proximal map of the plain Euclidean norm."""

    def prox(self, v, step):
        plain = ssn.GroupSparseCost(self.beta, self.groups.labels, lower=self.lower, upper=self.upper)
        return plain.prox(v, step)


class ThresholdOverAllActuators(ssn.SwitchingCost):
    """No sorting: the threshold as if all actuators stayed on."""

    def _threshold(self, v, step):
        t = self._strength(step)
        total = self.groups.sum(self.inner_weights)
        return t * self._sums(v) / (1.0 + t * total)


class SwitchingDerivativeWithoutTheOthers(ssn.SwitchingCost):
    """The threshold is taken as fixed."""

    def prox_derivative(self, v, step):
        return ssn.costs.DiagonalDerivative((self._labels(v, step) != 1).astype(float))


class JumpsAtTheSettings(ssn.MultiBangCost):
    """Slopes alpha u_i instead of half way between neighbours."""

    def prox(self, v, step):
        wrong = ssn.PiecewiseQuadraticCost(
            self.settings[1:-1], self.alpha * self.settings[:-1], lower=self.lower, upper=self.upper
        )
        return wrong.prox(v, step)


class EdgesThatDoNotSlope(ssn.PlanarMultiBangCost):
    """On an edge the projection of v: the slope of the envelope along it is left out."""

    def prox(self, v, step):
        level = [edge._replace(slope=0.0) for edge in self._edges]
        right, self._edges = self._edges, level
        wrong = super().prox(v, step)
        self._edges = right
        return wrong


class EdgesAsCells(ssn.PlanarMultiBangCost):
    """The derivative on an edge is that of a cell."""

    def prox_derivative(self, v, step):
        on_edge, in_cell, _ = self._kind(self._located(v, step)[0])
        return ssn.costs.DiagonalDerivative(np.tile(1.0 * (on_edge | in_cell), 2))


class QuadraticWithoutItsCentre(ssn.SumWithQuadratic):
    """The centre is left out of the proximal map."""

    def _inside(self, v, step):
        grown = 1.0 + step * self.gamma
        return v / grown, step / grown, grown


class StretchNotSquared(ssn.ScaledCost):
    """The step is scaled by the stretch, not by its square."""

    def _inside(self, v, step):
        return self.stretch * v, step * self.factor * abs(self.stretch)


class MarginsOfTheUnshifted(ssn.TranslatedCost):
    """Margins are read at v instead of v - shift."""

    def margins(self, v, step):
        return self.cost.margins(v, step)


class MoreauWithoutTheInverseStep(ssn.ConjugateCost):
    """v - s prox_{s g}(v/s)."""

    def prox(self, v, step):
        return v - step * self.cost.prox(v / step, step)


class EnvelopeThatJumps(ssn.costs.ConvexEnvelope):
    """The proximal map of the cost and the quadratic themselves, not of their envelope."""

    def prox(self, v, step):
        grown = 1.0 + step * self.alpha
        return self.cost.prox(v / grown, step / grown)


# wrong variant, and the check of the contract that catches it
WRONG = {
    SlopesAtTheWrongEnd: contract.prox_is_optimal,
    ShrinkageOfAnElasticNetNotDivided: contract.prox_is_the_brute_force_minimiser,
    HuberOfUnitSlope: contract.derivative_is_the_difference_quotient,
    HingeWithoutLabels: contract.prox_is_optimal,
    QuantileOfTheOtherTail: contract.prox_is_the_brute_force_minimiser,
    DeadZoneOfTwiceTheWidth: contract.prox_is_optimal,
    NormAndBoundsOneAfterTheOther: contract.prox_is_the_brute_force_minimiser,
    NormDerivativeWithoutItsRankOneTerm: contract.derivative_is_the_difference_quotient,
    NormsWithoutInnerWeights: contract.prox_is_optimal,
    ThresholdOverAllActuators: contract.prox_is_optimal,
    SwitchingDerivativeWithoutTheOthers: contract.derivative_is_the_difference_quotient,
    JumpsAtTheSettings: contract.prox_is_optimal,
    EdgesThatDoNotSlope: contract.prox_is_optimal,
    EdgesAsCells: contract.derivative_is_the_difference_quotient,
    QuadraticWithoutItsCentre: contract.prox_is_the_brute_force_minimiser,
    StretchNotSquared: contract.prox_is_optimal,
    MarginsOfTheUnshifted: contract.no_kink_within_the_margin,
    MoreauWithoutTheInverseStep: contract.conjugate_satisfies_fenchel,
    EnvelopeThatJumps: contract.prox_is_optimal,
}


@pytest.mark.parametrize("wrong", WRONG, ids=lambda c: c.__name__)
def test_the_named_check_catches_the_mistake(wrong):
    assert is_caught(wrong, WRONG[wrong])


def test_every_cost_of_these_files_has_a_wrong_variant():
    here = (
        "piecewise",
        "elastic_net",
        "huber",
        "losses",
        "group",
        "switching",
        "multibang",
        "planar",
        "operations",
        "envelope",
    )
    costs = [c for c in ssn.costs.CATALOGUE if c.__module__.rsplit(".", 1)[1] in here]
    assert {w.__base__ for w in WRONG} == set(costs)
    assert len(WRONG) == 19


def test_the_right_twin_is_not_caught():
    assert not is_caught(type("Right", (ssn.SwitchingCost,), {}), contract.prox_is_optimal)
