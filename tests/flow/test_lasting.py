"""A torque that varies freely, once it is part of the model: when it is followed, and when it has ceased."""

from __future__ import annotations

from typing import Any

import pytest

from monitor.flow import lasting
from monitor.setup.build import Setup

STEP_S, ROW = 0.004, 1


def ripple(setup: Setup, moves: bool, event_open: bool) -> Any:
    """Return state with a free torque of 5 N m on one row that shows nothing of it now."""
    state = setup.blocks().state
    state["fault_index"][0, 0], state["fault_free"][0, 0] = 8 * ROW + 4, 25.0
    state["var_fast"], state["event_open"] = 0.01, event_open
    state["feature"][0, ROW, 1] = 1.0 if moves else 0.1
    return state


@pytest.mark.parametrize(("moves", "event_open"), [(False, False), (True, True), (False, True)])
def test_what_varies_with_motion_is_neither_forgotten_nor_over_at_rest_or_in_an_event(
    pair_setup: Setup, moves: bool, event_open: bool
) -> None:
    state = ripple(pair_setup, moves, event_open)
    for _ in range(5000):
        acts, excited = lasting._varies(state, 0, STEP_S)
        assert not excited
    assert state["fault_free"][0, 0] == 25.0
    assert not acts


def test_what_varies_no_more_while_its_joint_moves_has_ceased(pair_setup: Setup) -> None:
    state = ripple(pair_setup, True, False)
    assert lasting._varies(state, 0, STEP_S) == (True, True)
    for _ in range(10_000):
        found = lasting._varies(state, 0, STEP_S)
    assert found == (False, True)
