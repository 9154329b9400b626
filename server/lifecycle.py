"""The states of a run and the one table of the changes between them."""

from typing import Literal

State = Literal["queued", "running", "cancelled", "failed", "done"]
Action = Literal["start", "interrupt", "cancel", "fail", "finish", "queue"]

STATES: tuple[State, ...] = ("queued", "running", "cancelled", "failed", "done")
ACTIONS: tuple[Action, ...] = ("start", "interrupt", "cancel", "fail", "finish", "queue")

TRANSITIONS: dict[tuple[State, Action], State] = {
    ("queued", "start"): "running",
    ("queued", "interrupt"): "queued",
    ("queued", "cancel"): "cancelled",
    ("queued", "fail"): "failed",
    ("running", "interrupt"): "queued",
    ("running", "cancel"): "cancelled",
    ("running", "fail"): "failed",
    ("running", "finish"): "done",
    ("cancelled", "queue"): "queued",
    ("failed", "queue"): "queued",
}
"""``interrupt`` is what a restart of the server finds; ``queue`` is a person asking again."""

TERMINAL: frozenset[State] = frozenset({"cancelled", "failed", "done"})
"""States that nothing but a person's request leaves."""

_REFUSALS: dict[Action, str] = {
    "cancel": "only a queued or running run can be cancelled",
    "queue": "only a cancelled or failed run can be continued",
}


class IllegalTransition(Exception):
    """The table has no such change of state."""

    def __init__(self, state: State, action: Action) -> None:
        reason = _REFUSALS.get(action, f"it cannot take the step {action!r}")
        super().__init__(f"the run is {state}: {reason}")
        self.state = state
        self.action = action


def after(state: State, action: Action) -> State:
    """The state that follows; raises IllegalTransition."""
    try:
        return TRANSITIONS[state, action]
    except KeyError:
        raise IllegalTransition(state, action) from None
