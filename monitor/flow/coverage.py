"""How far the monitor can see: the condition the robot is in, and what may be judged in it.

Every joint is *watching*, *conditional* or *blind*, with the gravest reason. A braked or unpowered joint is
not judged, the others go on. What the robot does not say is never taken for "all well".
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from monitor.errors import WireError
from monitor.flow.layout import Block, Coverage, Facts, Reason
from monitor.flow.wire import Condition, Payload
from monitor.robot.pseudo_inertia import moved, pseudo_inertia

_START = 2
# A change of one of these makes the torque balance start anew.
_BALANCE = ("boot", "mode", "drive", "brake", "stop", "tool", "payload", "payload_known", "support")
_GUIDED = "guided"
# Supports whose forces on the body nobody knows; when carried the legs hang free all the same.
_HELD = ("carried", "docked")
_MODE_REASON = {_GUIDED: Reason.GUIDED, "calibrating": Reason.CALIBRATING}


class Change(NamedTuple):
    """What a message of topic `robot` brought."""

    rebooted: bool
    other_robot: bool  # refused: not the configured serial


class ConditionKeeper:
    """Keeps the robot's condition and writes what follows from it into the blocks.

    Writes `inputs`: brake, drive, judged, E, rebase; `outputs`: coverage and reason, per joint and whole.
    """

    def __init__(self, facts: Facts, params: Block, inputs: Block, state: Block, outputs: Block) -> None:
        self._facts = facts
        self._inputs, self._state, self._outputs = inputs[0], state[0], outputs[0]
        self._bodies = self._inputs["E"].copy()
        self._link_rows = params[0]["link_row"]
        self._condition: Condition | None = None
        self._heard_ns: int | None = None
        self._stale = True
        self._refused = False
        self._since_start = False  # something was there already when the judgement began
        self._feet_unknown = False  # on the ground, and samples do not say which feet stand
        self._settling, self._pending = outputs["settling"].data, state["pending"].data
        self._says_no_feet = outputs["feet_unknown"].data
        self._now = (Coverage.BLIND, Reason.NO_STREAM)
        self._accounted_ns: int | None = None
        self._evaluate()

    @property
    def refused(self) -> bool:
        """Whether the robot on the line is not the one this configuration is for."""
        return self._refused

    @property
    def guided(self) -> bool:
        """Whether a hand guides the robot, so that contacts are to be expected."""
        return self._condition is not None and self._condition.mode == _GUIDED

    def loaded(self, since_start: bool) -> None:
        """Take in whether an event is open that was there when the judgement began."""
        if since_start != self._since_start:
            self._since_start = since_start
            self._evaluate()

    def sensors_changed(self) -> None:
        """Take in which torque sensors at links read now (`state.unsensed`)."""
        self._evaluate()

    def heard(self, condition: Condition, received_ns: int) -> Change:
        """Take a message of topic `robot` in; WireError when its payload cannot be."""
        serial = self._facts.serial
        # A robot that does not say who it is may be ours, until another one was seen.
        unproven = condition.serial is None and not self._refused
        if serial and condition.serial != serial and not unproven:
            self._refused = True
            self._evaluate()
            return Change(rebooted=False, other_robot=True)
        bodies = self._with_payload(condition)
        before = self._condition
        rebooted = before is not None and None not in (before.boot, condition.boot)
        rebooted = rebooted and before is not None and before.boot != condition.boot
        changed = before is None or any(getattr(before, x) != getattr(condition, x) for x in _BALANCE)
        stale, refused = self._stale, self._refused
        self._condition, self._heard_ns, self._stale, self._refused = condition, received_ns, False, False
        if changed or stale or refused:
            self._inputs["E"] = bodies
            self._evaluate()
        if changed or refused:
            self._inputs["rebase"] = _START
        return Change(rebooted=rebooted, other_robot=False)

    def tick(self, tick_ns: int, silent: bool) -> None:
        """Notice a condition that grew stale, and a change of what can be seen as a whole."""
        if not self._stale and self._heard_ns is not None:
            stale = tick_ns - self._heard_ns > self._facts.condition_stale_ns
            if stale:
                self._stale = True
                self._evaluate()
        if self._feet_unknown != bool(self._says_no_feet[0]):
            self._feet_unknown = not self._feet_unknown
            self._evaluate()
        if silent:
            now = (Coverage.BLIND, Reason.NO_STREAM)
        elif (self._settling[0] or self._pending[0]) and self._whole[0] != Coverage.BLIND:
            now = (Coverage.BLIND, Reason.SETTLING)
        else:
            now = self._whole
        if now != self._now:
            self.account(tick_ns)
            self._now = now
            self._show()

    def _show(self) -> None:
        """Write coverage and reason of each joint and of the whole; without samples no joint is seen."""
        out = self._outputs
        out["coverage_whole"], out["reason_whole"] = self._now
        if self._now[1] in (Reason.NO_STREAM, Reason.SETTLING):
            out["coverage"], out["reason"] = self._now
        else:
            out["coverage"], out["reason"] = zip(*self._joints, strict=True)

    def account(self, now_ns: int) -> None:
        """Add the time since the last account to the coverage that lasted until now."""
        self._state["coverage_ns"] = self.accounted(now_ns)
        self._accounted_ns = now_ns

    def accounted(self, now_ns: int) -> NDArray[np.int64]:
        """Return the time [ns] spent until now in each (coverage, reason)."""
        spent: NDArray[np.int64] = self._state["coverage_ns"].copy()
        if self._accounted_ns is not None:
            spent[self._now] += now_ns - self._accounted_ns
        return spent

    def _evaluate(self) -> None:
        """Write what follows from the condition: judged rows, coverage of each joint, the whole."""
        known = self._condition
        m = len(self._facts.joints)
        x = self._inputs
        x["brake"] = 0 if known is None or known.brake is None else known.brake
        x["drive"] = 1 if known is None or known.drive is None else known.drive
        self._joints = [self._joint(i) for i in range(m)]
        judged = np.array([c != Coverage.BLIND for c, _ in self._joints]) & self._may_judge()
        # A row is judged when every joint on the wire that enters it is.
        x["judged"] = 0
        base, motors = len(x["judged"]) - m - len(self._link_rows), len(x["judged"]) - len(self._link_rows)
        x["judged"][base:motors] = np.all(judged | ~self._facts.row_needs, axis=1)
        x["judged"][motors:] = x["judged"][self._link_rows]
        # What else than its planned feet holds a base exerts forces on it that nobody knows.
        support = None if known is None or self._stale else known.support
        x["grounded"] = self._facts.floating and support == "ground"
        x["judged"][:base] = x["grounded"] and self._may_judge()
        x["guided"] = known is not None and known.mode in _MODE_REASON
        self._whole = _whole(self._joints)
        self._show()

    def _may_judge(self) -> bool:
        """Return whether unexplained torque means anything: not calibrating, nor held by unknown forces."""
        known = self._condition
        if self._facts.floating:
            support = None if known is None or self._stale else known.support
            if support not in ("ground", "hoisted", "carried") or (
                support == "ground" and self._feet_unknown
            ):
                return False
        return known is None or known.mode != "calibrating"

    def _joint(self, i: int) -> tuple[Coverage, Reason]:
        """Return coverage of joint i and the gravest reason for it."""
        known = self._condition
        if self._refused:
            return Coverage.BLIND, Reason.REFUSED
        if self._inputs["brake"][i]:
            return Coverage.BLIND, Reason.BRAKED
        if not self._inputs["drive"][i]:
            return Coverage.BLIND, Reason.UNPOWERED
        if known is None or self._stale or None in (known.mode, known.drive, known.brake):
            return Coverage.CONDITIONAL, Reason.CONDITION_UNKNOWN
        if known.mode in _MODE_REASON:
            return Coverage.CONDITIONAL, _MODE_REASON[known.mode]
        if known.mode == "stopped" or known.stop is not None:
            return Coverage.CONDITIONAL, Reason.STOPPED
        if self._facts.floating and known.support is None:
            return Coverage.CONDITIONAL, Reason.CONDITION_UNKNOWN
        if self._facts.floating and known.support in _HELD:
            return Coverage.CONDITIONAL, Reason.HELD
        if self._feet_unknown:
            return Coverage.CONDITIONAL, Reason.FEET_UNKNOWN
        if not known.payload_known or (known.payload is not None and self._facts.tool is None):
            return Coverage.CONDITIONAL, Reason.PAYLOAD_UNKNOWN
        if self._since_start:
            return Coverage.CONDITIONAL, Reason.SINCE_START
        if self._state["unsensed"][i]:
            return Coverage.CONDITIONAL, Reason.LINK_TORQUE_MISSING
        return Coverage.WATCHING, Reason.NONE

    def _with_payload(self, condition: Condition) -> NDArray[np.float64]:
        """Return the bodies' pseudo-inertias with the announced payload at the tool."""
        tool, payload = self._facts.tool, condition.payload
        bodies: NDArray[np.float64] = self._bodies.copy()
        if payload is None or payload.mass == 0.0:
            return bodies
        E = _pseudo_inertia(payload)
        if tool is None:
            return bodies
        bodies[tool.axis] += moved(E, tool.T)
        return bodies

    def snapshot(self) -> dict[str, Any]:
        """Return what is needed to go on elsewhere; plain values."""
        return {
            # msgpack writes named tuples as arrays
            "condition": self._condition and list(self._condition),
            "heard_ns": self._heard_ns,
            "stale": self._stale,
            "refused": self._refused,
            "since_start": self._since_start,
            "feet_unknown": self._feet_unknown,
            "now": list(self._now),
            "accounted_ns": self._accounted_ns,
        }

    def restore(self, saved: dict[str, Any]) -> None:
        """Go on from a snapshot (the blocks are restored by their owner)."""
        self._condition = None
        if saved["condition"] is not None:
            values = [_tuples(value) for value in saved["condition"]]
            condition = Condition(*values)
            self._condition = condition._replace(payload=condition.payload and Payload(*condition.payload))
        self._heard_ns, self._stale = saved["heard_ns"], saved["stale"]
        self._refused, self._since_start = saved["refused"], saved["since_start"]
        self._feet_unknown = saved["feet_unknown"]
        self._now = (Coverage(saved["now"][0]), Reason(saved["now"][1]))
        self._accounted_ns = saved["accounted_ns"]
        rebase = int(self._inputs["rebase"])
        self._evaluate()
        self._inputs["rebase"] = rebase


def _whole(joints: list[tuple[Coverage, Reason]]) -> tuple[Coverage, Reason]:
    """Return the coverage of the robot: blind if all joints are, conditional if any is not watching."""
    gravest = min((reason for _, reason in joints if reason != Reason.NONE), default=Reason.NONE)
    if all(coverage == Coverage.BLIND for coverage, _ in joints):
        return Coverage.BLIND, gravest
    return (Coverage.WATCHING if gravest == Reason.NONE else Coverage.CONDITIONAL), gravest


def _pseudo_inertia(payload: Payload) -> NDArray[np.float64]:
    """Return E (4,4) of a payload in the tool frame; WireError when no body can be like that."""
    J = np.array(payload.inertia)
    E = pseudo_inertia(payload.mass, payload.com, J)
    # A point mass (no inertia announced) lies on the edge of what is possible.
    if np.abs(J - J.T).max() > 1e-9 or np.linalg.eigvalsh(E)[0] < -1e-12 * np.trace(E):
        raise WireError(
            "robot payload",
            f"{payload.mass} kg with I {payload.inertia}",
            "an inertia about its centre of mass that a body can have",
        )
    return E


def _tuples(value: Any) -> Any:
    return tuple(_tuples(part) for part in value) if isinstance(value, list) else value
