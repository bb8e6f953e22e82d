"""Hypothesis over the whole space of specifications, sizes and data."""

from __future__ import annotations

import space
from hypothesis import given, settings
from hypothesis import strategies as st

from demilune import SpecError, make_spec
from demilune.spec import known_keys

BATCH = 8


@st.composite
def specifications(draw):
    return space.draw(lambda key, values: draw(st.sampled_from(list(values))))


@given(st.lists(specifications(), min_size=BATCH, max_size=BATCH))
def test_every_specification_is_verified(batch):
    """200 kernels in the normal profile, 2,000 in the long one, 8 compiled together."""
    assert space.verify_all(batch) == []


@settings(max_examples=BATCH * settings().max_examples)
@given(specifications(), st.data())
def test_a_change_of_one_value_is_accepted_or_refused_with_a_reason(values, data):
    """Nothing in between: no other error, and what is refused names a key."""
    known = known_keys(values["operation"], values["layout"])
    key = data.draw(st.sampled_from(sorted(known)))
    one = known[key]
    options = [*one.words, *((True, False) if one.flag else ()), *((0.5, 3) if one.number else ())]
    options += [data.draw(st.integers(-3, 40))] if one.whole else []
    options += ["shared"] if one.text else []
    options += one.numbers
    changed = {**values, key: data.draw(st.sampled_from(options))}
    problems = []
    try:
        spec = make_spec("changed", **changed)
    except SpecError as error:
        problems = list(error.problems)
    assert all(problem.key and len(problem.message) > 10 for problem in problems)
    # "native" stands for what this machine has.
    assert problems or changed[key] == "native" or spec.values[key] == changed[key]
