"""Faults that last: once certain they become part of the model, so that what happens beside them is seen.

A slot holds one fault: an explanation whose parameters are tracked from then on, their uncertainty widening
the band. An actuator's are share of torque, Coulomb and viscous friction and offset, all at once; a position
sensor's its offset; a torque sensor's offset and scale; a load's mass and first moment. When the parameters
have come back to nothing the slot is given free, and that is news as well.
"""

from __future__ import annotations

import math

from monitor.explain import ACTUATOR, LOAD, SENSOR, TORQUE_SENSOR, actuator, fill, torque_sensor
from monitor.flow.layout import FAULTS, LASTING, Block, Floats, Notice
from monitor.kernels import tracking
from monitor.kernels.jit import kernel

_CONFIRMED, _CEASED = int(Notice.FAULT_CONFIRMED), int(Notice.FAULT_CEASED)
# Parameters wander by their prior within so long, and are known at first only to fault size.
_WANDER_S = 300.0
# The variance of a free torque follows within so long; below this share of the noise it is nothing.
_FREE_S, _LEAST_FREE = 3.0, 0.01
# Share of the prior to which the parameters other than the one found are known to be nothing.
_ASIDE = 0.1
# Evidence steps that count as one, since residuals are not independent.
_CORRELATED = 5.0
# A fault has ceased when for so long it was not felt where it should have been.
_CEASED_S, _KNOWN = 1.0, 0.3


@kernel
def may_last(family: int) -> bool:
    """Whether explanations of a family can become part of the model."""
    return bool(family in (ACTUATOR, SENSOR, LOAD, TORQUE_SENSOR))


@kernel
def _columns_of(family: int) -> int:
    """Return how many parameters a lasting fault of a family has."""
    if family == SENSOR:
        return 1
    return 2 if family == TORQUE_SENSOR else 4


@kernel
def _by_posture(family: int) -> bool:
    """Whether the columns of a family follow from the posture, not from the features of one joint."""
    return bool(family in (SENSOR, LOAD))


@kernel
def slot_of(params: Block, state: Block, explanation: int) -> int:
    """Return the slot that holds an explanation, or -1."""
    s = state[0]
    for f in range(FAULTS):
        if s["fault_of"][f] == explanation + 1:
            return f
    return -1


@kernel
def confirm(params: Block, state: Block, outputs: Block, explanation: int) -> bool:
    """Move an explanation into the model; False where it is none that lasts, or no slot is free."""
    c, s = params[0], state[0]
    family, index = c["of_family"][explanation], c["of_index"][explanation]
    if not may_last(family):
        return False
    slot = slot_of(params, state, explanation)
    if slot < 0:
        slot = slot_of(params, state, -1)
    if slot < 0:
        return False
    fresh = s["fault_of"][slot] == 0
    s["fault_of"][slot] = explanation + 1
    s["fault_family"][slot], s["fault_index"][slot] = family, index
    s["fault_columns"][slot] = _columns_of(family)
    s["fault_idle_s"][slot] = 0.0
    _learn(params, state, slot, explanation, fresh)
    if fresh:
        s["fault_event"][slot] = s["event_number"]
        outputs[0]["notice"] |= _CONFIRMED
    refresh(params, state)  # its columns are those of the evidence step just taken
    s["event_open"] = 0
    s["cusum"][:] = 0.0
    tracking.forget(c["track_sd"], s["track"], s["track_P"])
    return True


@kernel
def _learn(params: Block, state: Block, slot: int, explanation: int, fresh: bool) -> None:
    """Set a slot's parameters to what the likeliest candidate says of them; the others are hardly there."""
    c, s = params[0], state[0]
    share = _ASIDE if fresh else 1.0
    for a in range(LASTING):
        if fresh:
            s["fault_theta"][slot, a] = 0.0
        for b in range(LASTING):
            s["fault_P"][slot, a, b] = (share * c["of_sd"][explanation, a]) ** 2 if a == b else 0.0
    if not fresh:
        return
    s["fault_free"][slot] = 0.0
    best, smooth = _likeliest(params, state, explanation)
    if not smooth:
        kind = c["constant_index"][best] % 8
        _know(params, state, slot, explanation, kind, s["constant_size"][best], s["constant_size_sd"][best])
        return
    d, settles = c["smooth_columns"][best], c["smooth_settles"][best]
    n = s["left"].shape[0]
    if settles == 0 and s["fault_family"][slot] == TORQUE_SENSOR:
        # Its noise is an offset that nobody knows.
        s["fault_P"][slot, 0, 0] += s["smooth_peak_size"][best] ** 2
        return
    if settles == 0:
        s["fault_free"][slot] = s["smooth_peak_size"][best] ** 2
        return
    m = n + 2 * d + settles
    for a in range(settles):
        value = n + 2 * d + a
        sd = c["smooth_sd"][best, a]
        kind = a if settles > 1 else c["smooth_index"][best] % 8
        _know(
            params, state, slot, explanation, kind, sd * s["smooth_x"][best, value],
            sd * math.sqrt(s["smooth_P"][best, value * m + value]),
        )  # fmt: skip


@kernel
def _likeliest(params: Block, state: Block, explanation: int) -> tuple[int, bool]:
    """Return the candidate of an explanation with the most evidence, and whether it is a smooth one."""
    c, s = params[0], state[0]
    best, smooth, log = -1, False, -math.inf
    for k in range(c["constant_of"].shape[0]):
        if c["constant_of"][k] == explanation and s["constant_log"][k] + c["constant_share"][k] > log:
            best, smooth, log = k, False, s["constant_log"][k] + c["constant_share"][k]
    for k in range(c["smooth_of"].shape[0]):
        if c["smooth_of"][k] == explanation and s["smooth_log"][k] + c["smooth_share"][k] > log:
            best, smooth, log = k, True, s["smooth_log"][k] + c["smooth_share"][k]
    return best, smooth


@kernel
def outlasts(params: Block, state: Block) -> bool:
    """Whether the event that is about to end by quiet is a sure fault and, by its evidence, still there.

    A lost share of torque is not felt while the joint bears nothing.
    """
    c, s = params[0], state[0]
    e = s["sure_of"]
    if e < 0 or not may_last(c["of_family"][e]):
        return False
    k, smooth = _likeliest(params, state, e)
    if smooth:
        return bool(c["smooth_settles"][k] > 0 and s["smooth_acts"][k] > s["smooth_ended"][k])
    return bool(s["constant_acts"][k] > s["constant_ended"][k])


@kernel
def _know(params: Block, state: Block, slot: int, explanation: int, a: int, mean: float, sd: float) -> None:
    """Set one parameter of a slot."""
    s = state[0]
    if s["fault_family"][slot] == SENSOR:
        a = 0
    s["fault_theta"][slot, a] = mean
    s["fault_P"][slot, a, a] += (3.0 * sd) ** 2


@kernel
def explain_lasting(params: Block, state: Block) -> None:
    """Add to `explained` what the lasting faults explain of this sample."""
    s = state[0]
    for f in range(FAULTS):
        if s["fault_of"][f] != 0:
            columns(params, state, f, s["feature"])
            for i in range(s["explained"].shape[0]):
                for a in range(s["fault_columns"][f]):
                    s["explained"][i] += s["fault_H"][f, i, a] * s["fault_theta"][f, a]


@kernel
def widen(state: Block, R: Block) -> None:
    """Add to R (n,n) what is not known of the lasting faults: `H P H'`."""
    s = state[0]
    n = R.shape[0]
    for f in range(FAULTS):
        if s["fault_of"][f] != 0:
            d = s["fault_columns"][f]
            if s["fault_free"][f] > 0.0:
                R[s["fault_index"][f] // 8, s["fault_index"][f] // 8] += s["fault_free"][f]
            for i in range(n):
                for a in range(d):
                    w = 0.0
                    for b in range(d):
                        w += s["fault_H"][f, i, b] * s["fault_P"][f, b, a]
                    if w != 0.0:
                        for j in range(n):
                            R[i, j] += w * s["fault_H"][f, j, a]


@kernel
def columns(params: Block, state: Block, f: int, feature: Floats) -> None:
    """Fill fault_H of a drive or torque sensor from features; others keep those of the last evidence step."""
    c, s = params[0], state[0]
    if s["fault_family"][f] == ACTUATOR:
        row = s["fault_index"][f] // 8
        for i in range(s["fault_H"].shape[1]):
            for a in range(LASTING):
                s["fault_H"][f, i, a] = 0.0
        for a in range(3):
            s["fault_H"][f, row, a] = -feature[row, a]
        s["fault_H"][f, row, actuator.OFFSET] = -1.0
    elif s["fault_family"][f] == TORQUE_SENSOR:
        torque_sensor.columns(s["fault_index"][f] // 8, c["link_row"], feature, s["fault_H"][f])


@kernel
def track(params: Block, state: Block, outputs: Block, dt_s: float) -> None:
    """Take one evidence step's residual in; give a slot free whose fault has ceased."""
    c, s = params[0], state[0]
    for f in range(FAULTS):
        if s["fault_of"][f] == 0:
            continue
        e = s["fault_of"][f] - 1
        d = s["fault_columns"][f]
        for a in range(d):
            s["fault_P"][f, a, a] += (c["of_sd"][e, a] ** 2) * dt_s / _WANDER_S
        if s["event_open"] == 0:
            s["fault_before"][:] = s["fault_theta"][f]
            for i in range(s["left"].shape[0]):
                _update(state, f, i, d)
        acts, excited = _acts(params, state, f, e, d)
        if s["fault_free"][f] > 0.0:
            acts, excited = _varies(state, f, dt_s)
        if acts:
            s["fault_idle_s"][f] = 0.0
        elif excited:
            s["fault_idle_s"][f] += dt_s
        if s["fault_idle_s"][f] > _CEASED_S:
            s["fault_of"][f] = 0
            s["fault_ceased"][f] = s["fault_event"][f]
            tracking.forget(c["track_sd"], s["track"], s["track_P"])
            outputs[0]["notice"] |= _CEASED


@kernel
def _update(state: Block, f: int, i: int, d: int) -> None:
    """Kalman update of a slot's parameters by the residual of one row."""
    s = state[0]
    # What a standing joint hides stays as it is, and so does not average out.
    variance = s["var_fast"][i]
    if s["loaded"][i] != 0:
        # A foot's force loads the row too: what counts is what the row has beyond all others.
        if s["fault_family"][f] != ACTUATOR:
            return
        variance = max(variance, s["alone_sd"][i] ** 2 - _unsure(state, f, i, d))
    v = _CORRELATED * (variance + 20.0 * s["var_stand"][i])
    nu, touched = s["alone"][i], False
    for a in range(d):
        h = s["fault_H"][f, i, a]
        nu -= h * (s["fault_theta"][f, a] - s["fault_before"][a])
        touched = touched or h != 0.0
        g = 0.0
        for b in range(d):
            g += s["fault_P"][f, a, b] * s["fault_H"][f, i, b]
        s["fault_gain"][a] = g
        v += h * g
    if not touched:
        return
    for a in range(d):
        s["fault_theta"][f, a] += s["fault_gain"][a] / v * nu
        for b in range(d):
            s["fault_P"][f, a, b] -= s["fault_gain"][a] * s["fault_gain"][b] / v


@kernel
def _unsure(state: Block, f: int, i: int, d: int) -> float:
    """Return the variance of what a slot's parameters do to a row."""
    s = state[0]
    total = 0.0
    for a in range(d):
        for b in range(d):
            total += s["fault_H"][f, i, a] * s["fault_P"][f, a, b] * s["fault_H"][f, i, b]
    return total


@kernel
def _acts(params: Block, state: Block, f: int, e: int, d: int) -> tuple[bool, bool]:
    """Return whether the fault is felt, and whether one as large as its prior would be or is ruled out."""
    c, s = params[0], state[0]
    acts, excited = False, True
    for a in range(d):
        excited = excited and s["fault_P"][f, a, a] < (_KNOWN * c["of_sd"][e, a]) ** 2
    for i in range(s["left"].shape[0]):
        effect, unsure, could = 0.0, 0.0, 0.0
        for a in range(d):
            h = s["fault_H"][f, i, a]
            effect += h * s["fault_theta"][f, a]
            could = max(could, abs(h) * c["of_sd"][e, a])
            for b in range(d):
                unsure += h * s["fault_P"][f, a, b] * s["fault_H"][f, i, b]
        sd = math.sqrt(s["var_fast"][i])
        acts = acts or abs(effect) > 2.0 * max(sd, math.sqrt(unsure))
        excited = excited or could > 4.0 * sd
    return acts, excited


@kernel
def _varies(state: Block, f: int, dt_s: float) -> tuple[bool, bool]:
    """Follow the variance of a torque that varies freely; return as `_acts` does."""
    s = state[0]
    row = s["fault_index"][f] // 8
    moves = abs(s["feature"][row, 1]) > 0.9
    if s["event_open"] != 0 or not moves:
        return False, False
    fresh = s["left"][row] ** 2 - s["var_fast"][row] - s["fault_free"][f]
    s["fault_free"][f] = max(s["fault_free"][f] + fresh * dt_s / _FREE_S, _LEAST_FREE * s["var_fast"][row])
    return bool(s["fault_free"][f] > 2.0 * s["var_fast"][row]), True


@kernel
def refresh(params: Block, state: Block) -> None:
    """Fill fault_H of sensors and loads from the geometry of the evidence step that was just prepared."""
    c, s = params[0], state[0]
    for f in range(FAULTS):
        if s["fault_of"][f] != 0 and _by_posture(s["fault_family"][f]):
            fill(
                s["fault_family"][f], s["fault_index"][f], s["x_feature"], s["slope"], s["x_M"],
                c["body_axis"], c["body_centre"], c["foot_axis"], c["foot_point"], c["foot_radius"], c["up"],
                c["load_axis"], c["load_centre"], c["parent"], c["dof"], s["x_S"], s["x_V"], s["x_Vd"],
                s["x_R_W"], s["x_p_W"], c["link_row"], c["armature"], s["fault_H"][f],
            )  # fmt: skip


@kernel
def needs_geometry(state: Block) -> bool:
    """Whether a slot holds a fault whose columns follow from the posture."""
    s = state[0]
    found = False
    for f in range(FAULTS):
        found = found or (s["fault_of"][f] != 0 and _by_posture(s["fault_family"][f]))
    return found


@kernel
def holds_row(state: Block, row: int) -> bool:
    """Whether a slot holds a fault of the actuator of a row, or of the torque sensor beside it."""
    s = state[0]
    for f in range(FAULTS):
        held = s["fault_index"][f] // 8
        if s["fault_family"][f] == TORQUE_SENSOR:
            held += s["r_fast"].shape[0]
        elif s["fault_family"][f] != ACTUATOR:
            continue
        if s["fault_of"][f] != 0 and held == row:
            return True
    return False
