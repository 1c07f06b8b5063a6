"""A nonsmooth solve against linear ones: structured and unstructured meshes, space, time, memory, parameters.

    python benchmarks/scale.py structured      # n = 1024: against one pyamg solve, and the same problem without cost
    python benchmarks/scale.py growth          # seconds from n = 256 to 2048
    python benchmarks/scale.py memory          # peak memory of the solve, bytes a control unknown
    python benchmarks/scale.py unstructured    # perturbed, graded, holed meshes of 65,000 nodes; --large: 1,000,000
    python benchmarks/scale.py space           # 100^3 nodes
    python benchmarks/scale.py time            # 1,000,000 unknowns in space and time
    python benchmarks/scale.py robust          # a grid of alpha, beta, bounds and n, every case from zero
    python benchmarks/scale.py choices         # what linear="auto" takes against every other solver that fits
    python benchmarks/scale.py peers           # interior point, proximal gradient, L-BFGS-B
    python benchmarks/scale.py outside         # a Newton step beside its cycles, in products with the state matrix

The sparse elliptic problem (beta = 1e-3, |u| <= 30), to an accuracy of 1e-9 in the control. Assembly is excluded, but
not the set-up of hierarchies and factors. The yardstick is one plain pyamg solve of K y = f to 1e-9 in the same run:
Ruge-Stueben set-up and conjugate gradients, on unstructured meshes with the strength measure that suits them. Processor
seconds, medians; run it with one BLAS thread (OMP_NUM_THREADS=1). Ends with 1 where a figure misses what is stated
beside it.
"""

from __future__ import annotations

import argparse
import itertools
import resource
import statistics
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pyamg
import scipy.sparse as sp
from cost_of_a_step import Clock
from suite import peers

import ssn
from ssn.linear.coupled import CoupledOperators, CoupledSolver
from ssn.problem_file import load

PROBLEMS = Path(__file__).resolve().parents[1] / "problems"
ALPHAS = (1e-4, 1e-5, 1e-6, 1e-7)
BETA, BOUND = 1e-3, 30.0
# tolerance on the coarser of nested meshes, whose solutions are starts
COARSE = 1e-3

missed: list[str] = []


def check(holds: bool, what: str) -> str:
    """A mark for the table; what does not hold is told at the end."""
    if not holds:
        missed.append(what)
    return " " if holds else "!"


def median_of(run: Callable[[], Any], repeats: int) -> tuple[float, Any]:
    """Median of the processor seconds, and the last result."""
    taken, result = [], None
    for _ in range(repeats):
        began = time.process_time()
        result = run()
        taken.append(time.process_time() - began)
    return statistics.median(taken), result


def nested_sizes(n: int) -> list[int]:
    """Mesh sizes from about 32 up to n, each half of the next."""
    sizes = [n]
    while sizes[0] >= 64:
        sizes.insert(0, sizes[0] // 2)
    return sizes


def nested(n: int, alpha: float, beta: float = BETA, bound: float = BOUND) -> Callable[[], ssn.Solution]:
    """A solve on nested meshes, assembled before."""
    file = load(PROBLEMS / "sparse_elliptic.py")

    def fresh() -> dict[int, Any]:
        return {m: file.build(n=m, alpha=alpha, beta=beta, bound=bound) for m in nested_sizes(n)}

    problems = fresh()

    def run() -> ssn.Solution:
        for problem in problems.values():  # nothing is kept from run to run
            problem.state = ssn.SteadyState(problem.state.matrix)
            problem.state.attach(problem.work)
        path = ssn.follow_meshes(
            lambda n: problems[n], nested_sizes(n), file.transfer, coarse_tolerance=COARSE, tolerance=1e-9
        )
        if not path.converged:
            raise SystemExit(f"n = {n}, alpha = {alpha:g}: {path.message}")
        return path.solution

    return run


def plain_solve(matrix: Any, load_vector: Any, *, obtuse: bool = False) -> Callable[[], Any]:
    """The yardstick."""
    csr = sp.csr_matrix(matrix)
    options = {"strength": ("classical", {"theta": 0.25, "norm": "min"}), "CF": ("RS", {"second_pass": True})}

    def run() -> Any:
        hierarchy = pyamg.ruge_stuben_solver(csr, **(options if obtuse else {}))
        return hierarchy.solve(load_vector, tol=1e-9, accel="cg")

    return run


def cycles(solution: ssn.Solution) -> int:
    """Cycles on the coupled system in the Newton steps of the finest mesh."""
    return sum(step.inner_iterations for step in solution.steps)


def structured(arguments: argparse.Namespace) -> None:
    """Against the yardstick and against the problem without cost and bounds."""
    n = arguments.n or 1024
    matrix = load(PROBLEMS / "sparse_elliptic.py").build(n=n).state.matrix
    yardstick, _ = median_of(plain_solve(matrix, np.full(n * n, 1.0 / (n + 1) ** 2)), arguments.runs)
    print(f"n = {n}: one pyamg solve {yardstick:.2f} s")
    print("   alpha  seconds  of yardstick  of linear  cycles  steps  accuracy  certificate")
    for alpha in ALPHAS:
        seconds, solution = median_of(nested(n, alpha), arguments.runs)
        linear, _ = median_of(nested(n, alpha, 0.0, np.inf), arguments.runs)
        marks = check(seconds <= 1.2 * yardstick, f"structured {alpha:g}: 1.2 times the yardstick")
        marks += check(seconds <= 2.5 * linear, f"structured {alpha:g}: 2.5 times the linear problem")
        marks += check(
            cycles(solution) <= 14 and len(solution.steps) <= 5, f"structured {alpha:g}: cycles, steps"
        )
        print(
            f"{alpha:8g} {seconds:8.2f} {seconds / yardstick:13.2f} {seconds / linear:10.2f} {cycles(solution):7d} "
            f"{len(solution.steps):6d} {solution.accuracy:9.1e} {solution.certificate.relative:12.1e} {marks}",
            flush=True,
        )


def growth(arguments: argparse.Namespace) -> None:
    """The exponent of the seconds in the unknowns."""
    sizes, alpha = (256, 512, 1024, 2048), 1e-5
    seconds = []
    for n in sizes:
        taken, solution = median_of(nested(n, alpha), 1 if n > 1024 else arguments.runs)
        seconds.append(taken)
        print(
            f"n = {n:5d}: {taken:7.2f} s, {cycles(solution)} cycles, accuracy {solution.accuracy:.1e}",
            flush=True,
        )
    exponent = np.polyfit(np.log([n * n for n in sizes]), np.log(seconds), 1)[0]
    print(f"exponent {exponent:.2f} (1.15) {check(exponent <= 1.15, 'growth: exponent 1.15')}")


def memory(arguments: argparse.Namespace) -> None:
    """Peak resident memory of processes that assemble, and that assemble and solve."""
    n = arguments.n or 1024
    code = (
        "import resource, sys; sys.path.insert(0, {here!r}); import scale; run = scale.nested({n}, 1e-5); {act}"
        "print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024)"
    )
    peaks = []
    for act in ("scale.nested(32, 1e-5)(); ", "run(); "):
        filled = code.format(here=str(Path(__file__).parent), n=n, act=act)
        done = subprocess.run([sys.executable, "-c", filled], capture_output=True, text=True, check=True)
        peaks.append(int(done.stdout))
    each = (peaks[1] - peaks[0]) / (n * n)
    print(f"n = {n}: {each:.0f} bytes a control unknown (400) {check(each <= 400, 'memory: 400 bytes')}")


def mesh_problem(kind: str, n: int, alpha: float) -> ssn.ControlProblem:
    """The sparse elliptic problem with linear elements on a triangular mesh."""
    import skfem
    from skfem.helpers import dot, grad

    line = np.linspace(0.0, 1.0, n + 2)
    mesh = skfem.MeshTri.init_tensor(*((line**3,) * 2 if kind == "graded" else (line,) * 2))
    if kind != "graded":
        points = mesh.p.copy()
        inner = np.ones(points.shape[1], dtype=bool)
        inner[mesh.boundary_nodes()] = False
        points[:, inner] += np.random.default_rng(0).uniform(-0.2, 0.2, (2, inner.sum())) / (n + 1)
        mesh = skfem.MeshTri(points, mesh.t)
    if kind == "holed":
        centres = mesh.p[:, mesh.t].mean(axis=1)
        mesh = mesh.restrict(np.flatnonzero(np.hypot(centres[0] - 0.55, centres[1] - 0.45) > 0.2))
    basis = skfem.Basis(mesh, skfem.ElementTriP1())
    stiffness = skfem.BilinearForm(lambda u, v, w: dot(grad(u), grad(v))).assemble(basis)
    mass = skfem.BilinearForm(lambda u, v, w: u * v).assemble(basis)
    kept = basis.complement_dofs(basis.get_dofs())
    x, lumped = mesh.p[:, kept], np.asarray(mass.sum(axis=1)).ravel()[kept]
    return ssn.ControlProblem(
        state=ssn.SteadyState(stiffness.tocsr()[kept][:, kept]),
        target=np.sin(2 * np.pi * x[0]) * np.sin(2 * np.pi * x[1]) * np.exp(2 * x[0]) / 6,
        cost=ssn.SparseCost(BETA, -BOUND, BOUND),
        control_weight=alpha,
        state_mass=lumped,
        control_mass=lumped,
    )


def unstructured(arguments: argparse.Namespace) -> None:
    """From zero, algebraic multigrid, no tuning."""
    n = 1000 if arguments.large else 255
    print("mesh         nodes   alpha  yardstick  seconds  ratio  steps  most cycles a step  accuracy")
    for kind, alpha in itertools.product(("perturbed", "graded", "holed"), (1e-4, 1e-6)):
        problem = mesh_problem(kind, n, alpha)
        repeats = 1 if arguments.large else arguments.runs
        yardstick, _ = median_of(plain_solve(problem.state.matrix, problem.weights, obtuse=True), repeats)
        seconds, solution = median_of(lambda problem=problem: ssn.solve(problem).require(), repeats)
        most = max(step.inner_iterations for step in solution.steps)
        marks = check(
            most <= (14 if kind == "graded" else 10), f"unstructured {kind} {alpha:g}: cycles a step"
        )
        marks += check(seconds <= 10 * yardstick, f"unstructured {kind} {alpha:g}: 10 times the yardstick")
        print(
            f"{kind:10s} {problem.unknowns:8d} {alpha:7g} {yardstick:10.2f} {seconds:8.2f} {seconds / yardstick:6.1f} "
            f"{len(solution.steps):6d} {most:19d} {solution.accuracy:9.1e} {marks}",
            flush=True,
        )


def space(arguments: argparse.Namespace) -> None:
    """The same problem in the unit cube, seven-point matrix, from zero."""
    n = arguments.n or 100
    h = 1.0 / (n + 1)
    line = sp.diags_array([-np.ones(n - 1), 2.0 * np.ones(n), -np.ones(n - 1)], offsets=[-1, 0, 1])
    one = sp.eye_array(n)
    matrix = (
        sp.kron(sp.kron(line, one), one) + sp.kron(sp.kron(one, line), one) + sp.kron(sp.kron(one, one), line)
    )
    matrix = sp.csr_array(h * matrix)
    x = [part.ravel() for part in np.meshgrid(*(np.arange(1, n + 1) * h,) * 3, indexing="ij")]
    mass = np.full(n**3, h**3)
    yardstick, _ = median_of(plain_solve(matrix, mass), 1)
    print(f"{n}^3 = {n**3} nodes: one pyamg solve {yardstick:.2f} s")
    for alpha in (1e-4, 1e-6):
        problem = ssn.ControlProblem(
            state=ssn.SteadyState(matrix),
            target=np.sin(2 * np.pi * x[0])
            * np.sin(2 * np.pi * x[1])
            * np.sin(np.pi * x[2])
            * np.exp(2 * x[0])
            / 6,
            cost=ssn.SparseCost(BETA / 3, -BOUND, BOUND),
            control_weight=alpha,
            state_mass=mass,
            control_mass=mass,
        )
        seconds, solution = median_of(lambda problem=problem: ssn.solve(problem), 1)
        marks = check(solution.converged, f"space {alpha:g}: convergence")
        print(
            f"alpha {alpha:g}: {seconds:.2f} s = {seconds / yardstick:.2f} of it, {len(solution.steps)} steps, "
            f"{cycles(solution)} cycles, accuracy {solution.accuracy:.1e} {marks}",
            flush=True,
        )


def in_time(arguments: argparse.Namespace) -> None:
    """Sparse control of the heat equation: sparse in space, in time and in both."""
    file = load(PROBLEMS / "sparse_parabolic.py")
    n = arguments.n or 100
    print(f"{n * n} nodes, {n} time steps")
    for pattern in ("both", "space", "time"):
        problem = file.build(n=n, steps=n, sparsity=pattern)
        forward, _ = median_of(lambda problem=problem: problem.forward(np.ones(problem.unknowns)), 1)
        seconds, solution = median_of(lambda problem=problem: ssn.solve(problem), 1)
        marks = check(solution.converged, f"time {pattern}: convergence")
        print(
            f"{pattern:6s} {problem.unknowns} unknowns: {seconds:.1f} s, one forward sweep {forward:.2f} s with its "
            f"factorisation, {len(solution.steps)} steps, {solution.work.state_solves} sweeps, accuracy "
            f"{solution.accuracy:.1e}, peak {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6:.1f} GB {marks}",
            flush=True,
        )


def robust(arguments: argparse.Namespace) -> None:
    """Every case from zero with the coupled multigrid and, up to n = 64, with the dual equation."""
    file = load(PROBLEMS / "sparse_elliptic.py")
    sizes = (31, 64, 101, 257) if not arguments.large else (31, 32, 50, 64, 101, 127, 128, 200, 257)
    cases = list(
        itertools.product((1e-3, 1e-4, 1e-5, 1e-6, 1e-7, 1e-8), (0.0, 1e-3, 9e-3), (5.0, 30.0, 1000.0), sizes)
    )
    most, worst, bad = 0, 0.0, 0
    for k, (alpha, beta, bound, n) in enumerate(cases):
        for linear in ("coupled", "subspace") if n <= 64 else ("coupled",):
            problem = file.build(n=n, alpha=alpha, beta=beta, bound=bound)
            solution = ssn.solve(problem, linear=linear)
            most, worst = max(most, len(solution.steps)), max(worst, solution.accuracy)
            if not solution.converged or len(solution.steps) > 32:
                bad += 1
                print(
                    f"{linear}: alpha {alpha:g}, beta {beta:g}, bound {bound:g}, n {n}: {solution.outcome.value}, "
                    f"{len(solution.steps)} steps, accuracy {solution.accuracy:.1e}, {solution.message}"
                )
        print(f"\r{k + 1}/{len(cases)}", end="", file=sys.stderr, flush=True)
    print(file=sys.stderr)
    marks = check(bad == 0, f"robust: {bad} cases")
    print(f"{len(cases)} cases: at most {most} steps (32), accuracy at most {worst:.1e} {marks}")


def choices(arguments: argparse.Namespace) -> None:
    """Seconds of every linear solver that fits, on the control problems of the zoo at their sizes."""
    print("problem                 n  unknowns  auto takes     seconds, others")
    for path in sorted(PROBLEMS.glob("*.py")):
        file = load(path)
        sizes = file.sizes or (None,)
        extra = (256,) if path.stem == "sparse_elliptic" else ()
        for n in (*sizes, *extra):
            problem = file.build() if n is None else file.build(n=n)
            if not isinstance(problem, ssn.ControlProblem):
                break
            took: dict[str, float] = {}
            for linear in ("auto", "subspace", "coupled", "full space", "schur"):
                try:
                    fresh = file.build() if n is None else file.build(n=n)
                    took[linear], solution = median_of(lambda p=fresh, w=linear: ssn.solve(p, linear=w), 1)
                except ssn.InputError:
                    continue
                if linear == "auto":
                    chosen = solution.choices["linear"].split(":")[0]
                elif not solution.converged:
                    took[linear] = float("inf")
            best = min(took.values())
            # a millisecond is noise
            marks = check(took["auto"] <= 1.5 * best + 0.02, f"choices {path.stem} {n}")
            others = ", ".join(f"{k} {v:.2f}" for k, v in took.items() if k != "auto")
            print(
                f"{path.stem:20s} {n!s:>5s} {problem.unknowns:9d}  {chosen:12s} {took['auto']:8.2f}, {others} {marks}",
                flush=True,
            )


def outside(arguments: argparse.Namespace) -> None:
    """What is neither a cycle nor a Galerkin product, a Newton step, in products with the state matrix."""
    n = arguments.n or 1024
    clock = Clock()
    for name in ("__init__", "activate", "correct", "errors"):
        clock.watch(CoupledOperators, name)
    clock.watch(CoupledSolver, "solve")
    file = load(PROBLEMS / "sparse_elliptic.py")
    problem = file.build(n=n, alpha=1e-5)
    x = np.ones(problem.unknowns)
    one, _ = median_of(lambda: problem.state.matrix @ x, 20)
    figures = []
    for _ in range(arguments.runs):
        clock.seconds = 0.0
        seconds, solution = median_of(lambda: ssn.solve(problem, linear="coupled"), 1)
        figures.append((seconds - clock.seconds) / len(solution.steps) / one)
    each = statistics.median(figures)
    most = 30 if n >= 1024 else 60
    print(
        f"n = {n}: {each:.0f} products a Newton step outside linear solves ({most}) {check(each <= most, 'outside')}"
    )


def against_peers(arguments: argparse.Namespace) -> None:
    """Other methods on the same problem, alpha = 1e-5, wall seconds."""
    file = load(PROBLEMS / "sparse_elliptic.py")

    def ours(n: int) -> tuple[float, float, Any]:
        """Seconds from zero and on nested meshes, and the solution."""
        run = nested(n, peers.ALPHA)
        run()
        together = [_wall(run)[0] for _ in range(arguments.runs)]
        alone = [
            _wall(lambda: ssn.solve(file.build(n=n, alpha=peers.ALPHA)))[0] for _ in range(arguments.runs)
        ]
        return statistics.median(alone), statistics.median(together), run()

    for n, name, method, least in (
        (256, "interior point", peers.interior_point, 100),
        (256, "proximal gradient", peers.proximal_gradient, 40),
        (1024, "L-BFGS-B", None, 20),
    ):
        alone, together, solution = ours(n)
        problem = file.build(n=n, alpha=peers.ALPHA)
        minimum = file.build(n=n, alpha=peers.ALPHA).objective(solution.x)
        run = method if method is not None else lambda p, least=minimum: peers.lbfgsb(p, least)
        taken, (point, _) = _wall(lambda p=problem, r=run: r(p))
        distance = problem.controls.norm(point - solution.x) / problem.controls.norm(solution.x)
        marks = check(taken / together >= least, f"peers: {name} {least}")
        print(
            f"n = {n}: {name} {taken:.2f} s, ours {together:.2f} s on nested meshes ({taken / together:.0f} times, "
            f"{least} asked), {alone:.2f} s from zero ({taken / alone:.0f} times); distance {distance:.1e} {marks}",
            flush=True,
        )


def _wall(run: Callable[[], Any]) -> tuple[float, Any]:
    began = time.perf_counter()
    result = run()
    return time.perf_counter() - began, result


SECTIONS = {
    "structured": structured, "growth": growth, "memory": memory, "unstructured": unstructured, "space": space,
    "time": in_time, "robust": robust, "choices": choices, "outside": outside, "peers": against_peers,
}  # fmt: skip


def main() -> int:
    """Run one section."""
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument("section", choices=SECTIONS)
    parser.add_argument("--n", type=int, help="nodes a side, where a section has one size")
    parser.add_argument("--runs", type=int, default=5)
    parser.add_argument("--large", action="store_true", help="the larger meshes")
    arguments = parser.parse_args()
    SECTIONS[arguments.section](arguments)
    for what in missed:
        print(f"missed: {what}")
    return 1 if missed else 0


if __name__ == "__main__":
    sys.exit(main())
