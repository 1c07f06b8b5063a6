"""American put: published values, a binomial tree, the time levels one by one, two assets reduced to one."""

from __future__ import annotations

import io

import numpy as np
import pytest
import scipy.sparse as sp
from scipy.stats import norm

import ssn

from .loading import load

put = load("american_put")


def binomial(price, strike, rate, volatility, expiry, steps):
    """J. Cox, S. Ross, M. Rubinstein, J. Financial Econ. 7 (1979) 229-263."""
    up = np.exp(volatility * np.sqrt(expiry / steps))
    grow = np.exp(rate * expiry / steps)
    chance = (grow - 1 / up) / (up - 1 / up)
    power = np.arange(-steps, steps + 1, 2)
    value = np.maximum(strike - price * up**power, 0.0)
    for k in range(steps - 1, -1, -1):
        value = (chance * value[1:] + (1 - chance) * value[:-1]) / grow
        value = np.maximum(value, strike - price * up ** np.arange(-k, k + 1, 2.0))
    return float(value[0])


def european(price, strike, rate, volatility, expiry):
    a = (np.log(price / strike) + (rate + volatility**2 / 2) * expiry) / (volatility * np.sqrt(expiry))
    b = a - volatility * np.sqrt(expiry)
    return strike * np.exp(-rate * expiry) * norm.cdf(-b) - price * norm.cdf(-a)


@pytest.mark.parametrize("n", [32, 64, 128])
@pytest.mark.parametrize("volatility", [0.2, 0.4])
def test_published_values(n, volatility):
    problem = put.build(n, volatility=volatility)
    checks = put.known(problem, ssn.solve(problem).require())
    assert len(checks) == 10
    assert [check for check in checks if not check["holds"]] == []


@pytest.mark.parametrize(("n", "volatility"), [(96, 0.2), (64, 0.4)])
def test_fifty_days_of_exercise(n, volatility):
    """Longstaff and Schwartz (2001), Table 1: their finite differences allow exercise on 50 days a year."""
    problem = put.build(n, volatility=volatility, dates=50)
    solution = ssn.solve(problem).require()
    checks = put.known(problem, solution)
    assert len(checks) == 5
    assert [check for check in checks if not check["holds"]] == []
    assert max(abs(c["computed"] - c["expected"]) for c in checks) < (2e-3 if n == 96 else 6e-3)
    fewer = put.build(n, volatility=volatility, dates=5)
    assert put.price(fewer, ssn.solve(fewer).require(), 38.0) < put.price(problem, solution, 38.0) - 0.01
    used = put.exercised(problem, solution).any(axis=1)
    assert np.flatnonzero(used).tolist() == list(range(3, 200, 4))


def test_values_converge_with_second_order():
    errors = []
    for n in (40, 120):
        problem = put.build(n)
        values = put.TABLE[40.0, 0.06, 0.2, 1.0][0]
        solution = ssn.solve(problem).require()
        errors.append(max(abs(put.price(problem, solution, s) - v) for s, v in values.items()))
    assert errors[1] < errors[0] / 6
    assert errors[1] < 1.2e-3


@pytest.mark.parametrize(("rate", "volatility", "expiry"), [(0.03, 0.3, 0.5), (0.1, 0.2, 2.0)])
def test_values_agree_with_a_binomial_tree(rate, volatility, expiry):
    problem = put.build(128, strike=100.0, rate=rate, volatility=volatility, expiry=expiry)
    solution = ssn.solve(problem).require()
    for s in (90.0, 100.0, 115.0):
        tree = np.mean([binomial(s, 100.0, rate, volatility, expiry, k) for k in (400, 401)])
        assert put.price(problem, solution, s) == pytest.approx(tree, abs=8e-3)
        assert put.price(problem, solution, s) > european(s, 100.0, rate, volatility, expiry)


def test_without_early_use_the_scheme_gives_the_european_value():
    problem = put.build(128)
    values = sp.linalg.spsolve(sp.csc_array(problem.map.M), -problem.map.q)[-128:]
    found = np.interp(40.0, problem.mesh_data.line, values)
    assert found == pytest.approx(european(40.0, 40.0, 0.06, 0.2, 1.0), abs=2e-3)


def test_all_times_at_once_are_the_time_steps_one_by_one():
    problem = put.build(40)
    n, m = 40, problem.mesh_data.times.size
    x = ssn.solve(problem).require().x.reshape(m, n)
    matrix = sp.csr_array(problem.map.M)
    q, lower = problem.map.q.reshape(m, n), problem.lower.reshape(m, n)
    assert abs(sp.triu(matrix, k=2)).max() == 0  # nothing looks ahead
    before = np.zeros(n)
    for k in range(m):
        rows = slice(k * n, (k + 1) * n)
        right = q[k] + (matrix[rows, (k - 1) * n : k * n] @ before if k else 0.0)
        step = ssn.ComplementarityProblem(ssn.AffineMap(matrix[rows, rows], right), lower[k])
        before = ssn.solve(step).require().x
        np.testing.assert_allclose(x[k], before, atol=1e-8)


def test_the_value_is_never_below_the_payoff():
    problem = put.build(64)
    solution = ssn.solve(problem).require()
    payoff = np.tile(problem.mesh_data.payoff, problem.mesh_data.times.size)
    assert (solution.x >= payoff - 1e-12).all()  # where it is zero, too, without a bound
    assert (solution.multipliers["contact"] >= -1e-12).all()


@pytest.mark.parametrize("n", [32, 64, 128])
def test_exercise_price(n):
    problem = put.build(n, strike=1.0, rate=0.1)
    solution = ssn.solve(problem).require()
    (check,) = put.known(problem, solution)
    assert check["holds"], check
    prices = put.exercise_prices(problem, solution)
    assert prices[0] > 0.95  # near expiry it tends to the strike
    assert (np.diff(prices) <= 1.2 * np.diff(problem.mesh_data.line).min()).all()


@pytest.mark.parametrize("strike", list(put.MINIMUM))
def test_minimum_of_two_assets(strike):
    problem = put.build(48, case="minimum", strike=strike)
    (check,) = put.known(problem, ssn.solve(problem).require())
    assert check["holds"], check


def test_minimum_extrapolates_to_the_printed_value():
    values = []
    for n in (33, 66):  # 17 and 33 points a side
        problem = put.build(n, case="minimum", strike=45.0)
        values.append(put.price(problem, ssn.solve(problem).require(), 40.0, 40.0))
    assert values[1] + (values[1] - values[0]) / 3 == pytest.approx(7.689, abs=0.012)


@pytest.mark.parametrize("n", [24, 48])
def test_geometric_mean_reduces_to_one_asset(n):
    problem = put.build(n, case="geometric")
    (check,) = put.known(problem, ssn.solve(problem).require())
    assert check["holds"], check


def test_known_values_reject_another_solution():
    for options in ({}, {"rate": 0.1}, {"case": "minimum"}, {"case": "geometric"}):
        problem = put.build(32, **options)
        other = ssn.ComplementarityProblem(problem.map, problem.lower + 1.0)
        checks = put.known(problem, ssn.solve(other).require())
        assert checks
        assert [check["what"] for check in checks if check["holds"]] == []


@pytest.mark.parametrize("options", [{}, {"case": "geometric"}])
def test_few_steps_from_mesh_to_mesh(options):
    sizes = (16, 32, 48) if options else (32, 64, 128)
    path = ssn.follow_meshes(put.build, sizes, put.transfer, parameters=options)
    assert path.converged
    assert max(len(point.solution.steps) for point in path.points[1:]) <= 4


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"n": 15}, "n must be a whole number"),
        ({"case": "call"}, "case must be one of"),
        ({"strike": 0.0}, "strike must be positive"),
        ({"volatility": np.inf}, "volatility must be positive"),
        ({"case": "minimum", "rate": 0.1}, "have no effect with case='minimum'"),
        ({"case": "minimum", "dates": 5}, "have no effect with case='minimum'"),
        ({"dates": -1}, "dates must be 0 or"),
    ],
)
def test_unusable_parameters_are_named(arguments, message):
    with pytest.raises(ssn.InputError, match=message):
        put.build(**{"n": 16, **arguments})


@pytest.mark.parametrize("options", [{"case": case} for case in put.CASES] + [{"dates": 10}])
def test_picture_is_drawn(options):
    problem = put.build(16, **options)
    buffer = io.BytesIO()
    put.picture(problem, ssn.solve(problem)).savefig(buffer, format="png", dpi=40)
    assert buffer.getvalue().startswith(b"\x89PNG")
