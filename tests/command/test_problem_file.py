from __future__ import annotations

import sys
from pathlib import Path

import pytest

import ssn
from ssn.problem_file import discover, load
from tests.command.helpers import DRIFT, HEAD, LEAST_SQUARES, build_with, write


def test_a_problem_file_is_loaded_whole(tmp_path):
    file = load(write(tmp_path, "drift.py", DRIFT))
    assert (file.name, file.sizes, file.has_mesh) == ("drift", (20, 40), True)
    assert file.title == "Sources along a channel with a current: few of them, and none too strong."
    assert file.transfer is None and file.known is None and file.picture is None and file.summary is not None
    assert file.build(n=10).unknowns == 8
    assert file.build(n="10", patches="4").unknowns == 4
    assert list(file.arguments(n="12").items())[:2] == [("n", 12), ("alpha", 1e-4)]
    assert not list(tmp_path.glob("__pycache__"))


def test_two_files_of_one_name_do_not_meet(tmp_path):
    sized = "return ssn.ComplementarityProblem(ssn.AffineMap(np.eye({0}), np.ones({0})))"
    first = load(write(tmp_path, "one/case.py", build_with(sized.format(1))))
    second = load(write(tmp_path, "two/case.py", build_with(sized.format(2))))
    assert (first.build().unknowns, second.build().unknowns) == (1, 2)
    assert "case" not in sys.modules


def test_a_file_may_define_dataclasses(tmp_path):
    text = "from __future__ import annotations\nfrom dataclasses import dataclass\n" + HEAD
    text += "@dataclass\nclass Data:\n    n: int = 3\n\ndef build():\n    return ssn.CompositeProblem("
    text += "smooth=ssn.Quadratic(np.eye(Data().n), np.ones(3)), cost=ssn.SparseCost(0.1))\n"
    assert load(write(tmp_path, "data.py", text)).build().unknowns == 3


@pytest.mark.parametrize(
    ("name", "text", "value"),
    [
        ("rows", "7", 7), ("rows", "1e1", 10), ("price", "1e-3", 1e-3), ("price", "2", 2.0), ("label", "7", "7"),
        ("scale", "none", None), ("scale", "2", 2.0), ("exact", "yes", True), ("exact", "0", False),
    ],
)  # fmt: skip
def test_text_becomes_what_the_parameter_wants(tmp_path, name, text, value):
    file = load(write(tmp_path, "squares.py", LEAST_SQUARES))
    found = file.arguments(**{name: text})[name]
    assert found == value and type(found) is type(value)


@pytest.mark.parametrize(
    ("parameters", "complaint"),
    [
        ({"row": "7"}, "build has no parameter 'row'; it takes: rows, price, label, scale, exact"),
        ({"rows": "7.5"}, "parameter rows='7.5' does not fit: expected a whole number"),
        ({"price": "cheap"}, "parameter price='cheap' does not fit: expected a number"),
        ({"exact": "perhaps"}, "parameter exact='perhaps' does not fit: expected true or false"),
    ],
)
def test_unusable_parameters_are_named(tmp_path, parameters, complaint):
    file = load(write(tmp_path, "squares.py", LEAST_SQUARES))
    with pytest.raises(ssn.ProblemFileError, match=r"squares\.py: ") as caught:
        file.build(**parameters)
    assert complaint in str(caught.value)


LOADING = [
    ("syntax", "x = (1,\ndef build():\n    pass\n", ":1: syntax error: "),
    ("no_build", "x = 1\n", ": has no function build"),
    ("build_no_function", "build = 3\n", ": build must be a function, got int"),
    ("known_no_function", "known = 3\n" + LEAST_SQUARES, ": known must be a function, got int"),
    ("sizes", "SIZES = (32, 'a')\n" + LEAST_SQUARES, ": SIZES must be a tuple of positive whole numbers, got (32"),
    ("sizes_number", "SIZES = 32\n" + LEAST_SQUARES, ": SIZES must be a tuple of positive whole numbers, got 32"),
    ("at_import", "import math\n\nx = math.sqrt(-1)\n", ":3: ValueError in import: "),
    ("exits", "import sys\nsys.exit(3)\n", ":2: the file ends the program in import: sys.exit(3)"),
    ("module", "import no_such_module_anywhere\n", ":1: No module named 'no_such_module_anywhere'"),
]  # fmt: skip


@pytest.mark.parametrize(("name", "text", "complaint"), LOADING, ids=[case[0] for case in LOADING])
def test_a_file_that_cannot_be_loaded_says_why_and_where(tmp_path, name, text, complaint):
    before = set(sys.modules)
    with pytest.raises(ssn.ProblemFileError) as caught:
        load(write(tmp_path, f"{name}.py", text))
    assert f"{name}.py{complaint}" in str(caught.value)
    left = {module for module in set(sys.modules) - before if module.startswith("_ssn_file_")}
    assert len(left) <= 1 and (not left or "must be" in complaint or "no function" in complaint)


BUILDING = [
    ("none", build_with("pass"), ": build returned None; it must return the problem"),
    ("array", build_with("return np.ones(n)"), ": build returned a ndarray; it must return a ControlProblem"),
    ("class", build_with("return ssn.ControlProblem"), ": build returned a class, not an object"),
    ("raises", build_with("x = {}", "return x['price']"), ":7: KeyError in build: 'price'"),
    ("input", build_with("return ssn.Bounds(3.0, 1.0)"), ":6: lower 3.0 > upper 1.0: no value lies between"),
    (
        "no_default",
        HEAD + "def build(n):\n    return n\n",
        ": build needs a value for n, which has no default",
    ),
    (
        "extra",
        build_with("raise ModuleNotFoundError('No module', name='skfem')"),
        "pip install 'ssn[problems]'",
    ),
]


@pytest.mark.parametrize(("name", "text", "complaint"), BUILDING, ids=[case[0] for case in BUILDING])
def test_a_build_that_fails_says_why_and_where(tmp_path, name, text, complaint):
    with pytest.raises(ssn.ProblemFileError) as caught:
        load(write(tmp_path, f"{name}.py", text)).build()
    assert complaint in str(caught.value) and f"{name}.py" in str(caught.value)


def test_no_such_file():
    with pytest.raises(ssn.ProblemFileError, match=r"nowhere\.py: no such file"):
        load("nowhere.py")


def test_any_object_with_the_members_of_an_equation_is_a_problem(tmp_path):
    members = (
        "    def residual(self, x):\n        return x\n    def linearize(self, x):\n        return None\n"
    )
    text = HEAD + "class Root:\n" + members + "\n\ndef build():\n    return Root()\n"
    assert hasattr(load(write(tmp_path, "equation.py", text)).build(), "residual")


def test_discover(tmp_path):
    for name in ("b.py", "a.py", "_helper.py", "notes.txt", "deeper/c.py"):
        write(tmp_path, name, "")
    a, b = tmp_path / "a.py", tmp_path / "b.py"
    assert discover(tmp_path) == [a, b]
    assert discover([b, tmp_path]) == [b, a]
    assert discover([Path("missing.py")]) == [Path("missing.py")]
    (tmp_path / "empty").mkdir()
    with pytest.raises(ssn.ProblemFileError, match="no problem files in this folder"):
        discover(tmp_path / "empty")


def test_arguments_of_an_open_ended_build(tmp_path):
    text = HEAD + "def build(n=2, **more):\n    return more\n"
    assert load(write(tmp_path, "open.py", text)).arguments(beta="0.5") == {"n": 2, "beta": 0.5}
