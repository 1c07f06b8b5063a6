"""Pieces: their names tell where they come from, their labels are those of the arguments."""

import numpy as np

import ssn
from ssn.traced import TracedEquation

X = np.array([-1.0, 0.0, 0.5, 2.0])


def line(function, offset=0):
    return f"test_pieces.py:{function.__code__.co_firstlineno + offset}"


def contact(u):
    a = np.maximum(0.0, u)
    b = np.minimum(u, 1.0) + np.minimum(2.0 * u, u)
    c = abs(u) + np.clip(u, 0.0, 1.0)
    d = np.linalg.norm(u) + np.max(u) + np.hypot(u, 0.0)
    return a + b + c + d + np.interp(u, [0.0, 1.0], [0.0, 1.0])


def test_names_labels_and_legends():
    pieces = TracedEquation(contact, X).linearize(X).pieces
    at = [line(contact, k) for k in range(6)]
    assert pieces.sizes() == {
        f"maximum at {at[1]}": {"first": 2, "second": 2},
        f"minimum at {at[2]}": {"first": 3, "second": 1},
        f"minimum at {at[2]} (2)": {"first": 2, "second": 2},
        f"abs at {at[3]}": {"negative": 1, "positive": 3},
        f"clip at {at[3]}": {"lower": 2, "free": 1, "upper": 1},
        f"norm at {at[4]}": {"zero": 0, "positive": 1},
        f"largest at {at[4]}": {"3": 1},
        f"hypot at {at[4]}": {"zero": 1, "positive": 3},
        f"interp at {at[5]}": {"0": 2, "1": 1, "2": 1},
    }
    assert pieces[f"maximum at {at[1]}"].tolist() == [0, 0, 1, 1]
    assert list(pieces) == list(TracedEquation(contact, X).residual_and_pieces(X)[1])


def helper(v):
    return np.maximum(v, 0.0)


def test_occurrences_are_counted_through_helpers_and_loops():
    def function(u):
        for _ in range(2):
            u = helper(u) - 0.25
        return u

    names = list(TracedEquation(function, X).linearize(X).pieces)
    assert names == [f"maximum at {line(helper, 1)}", f"maximum at {line(helper, 1)} (2)"]


def test_constants_have_no_pieces():
    def function(u):
        return u + np.maximum(0.0, X) + np.abs(np.zeros_like(u)) + np.clip(np.ones_like(u), 0, 1)

    assert len(TracedEquation(function, X).linearize(X).pieces) == 0


def test_smoothed_equations_keep_their_pieces():
    equation = TracedEquation(contact, X)
    assert equation.smoothed(0.1).linearize(X).pieces.digest() == equation.linearize(X).pieces.digest()


def test_the_loop_sees_them():
    solution = ssn.solve(TracedEquation(lambda u: u + np.maximum(0.0, u - 1.0) - X, X)).require()
    (labels,) = solution.pieces.values()
    assert labels.tolist() == [0, 0, 0, 1]
