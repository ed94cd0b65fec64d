"""Whether a sample may enter the arithmetic: the checks of kernels/signal.py, gravest first.

A position counts as frozen when it repeats exactly

- while its own velocity says it moves (`still_ns`), or
- with its velocity, which is not zero and is known to be noisy (`same_ns`), or
- with its velocity, while the residual shows that the torque must have moved it one way and the other
  (`pushed_ns`): what holds a joint against the one may be friction or an obstacle, but not against both.

All readings of the robot repeating exactly are an old sample with a new time, if two of them tell that
they should not. But a simulator without noise, a velocity formed from differences of positions and a joint at
rest repeat themselves too: repetition tells only where the reading has shown its noise before, at standstill,
and its value is not zero.
"""

from __future__ import annotations

import math

from monitor.flow.layout import Block, Notice, Signal
from monitor.kernels import signal
from monitor.kernels.jit import kernel

_OK, _CLOCK = int(Signal.OK), int(Signal.CLOCK)
_JUMP, _FROZEN, _CONTRADICTION = int(Signal.JUMP), int(Signal.FROZEN), int(Signal.CONTRADICTION)
_NOISE = int(Signal.NOISE)
_BAD_SAMPLE = int(Notice.BAD_SAMPLE)
# Noise so early in an event, or a fault of a signal that shows so soon, may be all there is to it.
_BEGINS_NS, _SHOWS_NS = 100_000_000, 1_000_000_000
_START = 2  # value of `inputs.rebase` after a start or restart


@kernel
def credible(params: Block, inputs: Block, state: Block, outputs: Block) -> bool:
    """Check the raw numbers; a sample that fails is counted and makes the next good one a re-base."""
    c, x, s, out = params[0], inputs[0], state[0], outputs[0]
    fault, joint = signal.range_fault(
        x["q"], x["qd"], x["tau"], x["tau_cmd"], c["q_min"], c["q_max"], c["qd_max"], c["tau_max"]
    )
    floating = c["gravity_part"].shape[0] > x["q"].shape[0]
    if fault == _OK and floating:
        fault = signal.base_fault(
            x["base_p"], x["base_quat"], x["base_v"], x["base_w"],
            c["base_position_max"], c["base_speed_max"],
        )  # fmt: skip
    if x["rebase"] == _START:
        s["raw_held"] = 0  # nothing to compare with, also where this very sample turns out bad
        s["rough_tau"][:], s["rough_sum"][:], s["rough_count"][:] = 0.0, 0.0, 0
    if fault == _OK:
        dt_ns = x["t_ns"] - s["raw_t_ns"]
        if s["raw_held"] == 0:
            begin_motion(params, inputs, state)
        elif dt_ns <= 0 or abs(dt_ns - (x["seq"] - s["raw_seq"]) * c["period_ns"]) > c["clock_jump_ns"]:
            fault = _CLOCK
            begin_motion(params, inputs, state)
        elif dt_ns > c["gap_ns"]:
            begin_motion(params, inputs, state)
        else:
            fault, joint = motion_fault(params, inputs, state, dt_ns)
            if floating and fault == _OK:
                fault, s["base_still_ns"] = signal.base_motion_fault(
                    x["base_p"], x["base_quat"], x["base_v"], x["base_w"], dt_ns,
                    s["raw_base_p"], s["raw_base_quat"], s["raw_base_v"], s["raw_base_w"],
                    c["base_jump"], c["frozen_velocity"][0], c["frozen_ns"], s["base_still_ns"],
                )  # fmt: skip
        # The next sample is compared with this one even when it is refused: a jump is reported once.
        s["raw_q"][:] = x["q"]
        s["raw_qd"][:] = x["qd"]
        s["raw_tau"][:] = x["tau"]
        s["raw_base_p"][:] = x["base_p"]
        s["raw_base_quat"][:] = x["base_quat"]
        s["raw_base_v"][:] = x["base_v"]
        s["raw_base_w"][:] = x["base_w"]
        s["raw_t_ns"] = x["t_ns"]
        s["raw_seq"] = x["seq"]
        s["raw_held"] = 1
    out["signal"] = fault
    out["signal_joint"] = joint
    s["bad"][fault] += 1
    if fault != _OK:
        out["notice"] |= _BAD_SAMPLE
        if s["event_open"] != 0 and fault != _CLOCK and x["t_ns"] - s["event_onset_ns"] < _SHOWS_NS:
            s["event_doubtful"] = 1
    return bool(fault == _OK)


@kernel
def begin_motion(params: Block, inputs: Block, state: Block) -> None:
    """Forget the motion so far; what is known of a reading's noise stays."""
    c, x, s = params[0], inputs[0], state[0]
    s["raw_dt_ns"] = c["period_ns"]
    s["base_still_ns"] = 0
    s["copy_ns"] = 0
    for i in range(x["q"].shape[0]):
        s["step_q"][i] = x["qd"][i] * c["period_ns"] * 1e-9
        s["step_qd"][i] = 0.0
        s["step_tau"][i] = 0.0
        s["bend_q"][i] = 0.0
        s["bend_qd"][i] = 0.0
        s["bend_tau"][i] = 0.0
        s["score_q"][i] = 0.0
        s["score_qd"][i] = 0.0
        s["score_tau"][i] = 0.0
        s["drift"][i] = 0.0
        s["swing"][i] = 0.0
        s["still_ns"][i] = 0
        s["same_ns"][i] = 0
        s["run_qd"][i] = 0
        s["run_tau"][i] = 0
        s["pushed_ns"][i, 0] = -1
        s["pushed_ns"][i, 1] = -1


@kernel
def motion_fault(params: Block, inputs: Block, state: Block, dt_ns: int) -> tuple[int, int]:
    """Return (fault, joint) of a reading that contradicts the ones before it, else (OK, -1)."""
    c, x, s = params[0], inputs[0], state[0]
    dt = dt_ns * 1e-9
    keep = math.exp(-dt / c["drift_s"])
    leap = 0.5e-9 * (dt_ns + s["raw_dt_ns"]) * dt * c["acceleration_max"]
    fault, joint = _OK, -1
    copied, witnesses = True, 0
    for i in range(x["q"].shape[0]):
        step, step_qd, step_tau = (
            x["q"][i] - s["raw_q"][i],
            x["qd"][i] - s["raw_qd"][i],
            x["tau"][i] - s["raw_tau"][i],
        )
        moves = abs(x["qd"][i]) > c["frozen_velocity"][i]
        same = step == 0.0 and step_qd == 0.0
        s["still_ns"][i] = s["still_ns"][i] + dt_ns if step == 0.0 and moves else 0
        s["same_ns"][i] = s["same_ns"][i] + dt_ns if same else 0
        qd_tells, tau_tells = repetition_tells(params, inputs, state, i, step_qd, step_tau, moves)
        copied = copied and same and step_tau == 0.0
        witnesses += int(moves) + int(qd_tells) + int(tau_tells)
        stuck = qd_tells and s["same_ns"][i] > c["frozen_ns"]
        pushed = pushed_both_ways(params, inputs, state, i)

        miss = step - 0.5 * dt * (x["qd"][i] + s["raw_qd"][i])
        bend = signal.bend(step, s["step_q"][i], dt_ns, s["raw_dt_ns"])
        # A late velocity misses for long and a blow bends no more than it accelerates: a jump does both.
        jumps = step != 0.0 and min(abs(miss), abs(bend)) > c["jump"][i] + leap
        if jumps:  # velocity and position are compared anew from here
            s["drift"][i], s["swing"][i] = 0.0, 0.0
        else:
            s["drift"][i] = keep * s["drift"][i] + miss
            s["swing"][i] = keep * s["swing"][i] + step_qd
        noisy = score_noise(params, inputs, state, i, step, bend, step_qd - s["step_qd"][i], dt_ns)
        noisy = score_torque(params, inputs, state, i, step_tau - s["step_tau"][i], dt_ns) or noisy
        if max(s["score_q"][i], s["score_qd"][i], s["score_tau"][i]) > signal.SUSPECT:
            s["event_doubtful"] |= int(x["t_ns"] - s["event_onset_ns"] < _BEGINS_NS)
        s["step_q"][i], s["step_qd"][i], s["step_tau"][i] = step, step_qd, step_tau
        if fault == _OK:
            if jumps:
                fault, joint = _JUMP, i
            elif s["still_ns"][i] > c["frozen_ns"] or stuck or pushed:
                fault, joint = _FROZEN, i
            elif noisy:
                fault, joint = _NOISE, i
            elif signal.beyond_lag(s["drift"][i], s["swing"][i], c["velocity_lag"]) > c["drift"][i]:
                # Where most of the drift is what the velocity said while the position stood, that is frozen.
                stood = 2e-9 * s["still_ns"][i] * abs(x["qd"][i]) > abs(s["drift"][i])
                fault, joint = _FROZEN if stood else _CONTRADICTION, i
    s["raw_dt_ns"] = dt_ns
    s["copy_ns"] = s["copy_ns"] + dt_ns if copied and witnesses > 1 and base_repeats(inputs, state) else 0
    if s["copy_ns"] > c["frozen_ns"]:
        return _FROZEN, -1
    return fault, joint


@kernel
def repetition_tells(
    params: Block, inputs: Block, state: Block, i: int, step_qd: float, step_tau: float, moves: bool
) -> tuple[bool, bool]:
    """Learn the noise of joint i at standstill; return whether repetition of velocity and torque tells."""
    c, x, s = params[0], inputs[0], state[0]
    if x["brake"][i] != 0 or x["drive"][i] == 0:
        return False, False
    if moves:
        s["run_qd"][i], s["run_tau"][i] = 0, 0
    else:
        s["run_qd"][i], s["lively_qd"][i] = signal.liveliness(
            step_qd, s["step_qd"][i], c["noise_qd"][i], s["run_qd"][i], s["lively_qd"][i]
        )
        s["run_tau"][i], s["lively_tau"][i] = signal.liveliness(
            step_tau, s["step_tau"][i], c["noise_tau"][i], s["run_tau"][i], s["lively_tau"][i]
        )
    clipped = x["tau"][i] == 0.0 or abs(x["tau"][i]) >= c["tau_peak"][i]
    return (
        x["qd"][i] != 0.0 and s["lively_qd"][i] >= signal.LIVELY,
        not clipped and s["lively_tau"][i] >= signal.LIVELY,
    )


@kernel
def pushed_both_ways(params: Block, inputs: Block, state: Block, i: int) -> bool:
    """Whether joint i repeats its readings although torque pushes it one way and the other.

    Of a joint that says it stands, the residual is the torque that friction or an obstacle has to hold.
    """
    c, x, s = params[0], inputs[0], state[0]
    row = c["wire_row"][i]
    # A hand on a joint that is guided may hold it either way.
    judged = (
        row >= 0 and x["judged"][row] != 0 and x["guided"] == 0 and x["brake"][i] == 0 and x["drive"][i] != 0
    )
    if not judged or s["same_ns"][i] <= c["frozen_ns"]:
        s["pushed_ns"][i, 0] = -1
        s["pushed_ns"][i, 1] = -1
        return False
    one, other = s["pushed_ns"][i, 0], s["pushed_ns"][i, 1]
    if min(one, other) >= 0 and abs(one - other) <= c["push_ns"]:
        return True
    hold = c["coulomb"][row] + abs(c["friction_offset"][row]) + c["push"][i]
    if abs(s["r_fast"][row]) > hold:
        s["pushed_ns"][i, 0 if s["r_fast"][row] > 0.0 else 1] = s["same_ns"][i]
    return False


@kernel
def score_noise(
    params: Block, inputs: Block, state: Block, i: int, step: float, bend: float, bend_qd: float, dt_ns: int
) -> bool:
    """Carry the scores of joint i; True while its position or velocity is too noisy."""
    c, x, s = params[0], inputs[0], state[0]
    limit_q, limit_qd = c["bend_q"][i], c["bend_qd"][i]
    if 2 * max(dt_ns, s["raw_dt_ns"]) > 3 * c["period_ns"]:  # samples are missing
        limit_q, limit_qd = math.inf, math.inf
    elif signal.differenced(x["qd"][i], step, s["step_q"][i], dt_ns, c["period_ns"], 0.01 * limit_q):
        limit_qd = math.inf  # it only repeats what the positions say
    s["score_q"][i] = signal.noise_score(bend, s["bend_q"][i], limit_q, s["score_q"][i])
    s["score_qd"][i] = signal.noise_score(bend_qd, s["bend_qd"][i], limit_qd, s["score_qd"][i])
    s["bend_q"][i], s["bend_qd"][i] = bend, bend_qd
    return bool(max(s["score_q"][i], s["score_qd"][i]) >= signal.NOISY)


@kernel
def score_torque(params: Block, inputs: Block, state: Block, i: int, bend: float, dt_ns: int) -> bool:
    """Carry the score of the torque of joint i; True while it is too noisy.

    What a drive truly does counts too: it passes the noise of its readings on, shakes, buzzes. So the limit
    is as far above the roughest time the drive has shown since the start as above the configured noise; of a
    drive that was not yet seen at work nothing is said.
    """
    c, x, s = params[0], inputs[0], state[0]
    if x["brake"][i] != 0 or x["drive"][i] == 0 or 2 * max(dt_ns, s["raw_dt_ns"]) > 3 * c["period_ns"]:
        s["bend_tau"][i], s["score_tau"][i] = 0.0, 0.0
        return False
    limit = c["bend_ratio"] * math.sqrt(max(6.0 * c["noise_tau"][i] ** 2, s["rough_tau"][i]))
    if s["rough_tau"][i] == 0.0:
        limit = math.inf
    s["score_tau"][i] = signal.noise_score(bend, s["bend_tau"][i], limit, s["score_tau"][i])
    s["bend_tau"][i] = bend
    if s["score_tau"][i] == 0.0:
        s["rough_sum"][i], s["rough_count"][i], s["rough_tau"][i] = signal.roughness(
            bend, limit, s["rough_sum"][i], s["rough_count"][i], s["rough_tau"][i]
        )
    return bool(s["score_tau"][i] >= signal.NOISY)


@kernel
def base_repeats(inputs: Block, state: Block) -> bool:
    """Whether the state of the base is exactly the last one; true without a base."""
    x, s = inputs[0], state[0]
    same = True
    for i in range(3):
        same = same and x["base_p"][i] == s["raw_base_p"][i] and x["base_v"][i] == s["raw_base_v"][i]
        same = same and x["base_w"][i] == s["raw_base_w"][i]
    for i in range(4):
        same = same and x["base_quat"][i] == s["raw_base_quat"][i]
    return same
