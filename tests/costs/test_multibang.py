"""MultiBangCost: the staircase and its regularised form as published, and the envelope as a convex hull."""

import numpy as np
import pytest
from scipy.spatial import ConvexHull

import ssn

SETTINGS = np.array([-1.0, 0.0, 0.5, 2.0])


def test_staircase_jumps_half_way():
    """Jumps at (u_i + u_{i+1})/2 for the envelope of u^2/2 (Clason, Tameling, Wirth, SICON 56, 2018, from memory)."""
    cost = ssn.MultiBangCost(SETTINGS, 1.0)
    np.testing.assert_allclose(cost.jumps, [-0.5, 0.25, 1.25])
    y = np.array([-9.0, -0.51, -0.49, 0.2, 0.3, 1.2, 1.3, 9.0])
    np.testing.assert_array_equal(cost.staircase(y), [-1, -1, 0, 0, 0.5, 0.5, 2, 2])
    for value, setting in zip(y, cost.staircase(y), strict=True):  # it attains the conjugate
        assert cost.conjugate_value(np.array([value])) == pytest.approx(setting * value - setting**2 / 2)


@pytest.mark.parametrize("gamma", [1.0, 0.1, 1e-3])
def test_regularised_staircase(gamma):
    """Slope 1/gamma between jump_i + gamma u_i and jump_i + gamma u_{i+1}, flat between (same source)."""
    cost = ssn.MultiBangCost(SETTINGS, 1.0)
    for i, jump in enumerate(cost.jumps):
        left, right = jump + gamma * SETTINGS[i], jump + gamma * SETTINGS[i + 1]
        ends = cost.regularised_staircase(np.array([left, right]), gamma)
        np.testing.assert_allclose(ends, SETTINGS[i : i + 2], atol=1e-12)
        inside = cost.regularised_staircase(np.array([left + 0.25 * (right - left)]), gamma)[0]
        assert inside == pytest.approx(SETTINGS[i] + 0.25 * (SETTINGS[i + 1] - SETTINGS[i]), abs=1e-12)
        if i:
            before = cost.jumps[i - 1] + gamma * SETTINGS[i]
            flat = cost.regularised_staircase(np.linspace(before, left, 5), gamma)
            np.testing.assert_allclose(flat, SETTINGS[i], atol=1e-12)


def test_regularised_staircase_tends_to_the_staircase():
    cost = ssn.MultiBangCost(SETTINGS, 2.0)
    y = np.setdiff1d(np.linspace(-5, 5, 201), cost.jumps)
    np.testing.assert_allclose(cost.regularised_staircase(y, 1e-9), cost.staircase(y), atol=1e-12)


def test_value_is_the_convex_envelope():
    """Against the lower hull of the points (u_i, alpha u_i^2/2), and below alpha/2 u^2 nowhere between them."""
    rng = np.random.default_rng(3)
    settings = np.sort(rng.uniform(-2, 3, 6))
    cost = ssn.MultiBangCost(settings[::-1], 0.7)
    points = np.column_stack([settings, 0.35 * settings**2])
    hull = ConvexHull(points)
    lower = [eq for eq in hull.equations if eq[1] < 0]
    u = np.linspace(settings[0], settings[-1], 200)
    envelope = np.max([-(eq[0] * u + eq[2]) / eq[1] for eq in lower], axis=0)
    np.testing.assert_allclose(cost.terms(u), envelope, atol=1e-12)
    np.testing.assert_allclose(cost.terms(settings), points[:, 1], atol=1e-13)
    assert (cost.terms(u) >= 0.35 * u**2 - 1e-12).all()


def test_labels_name_the_settings():
    cost = ssn.MultiBangCost([0.0, 1.0, 2.0], 1.0)
    v = np.array([-1.0, 0.7, 1.5, 3.0, 9.0])
    np.testing.assert_allclose(cost.prox(v, 1.0), [0, 0.2, 1.0, 1.5, 2.0])
    sizes = cost.pieces(v, 1.0).sizes()["control"]
    assert sizes == {
        "setting 1": 1,
        "between 1 and 2": 1,
        "setting 2": 1,
        "between 2 and 3": 1,
        "setting 3": 1,
    }
    assert cost.share_between(cost.prox(v, 1.0)) == pytest.approx(0.4)
    assert cost.share_between(cost.prox(v, 1.0), np.array([1.0, 2, 1, 1, 3])) == pytest.approx(3 / 8)


def test_two_settings_and_no_weight():
    np.testing.assert_array_equal(
        ssn.MultiBangCost([1.0, -1.0], 0.0).prox(np.array([0.3, 4.0]), 1.0), [0.3, 1.0]
    )


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: ssn.MultiBangCost([1.0], 1.0), "at least two, got 1"),
        (lambda: ssn.MultiBangCost([1.0, 0.0, 1.0], 1.0), "1.0 is there twice"),
        (lambda: ssn.MultiBangCost([0.0, 1.0], -1.0), "alpha must not be negative"),
        (lambda: ssn.MultiBangCost([[0.0, 1.0]], 1.0), "settings must have 1 dimension"),
        (
            lambda: ssn.MultiBangCost([0.0, 1.0], 1.0).regularised_staircase(np.zeros(1), 0.0),
            "gamma must be positive",
        ),
    ],
)
def test_unusable_parameters_are_named(make, message):
    with pytest.raises(ssn.InputError, match=message):
        make()
