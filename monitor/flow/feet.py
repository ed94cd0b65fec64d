"""Which feet carry the robot, with what force, and whether one of them has lost its hold."""

from __future__ import annotations

import math
from typing import Any

from monitor.explain import foothold
from monitor.flow.layout import Block
from monitor.kernels import feet
from monitor.kernels.jit import kernel

_NEVER = -1e9  # a log evidence


@kernel
def stand(params: Block, inputs: Block, state: Block, outputs: Block) -> None:
    """Note which feet may carry, and where they meet ground.

    A foot that is planned to stand may; and for a guard time after its planned lift-off: its hold ends some
    milliseconds later or earlier than planned, and the residual lags behind.
    """
    c, x, s = params[0], inputs[0], state[0]
    t_ns = s["at_ns"]
    s["grounded"] = x["grounded"]
    outputs[0]["feet_unknown"] = 1 if x["grounded"] != 0 and s["foot_carries"].shape[0] == 0 else 0
    for f in range(s["foot_carries"].shape[0]):
        s["foot_carries"][f] = 0
        if x["grounded"] == 0:
            s["foot_landed_ns"][f] = t_ns
            continue
        if x["feet"][f] < 0:
            outputs[0]["feet_unknown"] = 1
        if x["feet"][f] == 1:
            s["foot_lifted_ns"][f] = t_ns
        else:
            s["foot_landed_ns"][f] = t_ns
        feet.jacobian(
            c["foot_axis"][f], c["foot_point"][f], c["foot_radius"][f], c["up"], c["parent"], c["dof"],
            s["S"], s["R_W"], s["p_W"], s["foot_J"][f],
        )  # fmt: skip
        if t_ns - s["foot_lifted_ns"][f] <= c["foot_guard_ns"] and s["foot_lifted_ns"][f] != 0:
            s["foot_carries"][f] = 1
    for i in range(s["loaded"].shape[0]):
        s["loaded"][i] = 0
        if x["grounded"] != 0:
            for f in range(s["foot_carries"].shape[0]):
                for k in range(3):
                    if s["foot_J"][f, k, i] != 0.0:
                        s["loaded"][i] = 1


@kernel
def widen(params: Block, state: Block, R: Any) -> None:
    """Add to R (n,n) the forces of all feet of a robot on the ground, planned to stand or not."""
    s = state[0]
    if s["grounded"] != 0:
        for f in range(s["foot_carries"].shape[0]):
            feet.widen(s["foot_J"][f], params[0]["foot_force_sd"], R)


@kernel
def dofs_taken(state: Block) -> int:
    """Return how many feet take three from the degrees of freedom that can be judged."""
    s = state[0]
    return int(s["foot_carries"].shape[0]) if s["grounded"] != 0 else 0


@kernel
def forces(params: Block, state: Block, outputs: Block) -> None:
    """Fill the forces of feet, what they leave over, and how far those stand out that should be none.

    That of a foot which is not planned to stand counts once it has lasted for a while: feet meet ground some
    milliseconds before they are planned to.
    """
    c, s, out = params[0], state[0], outputs[0]
    s["foot_lasts"], s["foot_now"] = 0.0, 0.0
    s["beside"][:] = s["left"]
    for f in range(s["foot_carries"].shape[0]):
        if s["grounded"] == 0:
            out["foot_force"][f] = 0.0
            out["foot_force_sd"][f] = 0.0
            continue
        feet.force(
            s["foot_J"][f], c["foot_force_sd"], s["inverse"], s["pull"], s["foot_white"],
            out["foot_force"][f], s["foot_covariance"],
        )  # fmt: skip
        for k in range(3):
            out["foot_force_sd"][f, k] = math.sqrt(max(s["foot_covariance"][k, k], 0.0))
        ratio = 0.0
        if s["foot_carries"][f] != 0:
            for i in range(s["beside"].shape[0]):
                for k in range(3):
                    s["beside"][i] -= s["foot_J"][f, k, i] * out["foot_force"][f, k]
        else:
            ratio = feet.standing_out(out["foot_force"][f], s["foot_covariance"])
            ratio /= c["foot_limit"]
        s["foot_now"] = max(s["foot_now"], ratio)
        s["foot_lasts"] = max(
            s["foot_lasts"],
            _lasting(ratio, s["at_ns"], c["foot_early_ns"], s["foot_ratio"][f], s["foot_ratio_ns"][f]),
        )


@kernel
def _lasting(ratio: float, t_ns: int, early_ns: int, ratios: Block, since_ns: Block) -> float:
    """Return the least ratio of the last early_ns, or up to half as long again.

    ratios (3), since_ns (3): the least of three spans, half of early_ns each; the last one runs.
    """
    if 2 * (t_ns - since_ns[2]) > early_ns or t_ns < since_ns[2]:
        for k in range(2):
            ratios[k], since_ns[k] = ratios[k + 1], since_ns[k + 1]
        ratios[2], since_ns[2] = ratio, t_ns
    ratios[2] = min(ratios[2], ratio)
    return float(min(ratios[0], ratios[1], ratios[2]))


@kernel
def lost(params: Block, inputs: Block, state: Block, outputs: Block) -> int:
    """Return a foot that has lost its hold, or -1: for a time it was likelier without force than with."""
    c, x, s, out = params[0], inputs[0], state[0], outputs[0]
    t_ns, found = s["at_ns"], -1
    for f in range(s["foot_carries"].shape[0]):
        landed_ns = s["foot_landed_ns"][f] + c["foot_lands_ns"]
        if x["grounded"] == 0 or t_ns <= landed_ns:
            s["foot_felt_ns"][f] = t_ns
        push, variance = 0.0, 0.0
        for k in range(3):
            push += c["up"][k] * out["foot_force"][f, k]
            variance += (c["up"][k] * out["foot_force_sd"][f, k]) ** 2
        log = 0.0
        if t_ns > s["foot_felt_ns"][f]:
            log = foothold.log_evidence(push, math.sqrt(variance), c["foot_force_sd"])
            if log < 0.0:
                s["foot_felt_ns"][f] = t_ns
        if t_ns - s["foot_felt_ns"][f] > c["foot_lost_ns"]:
            found = f
            if log > s["foothold_log"][f]:
                s["foothold_log"][f] = log
                s["foothold_force"][f, 0], s["foothold_force"][f, 1] = push, math.sqrt(variance)
        elif s["event_open"] == 0:
            s["foothold_log"][f] = _NEVER
    return found


@kernel
def widen_at(params: Block, state: Block, entry: int, R: Any) -> None:
    """Add to R (n,n) the forces of the feet that may have carried at an entry of the ring."""
    s = state[0]
    for f in range(s["foot_carries"].shape[0]):
        if s["ring_carries"][entry, f] != 0:
            feet.widen(s["ring_foot_J"][entry, f], params[0]["foot_force_sd"], R)


@kernel
def spare(state: Block, foot: int, entry: int, log: Block, k: int) -> None:
    """Rule out the touchdown (log[k]) of a foot that may carry at an entry of the ring."""
    if state[0]["ring_carries"][entry, foot] != 0:
        log[k] = _NEVER
