"""How a wrong variant of a cost is caught: some drawn case fails the named check of the contract."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from hypothesis import Phase, find, settings
from hypothesis import strategies as st
from hypothesis.errors import NoSuchExample

from tests.costs import test_contract as contract

# without shrinking: that there is an example is all that is asked
EXAMPLES = settings(max_examples=400, derandomize=True, deadline=None, database=None, phases=[Phase.generate])


@st.composite
def cases(draw: Any, wrong: type) -> contract.Case:
    """Draw a case of the right cost and make its cost the wrong one."""
    instance, n = draw(contract.INSTANCES[wrong.__base__])
    instance.__class__ = wrong
    v, w = contract.vector(draw, n), contract.vector(draw, n)
    return contract.Case(instance, v, w, draw(contract.STEPS), draw)


def is_caught(wrong: type, check: Callable[[contract.Case], None]) -> bool:
    """Whether some case fails the check, which must be one that the right cost is held to."""
    assert (wrong.__base__, check) in contract.PAIRS

    def failing(case: contract.Case) -> bool:
        try:
            check(case)
        except AssertionError:
            return True
        return False

    try:
        find(cases(wrong), failing, settings=EXAMPLES)
    except NoSuchExample:
        return False
    return True
