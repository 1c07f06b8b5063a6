"""Optimal control of a linear state equation with a nonsmooth cost of the control."""

from __future__ import annotations

import copy
from typing import Any, Self

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from .duality import Gap, duality_gap, has_gap
from .errors import InputError
from .inner import InnerProduct, relative
from .linear.boundary import as_matrix, as_square, product, transpose_product
from .protocols import Cost
from .records import Certificate
from .states import StateModel
from .time_tracking import by_levels, tracking
from .validate import bound_arrays, float_array, scalar, weight_array
from .work import WorkCounts

FloatArray = npt.NDArray[np.float64]


class ControlStatement:
    """What statements of optimal control have in common, whatever their state equation: operators, masses, bounds."""

    def check_state(self, state: Any) -> None:
        """Raise `InputError` for something that is no state model of this statement."""
        raise NotImplementedError

    def check_statement(self) -> None:
        """Raise `InputError` for what does not fit once all arguments are there."""

    def __init__(
        self,
        *,
        state: Any,
        target: Any,
        cost: Cost,
        control_weight: float,
        control_operator: Any = None,
        observation: Any = None,
        source: Any = None,
        state_mass: Any = None,
        control_mass: Any = None,
        observation_mass: Any = None,
        state_lower: Any = None,
        state_upper: Any = None,
        state_tolerance: float | None = None,
    ) -> None:
        self.check_state(state)
        self.state = state
        size = state.size
        self.alpha = scalar(control_weight, "control_weight", nonnegative=True)
        mass = _mass(state_mass, "state_mass", size)
        if control_operator is None:
            if mass is None:
                raise InputError("give control_operator (B), or state_mass for a distributed control")
            self.control_operator: Any = (
                sp.csr_array(sp.diags_array(mass)) if isinstance(mass, np.ndarray) else mass
            )
        else:
            self.control_operator = as_matrix(control_operator, "control_operator", shape=(size, None))
        n = int(self.control_operator.shape[1])
        self.observation = (
            None if observation is None else as_matrix(observation, "observation", shape=(None, size))
        )
        m = size if self.observation is None else int(self.observation.shape[0])
        self._bound_the_state(state_lower, state_upper, state_tolerance, mass)
        used = control_operator is None or self.state_bounded
        weight = _mass(observation_mass, "observation_mass", m)
        if weight is None and self.observation is None and mass is not None:
            weight, used = mass, True
        if mass is not None and not used:
            raise InputError(
                "state_mass has no effect here: the control operator and the observation mass are given otherwise"
            )
        self.observations = InnerProduct(np.ones(m) if weight is None else weight, "observation_mass")
        self.weights = weight_array(control_mass, "control_mass", n)
        self.controls = InnerProduct(self.weights)
        self.target = float_array(target, "target", shape=(m,))
        self.source = None if source is None else float_array(source, "source", shape=(size,))
        if not isinstance(cost, Cost):
            raise InputError(f"cost must have the members of ssn.Cost, got {type(cost).__name__}")
        cost.check_size(n)
        if hasattr(cost, "check_weights"):
            cost.check_weights(self.weights)
        self.cost = cost
        self.unknowns = n
        self.work = WorkCounts()
        state.attach(self.work)
        self.check_statement()

    def _bound_the_state(self, lower: Any, upper: Any, tolerance: float | None, mass: Any) -> None:
        size = self.state.size
        self.state_bounded = lower is not None or upper is not None
        self.state_penalty: float | None = None
        if not self.state_bounded:
            if tolerance is not None:
                raise InputError("state_tolerance has no effect without state_lower or state_upper")
            return
        low, high = bound_arrays(
            -np.inf if lower is None else lower,
            np.inf if upper is None else upper,
            names=("state_lower", "state_upper"),
        )
        for name, array in (("state_lower", low), ("state_upper", high)):
            if array.shape not in ((), (size,)):
                raise InputError(f"{name} has shape {array.shape}, expected a number or ({size},)")
        self.state_lower, self.state_upper = np.broadcast_to(low, size), np.broadcast_to(high, size)
        both = np.concatenate([low.ravel(), high.ravel()])
        largest = float(np.abs(both[np.isfinite(both)]).max(initial=0.0))
        self.state_tolerance = (
            1e-6 * (largest or 1.0)
            if tolerance is None
            else scalar(tolerance, "state_tolerance", positive=True)
        )
        if self.alpha == 0.0:
            raise InputError("state bounds need control_weight > 0: the penalty path stands on it")
        lumped = np.ones(size) if mass is None else mass
        if not isinstance(lumped, np.ndarray) or lumped.ndim == 2:
            lumped = np.asarray(lumped.sum(axis=1)).ravel()
        if not (lumped > 0).all():
            raise InputError(
                f"state bounds need a state_mass with positive row sums; row {int(np.argmax(lumped <= 0))} has not"
            )
        self.bound_mass: FloatArray = lumped

    def penalised(self, gamma: float) -> Self:
        """The same problem with its state bounds replaced by their penalty gamma > 0; see the notes of the class."""
        if not self.state_bounded:
            raise InputError("penalised needs state_lower or state_upper")
        other = copy.copy(self)
        other.state_penalty = scalar(gamma, "gamma", positive=True)
        return other

    def unbounded(self) -> Self:
        """The same problem without its state bounds."""
        other = copy.copy(self)
        other.state_bounded, other.state_penalty = False, None
        return other

    def with_cost(self, cost: Cost) -> Self:
        """Return the same problem with another cost; operators, factors and work counters are shared."""
        if not isinstance(cost, Cost):
            raise InputError(f"cost must have the members of ssn.Cost, got {type(cost).__name__}")
        cost.check_size(self.unknowns)
        other = copy.copy(self)
        other.cost = cost
        return other

    def observe(self, y: FloatArray) -> FloatArray:
        """C y."""
        if self.observation is None:
            return y
        self.work.operator_products += 1
        return product(self.observation, y)

    def pull_back(self, p: FloatArray) -> FloatArray:
        """Wu^-1 B' p."""
        self.work.operator_products += 1
        return transpose_product(self.control_operator, p) / self.weights

    def _penalised_value(self, u: FloatArray, y: FloatArray, misfit: FloatArray) -> float:
        above, below = np.maximum(y - self.state_upper, 0.0), np.maximum(self.state_lower - y, 0.0)
        value = 0.5 * self.observations.dot(misfit, misfit) + 0.5 * self.alpha * self.controls.dot(u, u)
        if self.state_penalty is None:
            violation = max(above.max(), below.max())
            return value if violation <= self.state_tolerance else float("inf")
        return value + 0.5 * self.state_penalty * float(self.bound_mass @ (above * above + below * below))


class ControlProblem(ControlStatement):
    """minimise 1/2 ||C y - z||^2_Wy + alpha/2 ||u||^2_Wu + g(u) subject to E y = B u + f, and bounds of the state.

    Parameters
    ----------
    state : StateModel
        The state equation, for instance ``SteadyState(E)``, of size N.
    target : array, shape (m,)
        z, in the unit of the observation.
    cost : Cost
        g, weighted by `control_mass` where it is an integral.
    control_weight : float
        alpha >= 0, (unit of observation / unit of control)^2 times the ratio of the masses' units.
    control_operator : sparse array, array or LinearOperator, shape (N, n), optional
        B. None means a distributed control, B = `state_mass`.
    observation : sparse array, array or LinearOperator, shape (m, N), optional
        C. None observes the whole state.
    source : array, shape (N,), optional
        f; zero by default.
    state_mass : array (N,) or sparse array (N, N), optional
        Mass of the state space: the load of a distributed control, and the observation mass where the whole state
        is observed and no other is given; lumped (row sums), the mass M of state bounds. An error where it has no
        effect.
    control_mass : array, shape (n,), optional
        Lumped mass Wu, the inner product of the control; ones by default (dimensionless).
    observation_mass : array (m,) or sparse array (m, m), optional
        Wy; `state_mass` where the whole state is observed, else ones.
    state_lower, state_upper : float or array, shape (N,), optional
        Pointwise bounds of the state y (not of the observation), in its unit; infinite where there is none. They need
        alpha > 0, an explicit E, B and C, and a cost that is separable.
    state_tolerance : float, optional
        Largest violation of a state bound in a solution, in the unit of the state; by default 1e-6 times the largest
        finite |bound|, or 1e-6 where the bounds are zero.

    Raises
    ------
    InputError
        Naming the argument, its shape and the expected one, the first entry that is not finite, or the
        argument that has no effect.

    Notes
    -----
    ``Solution.state`` is y, ``Solution.adjoint`` is p with E' p = C' Wy (z - C y), so that without g
    alpha Wu u = B' p.

    *Measures.* Sources on points and lines, minimise 1/2 ||C y - z||^2 + beta ||u||_M, are the vector of the strengths
    at the nodes: control_weight 0, cost ``SparseCost(beta)``, control_operator the identity (strengths are nodal
    loads), no control_mass. Where control_weight is 0 the problem need not be strongly convex:
    ``Solution.certificate`` then bounds the objective by a duality gap (kind "gap"), where the conjugate of the cost is
    known.

    State bounds are solved for by a path in the penalty gamma/2 (||max(0, y - upper)||^2_M + ||max(0, lower -
    y)||^2_M), M the lumped state mass or ones. ``Solution.multipliers["state"]`` is the density l = gamma max(0, y
    - upper) - gamma max(0, lower - y) with respect to M: positive where the upper bound acts, negative where the
    lower one does; M l are nodal forces, and E' p = C' Wy (z - C y) - M l. `penalised` gives the problem for one
    gamma, whose objective is the penalised one; a problem with hard bounds has an objective (inf where they are
    violated by more than `state_tolerance`) and no gradient.
    """

    _offset: FloatArray | None = None
    _curvature: float | None = None

    def check_state(self, state: Any) -> None:
        """Raise `InputError` for something that is no linear state model."""
        if not isinstance(state, StateModel):
            hint = (
                ": a nonlinear one belongs into NonlinearControlProblem"
                if hasattr(state, "linearize")
                else ""
            )
            raise InputError(
                f"state must be a state model such as SteadyState(E), got {type(state).__name__}{hint}"
            )

    @property
    def affine(self) -> bool:
        """Whether the gradient of the smooth part is an affine map: not with penalised state bounds."""
        return not self.state_bounded

    @property
    def convex(self) -> bool:
        """Whether the problem is convex."""
        return bool(self.cost.convex)

    @property
    def strong_convexity(self) -> float:
        """A lower bound on the modulus of strong convexity of the objective, in the control product."""
        return self.alpha if self.convex else 0.0

    # S u = C E^-1 B u, and its adjoint in the weighted products

    def response(self, u: FloatArray) -> FloatArray:
        """E^-1 B u, the state without the source."""
        self.work.operator_products += 1
        return self.state.solve(product(self.control_operator, u))

    def offset(self) -> FloatArray:
        """E^-1 f, the state of the zero control; solved for once."""
        if self._offset is None:
            self._offset = np.zeros(self.state.size) if self.source is None else self.state.solve(self.source)
        return self._offset

    def adjoint_of(self, observed: FloatArray) -> FloatArray:
        """P with E' p = C' Wy observed."""
        weighted = self.observations.apply(observed)
        if self.observation is not None:
            self.work.operator_products += 1
            weighted = transpose_product(self.observation, weighted)
        return self.state.adjoint_solve(weighted)

    def forward(self, u: FloatArray) -> FloatArray:
        """S u; one state solve."""
        return self.observe(self.response(u))

    def adjoint(self, q: FloatArray) -> FloatArray:
        """S* q; one state solve."""
        return self.pull_back(self.adjoint_of(q))

    def reduced_target(self) -> FloatArray:
        """Z - C E^-1 f: what the control alone has to match."""
        return self.target if self.source is None else self.target - self.observe(self.offset())

    # what the reference methods and the evidence see

    def smooth(self, u: FloatArray) -> tuple[float, FloatArray]:
        """Value and gradient (Riesz representative in the control product) of the smooth part; two state solves."""
        if self.state_bounded:
            return self._penalised_smooth(u)
        if by_levels(self):
            value, gradient = tracking(self, u)
            return value + 0.5 * self.alpha * self.controls.dot(u, u), gradient + self.alpha * u
        misfit = self.forward(u) - self.reduced_target()
        value = 0.5 * self.observations.dot(misfit, misfit) + 0.5 * self.alpha * self.controls.dot(u, u)
        return value, self.adjoint(misfit) + self.alpha * u

    def _state(self, u: FloatArray) -> FloatArray:
        """The state that belongs to u, refined once: a penalty magnifies its rounding errors."""
        load = product(self.control_operator, u)
        if self.source is not None:
            load = load + self.source
        y = self.state.solve(load)
        return y + self.state.solve(self.state.residual(y, load))

    def _penalised_smooth(self, u: FloatArray) -> tuple[float, FloatArray]:
        if self.state_penalty is None:
            raise InputError(
                "state bounds are hard constraints, which a gradient does not see; take problem.penalised(gamma)"
            )
        y = self._state(u)
        misfit = self.observe(y) - self.target
        excess = np.maximum(y - self.state_upper, 0.0) - np.maximum(self.state_lower - y, 0.0)
        load = self.observations.apply(misfit)
        if self.observation is not None:
            load = transpose_product(self.observation, load)
        p = self.state.adjoint_solve(load + self.state_penalty * self.bound_mass * excess)
        return self._penalised_value(u, y, misfit), self.pull_back(p) + self.alpha * u

    def smooth_value(self, u: FloatArray) -> float:
        """Value of the smooth part; one state solve."""
        if self.state_bounded:
            y = self._state(u)
            return self._penalised_value(u, y, self.observe(y) - self.target)
        misfit = self.forward(u) - self.reduced_target()
        return 0.5 * self.observations.dot(misfit, misfit) + 0.5 * self.alpha * self.controls.dot(u, u)

    def objective(self, u: FloatArray) -> float:
        """The objective; inf outside the domain of the cost."""
        return self.smooth_value(u) + self.cost.value(u, self.weights)

    def duality_gap(self, u: FloatArray, misfit: FloatArray, p: FloatArray) -> Gap:
        """The duality gap of u where alpha = 0, with misfit = z - S u and p = S* misfit; see `ssn.duality`."""
        return duality_gap(self, u, misfit, p)

    @property
    def has_gap(self) -> bool:
        """Whether accuracy is a duality gap: alpha = 0, and a cost that is bounded below with a known conjugate."""
        return self.alpha == 0.0 and has_gap(self)

    def accuracy(self, u: FloatArray) -> float:
        """||u - u'|| / ||u'|| with u' the proximal map of the normal map (step 1/alpha), evaluated afresh.

        With a cost that is not convex, and where alpha = 0, u' is the proximal gradient point of `natural_step`. Where
        alpha = 0 and the conjugate of the cost is known: the duality gap relative to the scale of the objective.
        """
        if self.has_gap:
            misfit = self.reduced_target() - self.forward(u)
            return self.duality_gap(u, misfit, self.adjoint(misfit)).relative
        step = 1.0 / self.alpha if self.alpha > 0 and self.convex else self.natural_step()
        _, gradient = self.smooth(u)
        moved = self.cost.prox(u - step * gradient, step)
        return relative(self.controls.norm(u - moved), self.controls.norm(moved))

    def natural_step(self) -> float:
        """The step of the natural residual: 1 / ||S||^2 by a few power steps; below 1/L where the cost is not convex.

        There L = ||S||^2 + alpha by 20 power steps, with five percent for what they miss.
        """
        if not self.convex:
            if self._curvature is None:
                self._curvature = 1.05 * self._size_of_operator(20)
            return 0.95 / (self._curvature + self.alpha or 1.0)
        return 1.0 / (self._size_of_operator(5) or 1.0)

    def _size_of_operator(self, steps: int) -> float:
        """||S||^2 by power steps: a lower bound that comes near."""
        x = np.cos(np.arange(self.unknowns) * 0.7) + 1.5
        size = 0.0
        for _ in range(steps):
            x = self.adjoint(self.forward(x / self.controls.norm(x)))
            size = self.controls.norm(x)
            if size == 0.0:
                break
        return size

    def state_and_adjoint(self, u: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Y and p that belong to u; two state solves."""
        y = self.response(u) + self.offset()
        return y, self.adjoint_of(self.target - self.observe(y))

    def gradient_error(self, u: FloatArray, y: FloatArray, p: FloatArray) -> float:
        """Size of the error that the linear solves leave in S*(S u - z): one refinement, times two; two solves."""
        load = product(self.control_operator, u)
        if self.source is not None:
            load = load + self.source
        correction = self.state.solve(self.state.residual(y, load))
        misfit = self.observations.apply(self.target - self.observe(y) - self.observe(correction))
        rhs = misfit if self.observation is None else transpose_product(self.observation, misfit)
        dual = self.state.adjoint_solve(self.state.adjoint_residual(p, rhs))
        return 2.0 * self.controls.norm(self.pull_back(dual))

    def certify(
        self, difference: FloatArray, reference: float, gradient_error: float, moved: float = 0.0
    ) -> Certificate | None:
        """Distance bound for z = prox(u - grad f(u)/alpha, 1/alpha) from S (z - u), or for a point `moved` from z."""
        if self.alpha == 0.0 or not self.convex or self.state_bounded:
            return None
        solve_error = gradient_error / self.alpha
        bound = self.observations.norm(difference) / (2.0 * np.sqrt(self.alpha)) + solve_error + moved
        return Certificate(bound, relative(bound, reference), "||S (z - u)|| / (2 sqrt(alpha))", solve_error)


def _mass(value: Any, name: str, size: int) -> Any:
    if value is None:
        return None
    if sp.issparse(value):
        return as_square(value, name, size)
    array = np.asarray(value)
    if array.ndim == 2:
        return sp.csr_array(as_square(array, name, size))
    return weight_array(value, name, size)
