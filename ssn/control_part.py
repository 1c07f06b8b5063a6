"""The smooth part of a control problem as a function of the control, with the state eliminated."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.linalg import LinearOperator

from .control import ControlProblem
from .errors import InputError

FloatArray = npt.NDArray[np.float64]

# where the control has no quadratic cost of its own: weight in the model of the Hessian, relative to ||S||^2
MODEL_WEIGHT = 1e-3


class ControlPart:
    """f(u) = 1/2 ||S u - z||^2_Wy + alpha/2 ||u||^2_Wu of a control problem, with Euclidean derivatives.

    Parameters
    ----------
    control : ControlProblem
        Without state bounds. Its cost is no part of f.

    Raises
    ------
    InputError
        For a problem with state bounds.
    """

    affine_gradient = True

    def __init__(self, control: ControlProblem) -> None:
        if control.state_bounded:
            raise InputError(
                "several terms together with state bounds are not supported: leave out the state bounds, or take "
                "ssn.ControlProblem alone"
            )
        self.control = control
        self.size = control.unknowns
        self.strong_convexity = control.alpha

    def value(self, u: FloatArray) -> float:
        """f(u); one state solve."""
        return float(self.control.smooth_value(u))

    def gradient(self, u: FloatArray) -> FloatArray:
        """The partial derivatives Wu S*(S u - z) + alpha Wu u; two state solves."""
        control = self.control
        misfit = control.forward(u) - control.reduced_target()
        gradient: FloatArray = control.weights * (control.adjoint(misfit) + control.alpha * u)
        return gradient

    def hessian(self, u: FloatArray) -> LinearOperator:
        """Wu (S*S + alpha I) as an operator; two state solves a product."""
        control = self.control

        def apply(x: FloatArray) -> FloatArray:
            x = np.ravel(x)
            image: FloatArray = control.weights * (control.adjoint(control.forward(x)) + control.alpha * x)
            return image

        return LinearOperator((self.size, self.size), matvec=apply, dtype=np.float64)

    def hessian_model(self) -> sp.csr_array:
        """The part of the Hessian that is explicit, alpha Wu: what is left has few eigenvalues that matter.

        Where alpha is 0, a small multiple of ||S||^2 stands for it.
        """
        weight = self.control.alpha
        if weight == 0.0:
            weight = MODEL_WEIGHT / self.control.natural_step()
        return sp.csr_array(sp.diags_array(weight * self.control.weights))
