"""Every wrong variant is caught by a check that names what is wrong, whether or not the methods still agree."""

import pytest

from ssn.evidence import assess

from .registry import MUTANTS

# what agreement says by itself, and the checks that must fail
CAUGHT: dict[str, tuple[str, set[str]]] = {
    "derivative scaled": ("holds", {"newton derivative", "rate"}),
    "derivative of wrong sign": ("fails", {"newton derivative", "rate", "solved"}),
    "derivative at another point": ("holds", {"newton derivative"}),
    "derivative of the start only": ("holds", {"newton derivative", "rate", "run"}),
    "one entry of the derivative": ("holds", {"newton derivative", "rate"}),
    "map derivative with a lost factor": ("holds", {"map derivative", "newton derivative", "rate"}),
    "Hessian without its second-order term": ("holds", {"hessian", "newton derivative", "rate"}),
    "Hessian not symmetric": ("holds", {"hessian symmetry", "hessian"}),
    "gradient of another function": ("holds", {"gradient"}),
    "one piece with another derivative": ("holds", {"newton derivative", "pieces", "rate"}),
    "one piece mislabelled": ("holds", {"pieces"}),
    "prox of another weight": ("holds", {"proximal map"}),
    "prox of tighter bounds": ("holds", {"proximal map"}),
    "adjoint without mass": ("undecided", {"adjoint", "gradient"}),
    "adjoint solve without transpose": ("undecided", {"adjoint", "adjoint solve", "gradient"}),
    "inexact state solve": ("holds", {"state solve"}),
    "reference that shares the error": ("holds", {"known values"}),
    "certificate too small": ("holds", {"certificate"}),
    "gap too small": ("holds", {"certificate"}),
    "another point returned, by its objective": (
        "fails",
        {"agreement", "residual", "certificate", "objective"},
    ),
    "convexity overstated": ("holds", {"certificate"}),
    "steps always halved": ("holds", {"run"}),
    "unscaled residual": ("holds", {"residual"}),
    "another point returned": ("fails", {"agreement", "residual", "certificate"}),
    "linear solver that returns half": ("holds", {"newton step", "rate"}),
    "linear solver without the coupling": ("holds", {"newton step", "rate"}),
}


@pytest.mark.parametrize("mutant", MUTANTS, ids=lambda mutant: mutant.name)
def test_the_wrong_variant_is_caught(mutant, monkeypatch):
    for target, attribute, replacement in mutant.patches:
        monkeypatch.setattr(target, attribute, replacement)
    assessment = mutant.evidence()
    agreement, expected = CAUGHT[mutant.name]
    failing = {check.name for check in assessment.checks if not check.holds}
    assert expected <= failing, assessment.failures()
    assert assessment.agreement == agreement, assessment.agreement_note
    assert not assessment.holds


@pytest.mark.parametrize("mutant", MUTANTS, ids=lambda mutant: mutant.name)
def test_the_right_twin_is_not(mutant):
    assert assess(mutant.twin(), known=mutant.known).failures() == []


def test_how_many_there_are():
    assert [mutant.name for mutant in MUTANTS] == list(CAUGHT)
    assert len(CAUGHT) >= 12


def test_what_agreement_cannot_see_is_seen_otherwise():
    blind = {name: checks for name, (agreement, checks) in CAUGHT.items() if agreement == "holds"}
    assert len(blind) >= 12
    assert all(checks - {"agreement"} for checks in blind.values())


def test_every_kind_of_check_has_a_mutant():
    kinds = set().union(*(checks for _, checks in CAUGHT.values()))
    assert {
        "solved", "residual", "run", "certificate", "agreement", "rate", "newton derivative", "newton step", "pieces",
        "proximal map", "gradient", "hessian", "hessian symmetry", "map derivative", "state solve", "adjoint solve",
        "adjoint", "known values",
    } <= kinds  # fmt: skip
