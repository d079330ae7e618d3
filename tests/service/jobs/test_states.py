"""Moves of a run: what is drawn is possible, everything else is a defect or a lost race."""

from __future__ import annotations

import itertools

import pytest

from extractor.errors import Defect
from service.jobs import states
from service.parts import Parts
from service.store.contracts import STAGES, STATES
from tests.service.jobs.runs import row_of, steps_of


def test_every_state_and_stage_is_drawn() -> None:
    """The table of moves knows every state and stage, and leads from open to every end."""
    assert set(states.MOVES) == set(STATES) and set(states.NEXT_STAGES) == set(STAGES)
    assert all(state in states.__doc__ for state in STATES) and all(stage in states.__doc__ for stage in STAGES)
    reached, todo = set(), ["open"]
    while todo:
        state = todo.pop()
        if state not in reached:
            reached.add(state)
            todo += states.MOVES[state]
    assert reached == set(STATES)


def test_only_drawn_moves_are_possible(parts: Parts, sealed) -> None:
    """From sealed only working can be reached, and only at its first stage; nothing is changed by a refused move."""
    run = sealed()
    before = row_of(parts, run)
    for state, stage in itertools.product(STATES, (None, *STAGES)):
        if (state, stage) == ("working", "tally"):
            continue
        with pytest.raises(Defect), parts.store.write() as transaction:
            states.move(transaction, before, state, {}, stage=stage)
    assert row_of(parts, run) == before


def test_of_two_moves_one_wins(parts: Parts, sealed) -> None:
    """A move from a state that is no longer there changes nothing and adds no event."""
    run = sealed()
    row = row_of(parts, run)
    with parts.store.write() as transaction:
        assert states.move(transaction, row, "working", {}, stage="tally")
    steps = steps_of(parts, run)
    with parts.store.write() as transaction:
        assert not states.move(transaction, row, "working", {}, stage="tally")
        assert not states.move(transaction, transaction.get_run(run), "failed", {}, holder="somebody else")
    assert steps_of(parts, run) == steps == [("open", None), ("sealed", None), ("working", "tally")]
