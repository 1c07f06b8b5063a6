from pathlib import Path

from ssn.problem_file import load_module

MODULE = load_module(Path(__file__).parents[1] / "benchmarks" / "suite" / "strings.py")


def test_benchmarks_run(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    timed, figures = MODULE.StringOverBed(), MODULE.StringOverBedFigures()
    timed.setup(50, 1e3)
    timed.time_solve(50, 1e3)
    directory = figures.setup_cache()
    assert figures.track_unsolved(directory, 50, 1e3) == 0
    assert figures.track_disagreement(directory, 50, 1e3) == 0
    assert 0 < figures.track_newton_steps(directory, 50, 1e3) < 20
