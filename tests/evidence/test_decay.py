import numpy as np
import pytest

from ssn.evidence.decay import decay

SIZES = [10.0**-k for k in range(1, 7)]
ROUNDING = [1e-14 / s for s in SIZES]

CASES = [
    ("a power law", [s**0.5 for s in SIZES], ROUNDING, "falls", 0.5),
    ("a slow power law", [0.2 * s**0.25 for s in SIZES], ROUNDING, "falls", 0.25),
    (
        "quadratic, into rounding",
        [1e-4 * s for s in SIZES[:-1]] + [1e-9],
        [1e-11 / s**0.5 for s in SIZES],
        "falls",
        1.0,
    ),
    ("a level after a fall", [0.3 * s + 1e-3 for s in SIZES], ROUNDING, "levels", None),
    ("a level at once", [0.5] * 6, ROUNDING, "levels", None),
    ("a level above one", [7.0, 3.0, 2.0, 1.5, 1.5, 1.5], ROUNDING, "levels", None),
    ("growth", [1e-3, 1e-2, 0.1, 0.2, 0.4, 0.8], ROUNDING, "levels", None),
    ("a drop to rounding", [0.9, 0.4, 0.3] + ROUNDING[3:], ROUNDING, "exact", None),
    ("rounding from the start", ROUNDING, ROUNDING, "exact", None),
    ("a late drop", [0.9, 0.5, 0.3, 0.2, 0.1, 1e-9], ROUNDING, "exact", None),
    ("a slow fall not there yet", [5.0 * s**0.15 for s in SIZES], ROUNDING, "undecided", 0.15),
    ("rounding hides all but two", [0.1, 1e-2] + [1e-3] * 4, [1e-4 / s for s in SIZES], "undecided", None),
    ("rounding hides everything", [0.5] * 6, [1.0] * 6, "undecided", None),
    (
        "cubic, into rounding",
        [max(5.0 * s * s, r) for s, r in zip(SIZES, ROUNDING, strict=True)],
        ROUNDING,
        "falls",
        2.0,
    ),
    ("next to nothing", [3e-7] + [1e-7] * 5, [1e-7] * 6, "exact", None),
    ("nothing to measure", [np.inf] * 6, ROUNDING, "levels", None),
    ("outside the domain at first", [np.inf, np.inf, 1e-3, 1e-4, 1e-5, 1e-6], ROUNDING, "falls", 1.0),
]


@pytest.mark.parametrize(
    ("figures", "rounding", "kind", "slope"), [c[1:] for c in CASES], ids=[c[0] for c in CASES]
)
def test_kinds(figures, rounding, kind, slope):
    judged = decay(SIZES, figures, rounding)
    assert judged.kind == kind, judged
    if slope is not None:
        assert judged.slope == pytest.approx(slope, abs=0.02)


def test_exact_names_the_size():
    assert decay(SIZES, [0.9, 0.4, 0.3, 1e-12, 1e-12, 1e-12], ROUNDING).exact_below == pytest.approx(1e-4)


def test_a_small_quadratic_constant_is_not_exact():
    # the last figures are rounding because the constant is small, not because a piece was found
    figures = [max(1e-5 * s, r) for s, r in zip(SIZES, ROUNDING, strict=True)]
    assert decay(SIZES, figures, ROUNDING).kind == "falls"
