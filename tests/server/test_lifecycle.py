"""The table of a run's states."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from server.lifecycle import (
    ACTIONS,
    STATES,
    TERMINAL,
    TRANSITIONS,
    Action,
    IllegalTransition,
    after,
)


@pytest.mark.parametrize(("change", "state"), TRANSITIONS.items())
def test_every_row_of_the_table_is_followed(change: tuple, state: str) -> None:
    assert after(*change) == state


@given(st.sampled_from(STATES), st.sampled_from(ACTIONS))
def test_what_the_table_lacks_is_refused(state: str, action: Action) -> None:
    if (state, action) in TRANSITIONS:
        return
    with pytest.raises(IllegalTransition, match=state):
        after(state, action)


@given(st.lists(st.sampled_from(ACTIONS), max_size=30))
def test_a_done_run_stays_done_and_only_a_request_leaves_an_end(actions: list[Action]) -> None:
    state = "queued"
    for action in actions:
        try:
            following = after(state, action)
        except IllegalTransition:
            continue
        assert state != "done"
        if state in TERMINAL:
            assert (action, following) == ("queue", "queued")
        state = following
