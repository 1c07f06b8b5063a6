"""Optimal control of a linear state equation with a nonsmooth cost of the control."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from .errors import InputError
from .inner import InnerProduct, relative
from .linear.boundary import as_matrix, as_square, product, transpose_product
from .protocols import Cost
from .records import Certificate
from .states import StateModel
from .validate import float_array, scalar, weight_array
from .work import WorkCounts

FloatArray = npt.NDArray[np.float64]


class ControlProblem:
    """minimise 1/2 ||C y - z||^2_Wy + alpha/2 ||u||^2_Wu + g(u) subject to E y = B u + f.

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
        is observed and no other is given. An error where it has no effect.
    control_mass : array, shape (n,), optional
        Lumped mass Wu, the inner product of the control; ones by default (dimensionless).
    observation_mass : array (m,) or sparse array (m, m), optional
        Wy; `state_mass` where the whole state is observed, else ones.

    Raises
    ------
    InputError
        Naming the argument, its shape and the expected one, the first entry that is not finite, or the
        argument that has no effect.

    Notes
    -----
    ``Solution.state`` is y, ``Solution.adjoint`` is p with E' p = C' Wy (z - C y), so that without g
    alpha Wu u = B' p.
    """

    def __init__(
        self,
        *,
        state: StateModel,
        target: Any,
        cost: Cost,
        control_weight: float,
        control_operator: Any = None,
        observation: Any = None,
        source: Any = None,
        state_mass: Any = None,
        control_mass: Any = None,
        observation_mass: Any = None,
    ) -> None:
        if not isinstance(state, StateModel):
            raise InputError(
                f"state must be a state model such as SteadyState(E), got {type(state).__name__}"
            )
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
        used = control_operator is None
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
        self.cost = cost
        self.unknowns = n
        self.work = WorkCounts()
        state.attach(self.work)
        self._offset: FloatArray | None = None

    @property
    def convex(self) -> bool:
        """Whether the problem is convex."""
        return bool(self.cost.convex)

    @property
    def strong_convexity(self) -> float:
        """A lower bound on the modulus of strong convexity of the objective, in the control product."""
        return self.alpha

    # S u = C E^-1 B u, and its adjoint in the weighted products

    def response(self, u: FloatArray) -> FloatArray:
        """E^-1 B u, the state without the source."""
        self.work.operator_products += 1
        return self.state.solve(product(self.control_operator, u))

    def observe(self, y: FloatArray) -> FloatArray:
        """C y."""
        if self.observation is None:
            return y
        self.work.operator_products += 1
        return product(self.observation, y)

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

    def pull_back(self, p: FloatArray) -> FloatArray:
        """Wu^-1 B' p."""
        self.work.operator_products += 1
        return transpose_product(self.control_operator, p) / self.weights

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
        misfit = self.forward(u) - self.reduced_target()
        value = 0.5 * self.observations.dot(misfit, misfit) + 0.5 * self.alpha * self.controls.dot(u, u)
        return value, self.adjoint(misfit) + self.alpha * u

    def smooth_value(self, u: FloatArray) -> float:
        """Value of the smooth part; one state solve."""
        misfit = self.forward(u) - self.reduced_target()
        return 0.5 * self.observations.dot(misfit, misfit) + 0.5 * self.alpha * self.controls.dot(u, u)

    def objective(self, u: FloatArray) -> float:
        """The objective; inf outside the domain of the cost."""
        return self.smooth_value(u) + self.cost.value(u, self.weights)

    def accuracy(self, u: FloatArray) -> float:
        """||u - u'|| / ||u'|| with u' the proximal map of the normal map (step 1/alpha), evaluated afresh."""
        step = 1.0 / self.alpha if self.alpha > 0 else self.natural_step()
        _, gradient = self.smooth(u)
        moved = self.cost.prox(u - step * gradient, step)
        return relative(self.controls.norm(u - moved), self.controls.norm(moved))

    def natural_step(self) -> float:
        """1 / ||S||^2, estimated by a few power steps, the step of the natural residual where alpha = 0."""
        x = np.cos(np.arange(self.unknowns) * 0.7) + 1.5
        size = 1.0
        for _ in range(5):
            x = self.adjoint(self.forward(x / self.controls.norm(x)))
            size = self.controls.norm(x)
            if size == 0.0:
                return 1.0
        return 1.0 / size

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
        if self.alpha == 0.0 or not self.convex:
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
    return as_square(array, name, size) if array.ndim == 2 else weight_array(value, name, size)
