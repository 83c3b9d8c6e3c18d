"""Undo and redo. Oracle: a plain list with an index, which is what a user expects of the two buttons."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape.case.case import Case
from lagscape.case.case_history import CaseHistory
from lagscape.errors import InvalidInputError

CASES = [Case.typical("plain").with_number("delay_s", 1.0 + index) for index in range(12)]


@given(st.lists(st.sampled_from([*range(len(CASES)), "undo", "redo"]), max_size=40), st.integers(1, 5))
def test_history_steps_like_a_list_with_an_index(moves, most_steps):
    history, steps, at = CaseHistory(CASES[0], most_steps=most_steps), [CASES[0]], 0
    for move in moves:
        if move == "undo":
            history, at = history.undo(), max(at - 1, 0)
        elif move == "redo":
            history, at = history.redo(), min(at + 1, len(steps) - 1)
        else:
            history = history.record(CASES[move])
            if CASES[move] != steps[at]:
                steps = [*steps[: at + 1], CASES[move]][-most_steps - 1 :]
                at = len(steps) - 1
        assert history.present == steps[at]
        assert history.can_undo == (at > 0) and history.can_redo == (at < len(steps) - 1)
        assert len(history.past) <= most_steps


def test_a_drag_is_one_step():
    history = CaseHistory(CASES[0]).record(CASES[1]).amend(CASES[2]).amend(CASES[3])
    assert history.present == CASES[3] and history.undo().present == CASES[0]
    assert history.undo().redo().present == CASES[3]


def test_an_amendment_forgets_what_could_be_redone():
    history = CaseHistory(CASES[0]).record(CASES[1]).undo().amend(CASES[2])
    assert not history.can_redo and history.redo() == history


def test_the_same_case_again_is_no_step():
    history = CaseHistory(CASES[0]).record(CASES[1]).undo()
    assert history.record(CASES[0]) is history


def test_a_history_without_room_is_refused():
    with pytest.raises(InvalidInputError, match="most_steps must be at least 1; got 0"):
        CaseHistory(CASES[0], most_steps=0)
