"""The classes of a suite, run as asv runs them but in this process, on a folder of problem files."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

import ssn
from ssn.benchmarking import FIGURES, CaseFailedError, cases, figures, remembered, suite

ROD = '''\
"""Few heaters on a rod."""
import numpy as np
import scipy.sparse as sp
import ssn

SIZES = (20, 40)
VERSION = "7"


def build(n=20, alpha=1e-3):
    h = 1.0 / (n + 1)
    off = -np.ones(n - 1)
    E = sp.diags_array([off, 2.0 * np.ones(n), off], offsets=[-1, 0, 1]) / h
    mass = np.full(n, h)
    return ssn.ControlProblem(
        state=ssn.SteadyState(E), target=np.ones(n), cost=ssn.SparseCost(5e-2, 0.0, 20.0),
        control_weight=alpha, state_mass=mass, control_mass=mass,
    )
'''

# x |x| = 0 in one variable: full steps halve x; x^2 + 1 = 0 has no root
EQUATION = '''\
"""An equation without a mesh."""
import numpy as np
import ssn


class Equation:
    start = np.array([1.0, 2.0])

    def __init__(self, shift):
        self.shift = shift

    def residual(self, x):
        return x * x + self.shift

    def linearize(self, x):
        return ssn.Linearization(self.residual(x), np.diag(2.0 * x))


def build(shift=-1.0):
    if shift == 0.0:
        raise ValueError("no zero shift, please")
    return Equation(shift)
'''


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    problems = tmp_path / "my_problems"
    problems.mkdir()
    (problems / "hot_rod.py").write_text(ROD)
    (problems / "parabola.py").write_text(EQUATION)
    (problems / "broken.py").write_text("import no_such_package\n")
    run = tmp_path / "run"
    run.mkdir()
    monkeypatch.chdir(run)
    return problems


def made(folder: Path, **options):
    return suite(folder, **options)


def test_two_classes_a_file_with_its_cases(folder):
    classes = made(
        folder, parameters={"hot_rod": {"alpha": [1e-2, 1e-3]}, "parabola": {"shift": [-1.0, 1.0]}}
    )
    assert sorted(classes) == [
        "Broken",
        "BrokenFigures",
        "HotRod",
        "HotRodFigures",
        "Parabola",
        "ParabolaFigures",
    ]
    assert all(kind.__name__ == name for name, kind in classes.items())  # asv looks classes up by this name
    rod = classes["HotRod"]()
    assert rod.params == [[20, 40], [1e-2, 1e-3]]
    assert rod.param_names == ["n", "alpha"]
    assert rod.version == f"{cases.VERSION}, problem 7"
    parabola = classes["ParabolaFigures"]()
    assert (parabola.params, parabola.param_names) == ([[-1.0, 1.0]], ["shift"])
    assert parabola.version.endswith("problem 1")
    assert made(folder, sizes={"hot_rod": [10]})["HotRod"]().params == [[10]]


def test_paths_are_relative_to_the_calling_module(folder):
    module = folder.parent / "bench.py"
    namespace = {"__file__": str(module), "__name__": "bench"}
    exec('from ssn.benchmarking import suite\nglobals().update(suite("my_problems/"))', namespace)
    assert namespace["HotRod"]().params == [[20, 40]]


def test_time_and_memory_benchmarks(folder):
    rod = made(folder)["HotRod"]()
    assert rod.number == 1
    rod.setup(20)
    rod.time_solve(20)
    with pytest.raises(KeyError):  # a problem that was solved before has its factorisation
        rod.time_solve(20)
    rod.setup(20)
    rod.peakmem_setup(20)
    rod.peakmem_solve(20)


def test_a_failed_solve_is_not_timed(folder):
    parabola = made(folder, parameters={"parabola": {"shift": [1.0]}})["Parabola"]()
    parabola.setup(1.0)
    with pytest.raises(ssn.NotConverged):
        parabola.time_solve(1.0)


def figures_of(instance, directory, *values):
    return {name: getattr(instance, f"track_{name}")(directory, *values) for name in FIGURES}


def test_figures(folder):
    rod = made(folder)["HotRodFigures"]()
    directory = rod.setup_cache()
    found = figures_of(rod, directory, 20)
    problem = ssn.problem_file.load(folder / "hot_rod.py").build(n=20)
    solution = ssn.solve(problem)
    assert found["unsolved"] == found["disagreement"] == found["order_shortfall"] == 0
    assert found["newton_steps"] == len(solution.steps)
    assert found["state_solves"] == solution.work.state_solves
    assert found["operator_products"] == solution.work.operator_products
    assert found["accuracy"] == 1e-9
    assert 1e-9 <= found["distance"] < 1e-6
    assert all(value >= 0 for value in found.values())  # lower is better, and no negative figure
    assert all(getattr(type(rod), f"track_{name}").unit == unit for name, (unit, _) in FIGURES.items())


def test_figures_are_computed_once_a_run_and_repeat(folder, monkeypatch):
    classes = made(folder)
    directory = classes["HotRodFigures"]().setup_cache()
    calls = []
    solve = figures.solve
    monkeypatch.setattr(figures, "solve", lambda *a, **k: calls.append(1) or solve(*a, **k))
    first = figures_of(classes["HotRodFigures"](), directory, 20)
    assert calls == [1]
    assert (
        figures_of(classes["HotRodFigures"](), directory, 20) == first
    )  # another process would read the same
    assert calls == [1]
    another = classes["HotRodFigures"]()
    assert figures_of(another, another.setup_cache(), 20) == first
    assert calls == [1, 1]


def test_an_unsolved_case_is_a_figure_and_the_others_fail(folder):
    parabola = made(folder, parameters={"parabola": {"shift": [-1.0, 1.0]}})["ParabolaFigures"]()
    directory = parabola.setup_cache()
    assert parabola.track_unsolved(directory, 1.0) == 1
    with pytest.raises(CaseFailedError, match="residual  accuracy"):  # with the history
        parabola.track_newton_steps(directory, 1.0)
    assert parabola.track_unsolved(directory, -1.0) == 0
    assert parabola.track_newton_steps(directory, -1.0) > 1


def test_an_exception_belongs_to_its_case(folder):
    parabola = made(folder, parameters={"parabola": {"shift": [-1.0, 0.0]}})["ParabolaFigures"]()
    directory = parabola.setup_cache()
    for _ in range(2):
        with pytest.raises(CaseFailedError, match="no zero shift, please"):
            parabola.track_unsolved(directory, 0.0)
    assert parabola.track_unsolved(directory, -1.0) == 0


def test_a_file_that_cannot_be_loaded_fails_alone(folder):
    classes = made(folder)
    broken = classes["Broken"]()
    assert broken.params == []
    with pytest.raises(ssn.ProblemFileError, match="no_such_package"):
        broken.setup()
    tracked = classes["BrokenFigures"]()
    with pytest.raises(CaseFailedError, match="no_such_package"):
        tracked.track_unsolved(tracked.setup_cache())
    assert classes["HotRod"]().params


def test_a_reference_out_of_time_is_no_figure(folder):
    rod = made(folder, budget=1e-9, agreement_tolerance=1e-12)["HotRodFigures"]()
    directory = rod.setup_cache()
    with pytest.raises(CaseFailedError, match="the distance would not repeat"):
        rod.track_distance(directory, 20)
    assert rod.track_disagreement(directory, 20) == 1
    assert rod.track_newton_steps(directory, 20) > 0


@pytest.mark.parametrize(
    ("verdict", "order", "shortfall"),
    [("exact", None, 0.0), ("superlinear", 1.254, 0.75), ("superlinear", 2.3, 0.0), ("linear", 1.0, 1.0),
     ("none", None, 2.0), ("undecided", 1.9, 2.0)],
)  # fmt: skip
def test_order_shortfall(folder, monkeypatch, verdict, order, shortfall):
    speed = ssn.evidence.RateVerdict(verdict, order, (), None, 0.0, "")
    monkeypatch.setattr(figures, "rate", lambda *_, **__: speed)
    rod = made(folder)["HotRodFigures"]()
    assert rod.track_order_shortfall(rod.setup_cache(), 20) == shortfall


def test_what_was_killed_is_not_tried_again(tmp_path):
    with pytest.raises(KeyboardInterrupt):
        remembered(tmp_path, "case", lambda: (_ for _ in ()).throw(KeyboardInterrupt))
    with pytest.raises(CaseFailedError, match="killed"):
        remembered(tmp_path, "case", lambda: 1)
    assert remembered(tmp_path, "other", lambda: {"a": [1.5]}) == {"a": [1.5]}
    assert remembered(tmp_path, "other", lambda: None) == {"a": [1.5]}
    assert all(json.loads(path.read_text()) for path in tmp_path.glob("*.json"))


def test_names_and_values_without_effect_are_refused(folder):
    for options, complaint in (
        ({"parameters": {"hot_rot": {"alpha": [1]}}}, "no problem 'hot_rot'"),
        ({"sizes": {"hot_rot": [1]}}, "no problem 'hot_rot'"),
        ({"parameters": {"hot_rod": {"alpha": []}}}, "list of values"),
        ({"parameters": {"hot_rod": {"n": [10]}}}, "sizes="),
        ({"tolerance": 0.0}, "tolerance"),
        ({"agreement_tolerance": 0.1}, "agreement_tolerance"),
    ):
        with pytest.raises(ssn.InputError, match=complaint):
            made(folder, **options)
    (folder / "hot rod.py").write_text(ROD)
    with pytest.raises(ssn.InputError, match="HotRod"):
        made(folder)
