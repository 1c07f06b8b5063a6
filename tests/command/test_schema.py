"""What the commands write is what the schema says, and the schema says all of it."""

from __future__ import annotations

import copy
import json

import jsonschema
import pytest

from ssn.report import writer
from ssn.schema import DOCUMENTS, FORMAT, schema
from tests.command.helpers import DRIFT, LEAST_SQUARES, NOT_THE_GRADIENT, ssn_command, write

EQUATION = '''\
"""An equation without objective, certificate or reference."""

import numpy as np

import ssn


class Kinked:
    start = np.full(5, 3.0)

    def residual(self, x):
        return 2 * x + 5 * np.maximum(0, x - 1) - np.arange(5)

    def linearize(self, x):
        return ssn.Linearization(self.residual(x), np.diag(2 + 5.0 * (x > 1)), {"kink": x > 1})


def build():
    return Kinked()
'''


def strict(document):
    """The schema without room for members that it does not describe."""

    def closed(node):
        if isinstance(node, dict):
            node = {key: closed(value) for key, value in node.items()}
            if "properties" in node and "additionalProperties" not in node:
                node["additionalProperties"] = False
        return [closed(item) for item in node] if isinstance(node, list) else node

    whole = schema(document)
    result, more = whole["$defs"]["result"], whole["$defs"]["verification"]
    whole["$defs"]["verification"] = {
        "type": "object",
        "required": result["required"] + more["required"],
        "properties": result["properties"] | more["properties"],
    }
    return closed(whole)


def validate(document, value):
    """Check a document against the schema as published, and against the strict one."""
    for one in (schema(document), strict(document)):
        jsonschema.Draft202012Validator(one).validate(value)


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    place = tmp_path_factory.mktemp("problems")
    for name, text in {"drift": DRIFT, "squares": LEAST_SQUARES, "kinked": EQUATION}.items():
        write(place, f"{name}.py", text)
    return place


@pytest.fixture(scope="module")
def written(folder, tmp_path_factory):
    """Return one document of each kind."""
    place = tmp_path_factory.mktemp("documents")
    target = {name: str(place / f"{name}.json") for name in DOCUMENTS}
    assert ssn_command("compare", str(folder), "--json", target["compare"]).exit_code == 0
    assert ssn_command("verify", str(folder), "--json", target["verify"]).exit_code == 0
    assert ssn_command("solve", str(folder / "drift.py"), "--json", target["solve"]).exit_code == 0
    baseline = ("--baseline", target["baseline"])
    assert ssn_command("gate", str(folder), *baseline, "--update").exit_code == 0
    assert ssn_command("gate", str(folder), *baseline, "--json", target["gate"]).exit_code == 0
    return {name: json.loads((place / f"{name}.json").read_text("utf-8")) for name in DOCUMENTS}


@pytest.mark.parametrize("document", DOCUMENTS)
def test_what_is_written_fits(written, document):
    validate(document, written[document])
    assert written[document]["format"] == FORMAT == writer.FORMAT


def test_figures_that_do_not_exist_are_null(written):
    kinked = next(r for r in written["compare"]["results"] if r["problem"] == "kinked")
    assert kinked["methods"][0]["objective"] is None and kinked["methods"][0]["certificate"] is None
    assert "null" in schema("compare")["description"]


@pytest.mark.parametrize(
    ("name", "text"), [("wrong", NOT_THE_GRADIENT), ("broken", "def build():\n    1 / 0\n")]
)
@pytest.mark.parametrize("command", ["compare", "verify"])
def test_failures_fit_too(tmp_path, command, name, text):
    data = tmp_path / "data.json"
    result = ssn_command(command, write(tmp_path, f"{name}.py", text), "--json", str(data))
    assert result.exit_code in (1, 2)
    validate(command, json.loads(data.read_text("utf-8")))


@pytest.mark.parametrize("document", DOCUMENTS)
def test_the_schema_is_one_and_every_definition_is_in_use(document):
    whole = schema(document)
    jsonschema.Draft202012Validator.check_schema(whole)
    text = json.dumps(whole)
    used = {name for name in whole["$defs"] if f'"#/$defs/{name}"' in text} | set(DOCUMENTS)
    assert used == set(whole["$defs"])


def test_there_is_no_other_document():
    with pytest.raises(ValueError, match="no document 'list'"):
        schema("list")


SPOILT = [
    (("format",), 2), (("environment", "numpy"), None), (("results", 0, "agreement"), "perhaps"),
    (("results", 0, "agreement_tolerance"), 0.1), (("results", 0, "methods"), []), (("results", 0, "unknowns"), 1.5),
    (("results", 0, "rate", "verdict"), "quick"), (("results", 0, "methods", 0, "converged"), 1),
    (("results", 0, "checks", 0, "holds"), "yes"), (("results", 0, "steps", 0, "work", "state_solves"), -1),
]  # fmt: skip


@pytest.mark.parametrize(("path", "value"), SPOILT)
@pytest.mark.parametrize("document", ["compare", "verify"])
def test_what_does_not_fit_is_refused(written, document, path, value):
    spoilt = copy.deepcopy(written[document])
    place = spoilt
    for key in path[:-1]:
        place = place[key]
    place[path[-1]] = value
    with pytest.raises(jsonschema.ValidationError):
        validate(document, spoilt)
    del place[path[-1]]
    with pytest.raises(jsonschema.ValidationError):
        validate(document, spoilt)


def test_a_member_that_the_schema_does_not_describe_is_found(written):
    more = copy.deepcopy(written["verify"])
    more["results"][0]["mesh_study"]["colour"] = "red"
    jsonschema.Draft202012Validator(schema("verify")).validate(more)
    with pytest.raises(jsonschema.ValidationError, match="colour"):
        validate("verify", more)
