"""Torque sensors behind the gear: the ledger of a joint taken apart into its motor side and its link side.

- Motor side, `B a + friction + tau_link = tau + d_motor` with rotor inertia B: sees only the drive. No mass,
  gravity or other joint enters it.
- Link side, the rest, `d_link = d - d_motor`: M without that rotor, no friction of the joint, `tau_link` in
  place of `tau`. It sees only the world.
- A sensor that reads too much by x is `+x` on the motor side and `-x` on the link side.

Both go through the residual's own filter, which is linear, so that they add up to the residual of the whole
joint. Rows that are judged: those of the model, link sides among them, then the motor sides.

A sensor that is silent is one of infinite noise: how the sum is divided between its two rows tells nothing.
The motor side then carries the whole of it, with the variance of both.
"""

from __future__ import annotations

import math

from monitor.flow.layout import Block, Floats, Form, Notice
from monitor.kernels import band, ledger
from monitor.kernels.jit import kernel

_JOINT_SPACE, _FIRST_ORDER = int(Form.JOINT_SPACE), int(Form.FIRST_ORDER)
_LINK_TORQUE = int(Notice.LINK_TORQUE)
_START = 2  # value of `inputs.rebase`
# Variance of a link row that says nothing by itself, in squares of its rated torque.
_NEXT_TO_NOTHING = 1e-8


@kernel
def note_silence(params: Block, inputs: Block, state: Block, outputs: Block) -> None:
    """Notice a sensor that reads nothing, or reads again for long enough; the balance then begins anew."""
    c, x, s = params[0], inputs[0], state[0]
    for j in range(c["link_row"].shape[0]):
        i = c["link_wire"][j]
        silent = s["unsensed"][i] != 0
        if not abs(x["tau_link"][j]) <= c["link_range"][j]:  # also where it is NaN
            s["read_ns"][j] = 0
            s["unsensed"][i] = 1
        elif s["read_ns"][j] == 0 or x["t_ns"] < s["read_ns"][j]:  # the clock may be set back
            s["read_ns"][j] = x["t_ns"]
        elif x["t_ns"] - s["read_ns"][j] >= c["link_back_ns"]:
            s["unsensed"][i] = 0
        if silent != (s["unsensed"][i] != 0):
            x["rebase"] = _START
            outputs[0]["notice"] |= _LINK_TORQUE


@kernel
def to_model(params: Block, inputs: Block, state: Block) -> None:
    """Put the readings into the model's signs."""
    c, x, s = params[0], inputs[0], state[0]
    for j in range(c["link_row"].shape[0]):
        silent = s["unsensed"][c["link_wire"][j]] != 0
        s["tau_link"][j] = 0.0 if silent else c["link_sign"][j] * x["tau_link"][j]


@kernel
def delayed(params: Block, state: Block) -> None:
    """Pass the readings through the delay line (state.line_at), late as the torque of the drive is."""
    c, s = params[0], state[0]
    D, base = s["line_q"].shape[0], s["v"].shape[0] - c["tau_lag"].shape[0]
    at = s["line_at"]
    for j in range(c["link_row"].shape[0]):
        s["line_link"][at, j] = s["tau_link"][j]
        s["tau_link"][j] = s["line_link"][(at - c["tau_lag"][c["link_row"][j] - base]) % D, j]


@kernel
def rebase(state: Block, start: bool) -> None:
    """Begin anew at this sample; after a start the residuals are zero, else they are kept."""
    s = state[0]
    s["motor_u_last"][:] = s["motor_u"]
    s["motor_p_fast"][:] = s["motor_p"]
    s["motor_p_slow"][:] = s["motor_p"]
    s["motor_filter"][:, :, :2] = 0.0
    if start:
        s["motor_filter"][:] = 0.0
        s["motor_fast"][:] = 0.0
        s["motor_slow"][:] = 0.0


@kernel
def surplus(params: Block, state: Block) -> None:
    """Fill motor_u, joint space: torque of the motor beyond the sensor's; friction of motion is apart."""
    c, s = params[0], state[0]
    for j in range(c["link_row"].shape[0]):
        i = c["link_row"][j]
        left_out = (1.0 - c["gravity_part"][i]) * s["g"][i]
        s["motor_u_last"][j] = s["motor_u"][j]
        s["motor_u"][j] = s["tau"][i] + left_out - c["friction_offset"][i] - s["tau_link"][j]


@kernel
def advance_joint_space(params: Block, state: Block) -> None:
    """Pass what the motor side lacks, at the acceleration the model expects, through the residual's filter.

    To be called before the fused velocity moves on: friction is taken as `mean_acceleration` takes it.
    """
    c, s = params[0], state[0]
    dt = s["dt_s"]
    k = ledger.gain_step(dt, c["period_ns"], c["gain_fast"].shape[0])
    for j in range(c["link_row"].shape[0]):
        i = c["link_row"][j]
        moves = s["v_fast"][i] + dt * (s["e_fast"][i] + s["a"][i])
        w = c["armature"][i] * s["a"][i] + s["friction_slope"][i] * moves
        w -= 0.5 * (s["motor_u"][j] + s["motor_u_last"][j])
        s["through"][j] = s["tau_link"][j] - w
        ledger.respond_joint_space(w, dt, c["gain_fast"][k, i], s["motor_filter"][j, 0])
        ledger.respond_joint_space(w, dt, c["gain_slow"][k, i], s["motor_filter"][j, 1])


@kernel
def momentum(params: Block, state: Block) -> None:
    """Fill momentum and torque of the rotors; `known` is the joint's torque less friction and gravity."""
    c, s = params[0], state[0]
    for j in range(c["link_row"].shape[0]):
        i = c["link_row"][j]
        s["motor_p_last"][j], s["motor_u_last"][j] = s["motor_p"][j], s["motor_u"][j]
        s["motor_p"][j] = c["armature"][i] * s["v_at"][i]
        s["through"][j] = s["known"][i] + s["g"][i]  # the rotor's own inertial torque is left out here
        s["motor_u"][j] = s["through"][j] - s["tau_link"][j]


@kernel
def advance_momentum(params: Block, state: Block) -> None:
    """Keep the ledger of the rotors' momentum, first or second order."""
    c, s = params[0], state[0]
    p, last, u, u_last = s["motor_p"], s["motor_p_last"], s["motor_u"], s["motor_u_last"]
    if c["form"] == _FIRST_ORDER:
        ledger.first_order(p, last, u, u_last, c["pole_fast"], s["dt_s"], s["motor_fast"])
        ledger.first_order(p, last, u, u_last, c["pole_slow"], s["dt_s"], s["motor_slow"])
    else:
        ledger.second_order(p, u, u_last, c["pole_fast"], s["dt_s"], s["motor_p_fast"], s["motor_fast"])
        ledger.second_order(p, u, u_last, c["pole_slow"], s["dt_s"], s["motor_p_slow"], s["motor_slow"])


@kernel
def split(params: Block, state: Block, outputs: Block) -> None:
    """Fill the residuals of the rows that are judged: the joints', taken apart where a sensor reads."""
    c, s, out = params[0], state[0], outputs[0]
    n = s["r_fast"].shape[0]
    for i in range(n):
        s["row_fast"][i], s["row_slow"][i] = s["r_fast"][i], s["r_slow"][i]
    for j in range(c["link_row"].shape[0]):
        i = c["link_row"][j]
        if c["form"] == _JOINT_SPACE:
            s["motor_fast"][j] = c["armature"][i] * s["e_fast"][i] + s["motor_filter"][j, 0, 2]
            s["motor_slow"][j] = c["armature"][i] * s["e_slow"][i] + s["motor_filter"][j, 1, 2]
        reads = s["unsensed"][c["link_wire"][j]] == 0
        s["row_fast"][n + j] = s["motor_fast"][j] if reads else s["r_fast"][i]
        s["row_slow"][n + j] = s["motor_slow"][j] if reads else s["r_slow"][i]
        s["row_fast"][i] -= s["row_fast"][n + j]
        s["row_slow"][i] -= s["row_slow"][n + j]
    out["row_fast"][:] = s["row_fast"]
    out["row_slow"][:] = s["row_slow"]


@kernel
def features(params: Block, state: Block) -> None:
    """Give the drive's filtered features to the motor row; to the link row what should pass the sensor."""
    c, s = params[0], state[0]
    n = s["r_fast"].shape[0]
    for j in range(c["link_row"].shape[0]):
        i = c["link_row"][j]
        for f in range(s["feature"].shape[1]):
            s["feature"][n + j, f] = s["feature"][i, f]
        s["feature"][i, 0] = s["through_filter"][j, 2]


@kernel
def causes(params: Block, state: Block) -> None:
    """Fill the causes of the motor rows: those of the joint, noise and inertia those of the rotor alone."""
    c, s = params[0], state[0]
    n = s["r_fast"].shape[0]
    keep = math.exp(-c["cause_pole"] * s["dt_s"])
    for j in range(c["link_row"].shape[0]):
        i, k = c["link_row"][j], n + j
        B = c["armature"][i]
        inertia = keep * s["cause"][k, band.INERTIA] + (1.0 - keep) * (B * s["a"][i]) ** 2
        for f in range(band.CAUSES):
            s["cause"][k, f] = s["cause"][i, f]
        s["cause"][k, band.NOISE] = B * B * c["e_variance"][i]
        s["cause"][k, band.INERTIA] = inertia


@kernel
def hidden(params: Block, variance: Floats) -> None:
    """Give what friction hides of the joints, variance (n + T), to the motor sides: link sides have none."""
    link = params[0]["link_row"]
    n = variance.shape[0] - link.shape[0]
    for j in range(link.shape[0]):
        variance[n + j] = variance[link[j]]
        variance[link[j]] = 0.0


@kernel
def is_link_side(params: Block, row: int) -> bool:
    """Whether a row is the link side of a joint: there is no friction in it to be tracked."""
    found = False
    for j in range(params[0]["link_row"].shape[0]):
        found = found or params[0]["link_row"][j] == row
    return found


@kernel
def pool(params: Block, state: Block) -> None:
    """Let the motor row of a silent sensor have variances and known torque of both sides."""
    c, s = params[0], state[0]
    n = s["r_fast"].shape[0]
    for j in range(c["link_row"].shape[0]):
        if s["unsensed"][c["link_wire"][j]] == 0:
            continue
        i, k = c["link_row"][j], n + j
        s["var_fast"][k] += s["var_fast"][i]
        s["var_slow"][k] += s["var_slow"][i]
        s["var_stand"][k] += s["var_stand"][i]
        s["explained"][k] += s["explained"][i]
        s["var_fast"][i] = _NEXT_TO_NOTHING * c["rated"][i] ** 2
        s["var_slow"][i] = s["var_fast"][i]
        s["var_stand"][i] = 0.0
        s["explained"][i] = 0.0


@kernel
def forget(params: Block, state: Block, R: Block) -> None:
    """Add to R what a silent sensor does not say: a noise of either sign without bound in its two rows."""
    c, s = params[0], state[0]
    n = s["r_fast"].shape[0]
    for j in range(c["link_row"].shape[0]):
        if s["unsensed"][c["link_wire"][j]] == 0:
            continue
        i, k = c["link_row"][j], n + j
        unknown = band.BLIND * c["rated"][i] ** 2
        R[i, i] += unknown
        R[k, k] += unknown
        R[i, k] -= unknown
        R[k, i] -= unknown
