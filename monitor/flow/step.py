"""One sample through the whole of the arithmetic: a table of contents, one call per stage.

`step(params, inputs, state, outputs)` is what live and replay share. It reads no clock: all times are the
robot's own.
"""

from __future__ import annotations

from monitor.flow import event, evidence, link_torque
from monitor.flow.credible import credible
from monitor.flow.layout import Block, Form, Notice, Signal
from monitor.kernels import ledger
from monitor.kernels.dynamics import dynamics, quaternion_matrix
from monitor.kernels.filters import cholesky, cholesky_solve, multiply
from monitor.kernels.jit import kernel

_OK = int(Signal.OK)
_CLOCK = int(Signal.CLOCK)
_JOINT_SPACE, _FIRST_ORDER = int(Form.JOINT_SPACE), int(Form.FIRST_ORDER)
_BRAKE_MOVED = int(Notice.BRAKE_MOVED)
_TORQUE_AT_LIMIT, _DISOBEYED = int(Notice.TORQUE_AT_LIMIT), int(Notice.DISOBEYED)
_GAP = int(Notice.GAP)
# Reasons to re-base: after a gap or bad samples the residual is kept, after a start it begins at zero.
_PAUSE, _START = 1, 2


@kernel
def step(params: Block, inputs: Block, state: Block, outputs: Block) -> None:
    """Take the sample in `inputs` into `state` and fill `outputs`."""
    outputs[0]["notice"] = 0
    link_torque.note_silence(params, inputs, state, outputs)
    good = credible(params, inputs, state, outputs)
    note_rebase(params, inputs, state, outputs)
    if not good:
        return
    judge_limits(params, inputs, state, outputs)
    to_model(params, inputs, state)
    if not delayed(params, state):
        return
    if state[0]["pending"] != 0:
        rebase(params, inputs, state, outputs)
    else:
        advance(params, inputs, state)
    residuals(state, outputs)
    link_torque.split(params, state, outputs)
    event.into_band(params, inputs, state, outputs)
    event.judge(params, inputs, state, outputs)
    if state[0]["weigh_afresh"] != 0:
        evidence.begin(params, inputs, state)
    if state[0]["event_open"] != 0:
        evidence.weigh(params, inputs, state, outputs)
    if state[0]["step_due"] != 0:
        evidence.follow(params, inputs, state, outputs)
    state[0]["t_ns"] = state[0]["at_ns"]
    state[0]["stepped"] += 1


@kernel
def note_rebase(params: Block, inputs: Block, state: Block, outputs: Block) -> None:
    """Collect the reasons to re-base until a good sample can serve as the new start."""
    x, s = inputs[0], state[0]
    wish, fault = x["rebase"], outputs[0]["signal"]
    waits = s["pending"]
    if fault == _CLOCK or (s["started"] == 0 and waits == 0):
        wish = _START
    elif fault != _OK:
        wish = max(wish, _PAUSE)
    elif wish == 0 and waits == 0 and x["t_ns"] - s["entered_ns"] > params[0]["gap_ns"]:
        # Without a reason known already (bad samples, a clock that was set) it is samples that are missing.
        wish = _PAUSE
        outputs[0]["notice"] |= _GAP
    if fault == _OK:
        s["entered_ns"] = x["t_ns"]
    if wish != 0:
        s["pending"] = max(s["pending"], wish)
        s["line_held"] = 0
        x["rebase"] = 0


@kernel
def judge_limits(params: Block, inputs: Block, state: Block, outputs: Block) -> None:
    """Notice a torque at its limit, a drive that does not obey, a joint that moves with its brake closed."""
    c, x, s, out = params[0], inputs[0], state[0], outputs[0]
    for i in range(x["q"].shape[0]):
        if abs(x["tau"][i]) >= c["tau_peak"][i]:
            s["at_limit"][i] += 1
            out["notice"] |= _TORQUE_AT_LIMIT
        obeys = not abs(x["tau"][i] - x["tau_cmd"][i]) > c["command_error"][i]  # also where tau_cmd is NaN
        if obeys or x["brake"][i] != 0 or x["drive"][i] == 0:  # a drive at rest has nothing to obey
            s["disobeyed_ns"][i] = 0
            s["disobeyed"][i] = 0
        elif s["disobeyed_ns"][i] == 0 or x["t_ns"] < s["disobeyed_ns"][i]:  # the clock may be set back
            s["disobeyed_ns"][i] = x["t_ns"]
        elif s["disobeyed"][i] == 0 and x["t_ns"] - s["disobeyed_ns"][i] > c["command_error_ns"]:
            s["disobeyed"][i] = 1
            out["notice"] |= _DISOBEYED
        if x["brake"][i] == 0:
            s["brake_ns"][i] = 0
            s["brake_moved"][i] = 0
            continue
        if s["brake_ns"][i] == 0 or x["t_ns"] < s["brake_ns"][i]:
            s["brake_ns"][i] = x["t_ns"]
        if x["t_ns"] - s["brake_ns"][i] <= c["brake_settle_ns"]:
            s["brake_q"][i] = x["q"][i]
        elif s["brake_moved"][i] == 0 and abs(x["q"][i] - s["brake_q"][i]) > c["brake_motion"][i]:
            s["brake_moved"][i] = 1
            out["notice"] |= _BRAKE_MOVED


@kernel
def to_model(params: Block, inputs: Block, state: Block) -> None:
    """Put the sample into the model's order, signs, units and body axes."""
    c, x, s = params[0], inputs[0], state[0]
    m = x["q"].shape[0]
    base = s["v"].shape[0] - m
    s["at_ns"] = x["t_ns"]
    shift = 7 if base == 6 else 0
    multiply(c["to_q"], x["q"], s["q"][shift:])
    for i in range(m):
        s["q"][shift + i] += c["q_zero"][i]
    multiply(c["to_q"], x["qd"], s["v"][base:])
    multiply(c["to_tau"], x["tau"], s["tau"][base:])
    link_torque.to_model(params, inputs, state)
    if base == 6:
        s["q"][:3] = x["base_p"]
        scale = 0.0
        for i in range(4):
            scale += x["base_quat"][i] ** 2
        for i in range(4):
            s["q"][3 + i] = x["base_quat"][i] / scale**0.5
        R = s["R_W"][0]
        quaternion_matrix(s["q"][3], s["q"][4], s["q"][5], s["q"][6], R)
        for i in range(3):
            s["v"][i] = x["base_w"][i]
            s["v"][3 + i] = R[0, i] * x["base_v"][0] + R[1, i] * x["base_v"][1] + R[2, i] * x["base_v"][2]
            s["tau"][i] = 0.0
            s["tau"][3 + i] = 0.0


@kernel
def delayed(params: Block, state: Block) -> bool:
    """Pass the sample through the delay line that evens out late torques; False until the line is full."""
    c, s = params[0], state[0]
    D = s["line_q"].shape[0]
    if D == 1:
        return True
    m = c["tau_lag"].shape[0]
    base = s["v"].shape[0] - m
    at = s["line_at"]
    s["line_ns"][at] = s["at_ns"]
    s["line_q"][at] = s["q"]
    s["line_v"][at] = s["v"]
    s["line_tau"][at] = s["tau"][base:]
    held = (at - c["state_lag"]) % D
    s["at_ns"] = s["line_ns"][held]
    s["q"][:] = s["line_q"][held]
    s["v"][:] = s["line_v"][held]
    for i in range(m):
        s["tau"][base + i] = s["line_tau"][(at - c["tau_lag"][i]) % D, i]
    link_torque.delayed(params, state)
    s["line_at"] = (at + 1) % D
    s["line_held"] = min(s["line_held"] + 1, D)
    return bool(s["line_held"] == D)


@kernel
def model_at(params: Block, inputs: Block, state: Block) -> None:
    """Fill M and its factor, C, g, p, C'v where the dynamics are taken: at q_at, v_at."""
    c, x, s = params[0], inputs[0], state[0]
    dynamics(
        c["parent"], c["kind"], c["dof"], c["multiplier"], c["offset"], c["R_PJ"], c["p_PJ"], c["axis"],
        x["E"], c["armature"], c["gravity"], s["q_at"], s["v_at"],
        s["R_W"], s["p_W"], s["S"], s["Sd"], s["V"], s["Ic"], s["Bc"],
        s["M"], s["C"], s["g"], s["p"], s["Ctv"],
    )  # fmt: skip
    if c["coupled"] != 0:
        for i in range(s["p"].shape[0]):
            for j in range(s["p"].shape[0]):
                s["M"][i, j] += c["rotor"][i, j]
                s["p"][i] += c["rotor"][i, j] * s["v_at"][j]


@kernel
def known_torque(params: Block, state: Block) -> None:
    """Fill the torque that is known: motor, less friction and gravity (velocity terms are the form's own)."""
    c, s = params[0], state[0]
    for i in range(s["known"].shape[0]):
        s["known"][i] = s["tau"][i] - c["gravity_part"][i] * s["g"][i]
    ledger.friction(
        s["v_at"],
        c["viscous"],
        c["coulomb"],
        c["bend"],
        c["friction_offset"],
        c["friction_velocity"],
        s["known"],
    )


@kernel
def smooth_torque(params: Block, inputs: Block, state: Block) -> None:
    """Fill u, all known torque but that part of friction which depends on velocity, at q_at, v_at."""
    c, s = params[0], state[0]
    model_at(params, inputs, state)
    multiply(s["C"], s["v_at"], s["u"])
    for i in range(s["u"].shape[0]):
        rest = c["gravity_part"][i] * s["g"][i] + c["friction_offset"][i]
        s["u"][i] = s["tau"][i] - rest - s["u"][i]
    link_torque.surplus(params, state)


@kernel
def mean_acceleration(params: Block, state: Block) -> None:
    """Fill a, the acceleration the model expects over the last dt_s.

    Smooth torque is the mean of both ends. Friction is taken at the velocity that a itself leads to, in
    proportion to its slope at v_at: `(M + dt K) a = u - K (v + dt e)`. Taken at v_at directly it would swing
    ever wider wherever Coulomb friction is stiffer than `v0 M / dt`, that is, at every reversal.
    """
    c, s = params[0], state[0]
    dt = s["dt_s"]
    ledger.friction_slope(
        s["v_at"], c["viscous"], c["coulomb"], c["bend"], c["friction_velocity"], s["friction_slope"]
    )
    for i in range(s["a"].shape[0]):
        free = s["v_fast"][i] + dt * s["e_fast"][i]
        s["known"][i] = 0.5 * (s["u"][i] + s["u_last"][i]) - s["friction_slope"][i] * free
        for j in range(s["a"].shape[0]):
            # The last torque met the last mass matrix.
            s["known"][i] += 0.5 * (s["M"][i, j] - s["M_last"][i, j]) * s["a"][j]
            s["L"][i, j] = s["M"][i, j]
        s["L"][i, i] += dt * s["friction_slope"][i]
    cholesky(s["L"], s["L"])
    cholesky_solve(s["L"], s["known"], s["a"])


@kernel
def model_momentum(params: Block, inputs: Block, state: Block) -> None:
    """Fill p and `u = known torque + C'v`, the rate of change of p that the model expects."""
    s = state[0]
    s["q_at"][:] = s["q"]
    s["v_at"][:] = s["v"]
    model_at(params, inputs, state)
    known_torque(params, state)
    for i in range(s["u"].shape[0]):
        s["u"][i] = s["known"][i] + s["Ctv"][i]
    link_torque.momentum(params, state)


@kernel
def rebase(params: Block, inputs: Block, state: Block, outputs: Block) -> None:
    """Start the ledger at this sample."""
    c, s = params[0], state[0]
    t_ns = s["at_ns"]
    if s["pending"] == _START:
        s["e_fast"][:] = 0.0
        s["e_slow"][:] = 0.0
        s["r_fast"][:] = 0.0
        s["r_slow"][:] = 0.0
        s["settled_ns"] = t_ns + c["start_settle_ns"]
        s["start_settled_ns"] = s["settled_ns"]
        if s["event_open"] != 0:
            event.end(params, state, outputs)
    else:
        s["settled_ns"] = max(s["settled_ns"], t_ns + c["settle_ns"])
    s["dt_s"] = 0.0
    if c["form"] == _JOINT_SPACE:
        s["q_fast"][:], s["v_fast"][:] = s["q"], s["v"]
        s["q_slow"][:], s["v_slow"][:] = s["q"], s["v"]
        s["q_at"][:], s["v_at"][:] = s["q"], s["v"]
        smooth_torque(params, inputs, state)
        s["u_last"][:], s["M_last"][:] = s["u"], s["M"]
        mean_acceleration(params, state)
    else:
        model_momentum(params, inputs, state)
        s["p_fast"][:], s["p_slow"][:] = s["p"], s["p"]
    link_torque.rebase(state, s["pending"] == _START)
    s["started"] = 1
    s["pending"] = 0
    s["rebased"] += 1


@kernel
def advance(params: Block, inputs: Block, state: Block) -> None:
    """Move the ledger from the last sample to this one by the Δt of the robot's own clock."""
    s = state[0]
    s["dt_s"] = (s["at_ns"] - s["t_ns"]) * 1e-9
    if params[0]["form"] == _JOINT_SPACE:
        advance_joint_space(params, inputs, state)
    else:
        advance_momentum(params, inputs, state)


@kernel
def advance_joint_space(params: Block, inputs: Block, state: Block) -> None:
    """Fuse position and velocity; dynamics are taken where the fast filter expects the robot."""
    c, s = params[0], state[0]
    dt = s["dt_s"]
    n = s["v"].shape[0]
    base = n - c["tau_lag"].shape[0]
    s["q_at"][:] = s["q_fast"]
    ledger.advance_pose(base, s["v_fast"], s["a"], s["e_fast"], dt, s["q_at"])
    for i in range(n):
        s["v_at"][i] = s["v_fast"][i] + dt * (s["a"][i] + s["e_fast"][i])
    s["u_last"][:], s["M_last"][:] = s["u"], s["M"]
    smooth_torque(params, inputs, state)
    mean_acceleration(params, state)
    link_torque.advance_joint_space(params, state)
    k = ledger.gain_step(dt, c["period_ns"], c["gain_fast"].shape[0])
    ledger.joint_space(
        base, s["q"], s["v"], s["a"], dt, c["gain_fast"][k], s["q_fast"], s["v_fast"], s["e_fast"]
    )
    ledger.joint_space(
        base, s["q"], s["v"], s["a"], dt, c["gain_slow"][k], s["q_slow"], s["v_slow"], s["e_slow"]
    )
    multiply(s["M"], s["e_fast"], s["r_fast"])
    multiply(s["M"], s["e_slow"], s["r_slow"])


@kernel
def advance_momentum(params: Block, inputs: Block, state: Block) -> None:
    """Keep the ledger of generalised momentum, first or second order, on the measured velocity."""
    c, s = params[0], state[0]
    dt = s["dt_s"]
    s["p_last"][:], s["u_last"][:] = s["p"], s["u"]
    model_momentum(params, inputs, state)
    if c["form"] == _FIRST_ORDER:
        ledger.first_order(s["p"], s["p_last"], s["u"], s["u_last"], c["pole_fast"], dt, s["r_fast"])
        ledger.first_order(s["p"], s["p_last"], s["u"], s["u_last"], c["pole_slow"], dt, s["r_slow"])
    else:
        ledger.second_order(s["p"], s["u"], s["u_last"], c["pole_fast"], dt, s["p_fast"], s["r_fast"])
        ledger.second_order(s["p"], s["u"], s["u_last"], c["pole_slow"], dt, s["p_slow"], s["r_slow"])
    link_torque.advance_momentum(params, state)


@kernel
def residuals(state: Block, outputs: Block) -> None:
    """Show the residuals and the torque the model expects."""
    s, out = state[0], outputs[0]
    out["r_fast"][:] = s["r_fast"]
    out["r_slow"][:] = s["r_slow"]
    for i in range(s["tau"].shape[0]):
        out["tau_model"][i] = s["tau"][i] + s["r_fast"][i]
