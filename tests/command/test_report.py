from __future__ import annotations

import enum
import json
import re

import numpy as np
import pytest

from ssn.evidence import assess
from ssn.problem_file import load
from ssn.report import Entry, as_text, caution, comparison_document, page
from ssn.report.numbers import objective, seconds, small, whole
from ssn.report.words import assessment_sentences
from ssn.report.writer import plain
from tests.command.helpers import DRIFT, NOT_THE_GRADIENT, ssn_command, write


@pytest.fixture(scope="module")
def good(tmp_path_factory):
    file = load(write(tmp_path_factory.mktemp("good"), "drift.py", DRIFT))
    assessment = assess(file.build(), parameters=file.arguments(), name=file.name)
    return Entry(assessment, file.description)


@pytest.fixture(scope="module")
def bad(tmp_path_factory):
    file = load(write(tmp_path_factory.mktemp("bad"), "wrong.py", NOT_THE_GRADIENT))
    return Entry(assess(file.build(), name=file.name), file.description)


def test_json_is_strict_and_made_of_plain_figures(good):
    class Kind(enum.Enum):
        ONE = "one"

    value = {
        "nan": float("nan"), "inf": np.float64("-inf"), "array": np.array([1.0, np.nan]), "count": np.int64(3),
        "flag": np.bool_(True), "kind": Kind.ONE, 4: (1, None), "text": "x", "object": complex(1, 2),
    }  # fmt: skip
    assert plain(value) == {
        "nan": None, "inf": None, "array": [1.0, None], "count": 3, "flag": True, "kind": "one", "4": [1, None],
        "text": "x", "object": "(1+2j)",
    }  # fmt: skip
    document = comparison_document({"ssn": "0"}, [good.assessment], [("other", "does not load")])
    assert json.loads(as_text(document)) == document
    with pytest.raises(ValueError):
        as_text({"x": float("nan")})


@pytest.mark.parametrize(
    ("written", "expected"),
    [
        (small(1.234e-11), "1.2e-11"), (small(None), "-"), (small(float("nan")), "-"), (small(0.0), "0"),
        (objective(16.843689265427763), "16.8436893"), (seconds(0.014), "0.01"), (seconds(123.4), "123"),
        (whole(None), "-"), (whole(7), "7"),
    ],
)  # fmt: skip
def test_numbers(written, expected):
    assert written == expected


def test_the_verdict_says_how_sure_and_concludes(good, bad):
    told = {s.topic: s for s in assessment_sentences(good.assessment)}
    assert told["Convergence"].text.startswith("Converged in ")
    assert "of the exact discrete solution" in told["Certainty"].text
    assert told["Reference"].text.startswith("Agrees with proximal gradient")
    assert told["Conclusion"].text == "All evidence holds."
    assert {s.status for s in told.values()} == {"holds", "note"}
    sentences = assessment_sentences(bad.assessment)
    assert sentences[-1].status == "fails"
    assert any(s.text.startswith("gradient: ") and s.status == "fails" for s in sentences)


def test_caution_is_found_and_stands_alone():
    assert caution("What.\n\nCaution: mind\nthe gap.\n\nMore.") == "Mind the gap."
    assert caution("What.") == ""


def test_the_page_shows_failures_and_escapes_what_it_is_given(bad):
    bad.summary = [("<b>bold</b>", "a & b")]
    text = page(
        [bad], {"ssn": "0", "threads": {"X": None}}, [("gone", "<i>gone</i> is not there")], command="ssn <x>"
    )
    assert "<b>bold" not in text and "&lt;b&gt;bold&lt;/b&gt;" in text and "<i>gone" not in text
    assert "Evidence does not hold for wrong." in text and "X=unset" in text
    assert not re.search(r"https?:", text)


@pytest.mark.parametrize("width", ["60", "80", "120", "200"])
def test_no_figure_is_cut_in_a_narrow_window(tmp_path, monkeypatch, width):
    monkeypatch.setenv("COLUMNS", width)
    result = ssn_command("compare", write(tmp_path, "drift.py", DRIFT))
    assert "…" not in result.stdout
    assert re.search(r"0\.\d{8,}", result.stdout)
    assert max(map(len, result.stdout.splitlines())) <= int(width)
