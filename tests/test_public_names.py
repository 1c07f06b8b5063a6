"""Public names are promises: to remove one takes a deprecation first, to add one takes a line here."""

import enum
import inspect

import pytest

import ssn
import ssn.evidence

# A name that goes away must have been deprecated in an earlier version (DEVELOPERS.md, "Interfaces that last").
PUBLIC = {
    "ssn": """
        AffineMap Bounds Certificate ComplementarityProblem CompositeProblem ConjugateCost ControlProblem Cost
        CountCost DualSearch ElasticNetCost EnvelopeSearch Equation EuclideanBall FullStep GroupSparseCost HalfSpace
        HingeLoss HuberCost Hyperplane InputError InsensitiveLoss Iteration L1Ball LeastSquares Linearization
        Logistic MissingExtraError MultiBangCost NonlinearControlProblem NonlinearStateModel NotConverged
        OrdinaryDifferentialSystem Outcome Pieces PiecewiseQuadraticCost PlanarMultiBangCost
        PositiveSemidefiniteCone PowerCost ProblemFileError Product Quadratic QuantileLoss ResidualSearch ScaledCost
        SecondOrderCone SemilinearState Simplex SmoothMap SmoothPart Solution SolveInterrupted SparseCost StateModel
        StateSolveError SteadyState StepRecord StopSolve SumProblem SumWithQuadratic SwitchingCost Term
        TimeDependentSemilinearState TimeDependentState TracedEquation TranslatedCost WorkCounts costs
        custom_operation declare_continuous follow follow_meshes placements
        primal_dual proximal_gradient refit solve solve_many vanishing_weight weight_path
    """,
    "ssn.evidence": """
        Assessment Check KnownValue MeshRow MeshStudy MethodResult RateVerdict assess check_derivative compare
        mesh_study rate
    """,
}
MODULES = {"ssn": ssn, "ssn.evidence": ssn.evidence}
NAMES = [(module, name) for module, names in PUBLIC.items() for name in names.split()]


@pytest.mark.parametrize(("module", "name"), NAMES)
def test_the_name_is_there_and_documented(module, name):
    assert name in MODULES[module].__all__, f"{module}.{name} was removed: it must be deprecated first"
    thing = getattr(MODULES[module], name)
    text = inspect.cleandoc(thing.__doc__ or "")
    generated = text.startswith(f"{name}(")  # what a dataclass or a protocol gets without a docstring
    assert text and not generated, f"{module}.{name} has no docstring"
    if isinstance(thing, type) and issubclass(thing, enum.Enum):
        assert text != "An enumeration."


@pytest.mark.parametrize("module", MODULES)
def test_every_public_name_is_listed_here_once(module):
    names = MODULES[module].__all__
    assert sorted(set(names)) == sorted(names)
    new = sorted(set(names) - set(PUBLIC[module].split()))
    assert not new, f"new public names of {module}: add {', '.join(new)} to PUBLIC in {__file__}"


def test_how_many_there_are():
    assert len(NAMES) >= 53
    assert all(len(names.split()) == len(set(names.split())) for names in PUBLIC.values())
