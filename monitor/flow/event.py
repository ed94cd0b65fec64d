"""When does an event begin and end: the residual in its band, sums over time, what is kept to date back."""

from __future__ import annotations

import math

from monitor.flow import feet, lasting, link_torque, trend
from monitor.flow.layout import RING, Block, Floats, Form, Notice
from monitor.kernels import band, evidence, ledger, tracking
from monitor.kernels import feet as feet_kernels
from monitor.kernels.jit import kernel

_JOINT_SPACE, _FIRST_ORDER = int(Form.JOINT_SPACE), int(Form.FIRST_ORDER)
_EVENT_OPENED, _EVENT_ENDED = int(Notice.EVENT_OPENED), int(Notice.EVENT_ENDED)
_STANDING = 0.1
_STUCK = 10.0  # the torque that a standing joint hides does not average out
# A single block counts at most so many sd: the sums are for what lasts.
_CLIP = 6.0


@kernel
def into_band(params: Block, inputs: Block, state: Block, outputs: Block) -> None:
    """Fill what is left of the residual when tracked friction is taken off, its covariance and its ratios."""
    c, x, s, out = params[0], inputs[0], state[0], outputs[0]
    _respond(params, state)
    band.causes(
        s["M"], s["a"], s["v_at"], s["tau"], c["friction_velocity"], c["coulomb"], c["e_variance"],
        s["dt_s"], c["cause_pole"], c["hold_s"], s["held"], s["held_left_s"], s["cause"],
    )  # fmt: skip
    link_torque.causes(params, state)
    band.variance(s["cause"], c["cause_fast"], s["var_fast"])
    band.variance(s["cause"], c["cause_slow"], s["var_slow"])
    band.standing(s["cause"], c["cause_fast"], s["var_stand"])
    floating = s["v"].shape[0] > c["tau_lag"].shape[0]
    out["feet_unknown"] = 0
    if floating:
        feet.stand(params, inputs, state, outputs)
    tracking.explained(s["feature"], s["track"], s["track_P"], s["explained"], s["explained_var"])
    s["tracked"][:] = s["explained"]
    lasting.explain_lasting(params, state)
    link_torque.pool(params, state)
    n = s["left"].shape[0]
    for i in range(n):
        s["left"][i] = s["row_fast"][i] - s["explained"][i]
        s["white"][i] = s["explained_var"][i]
        if x["judged"][i] == 0:
            s["white"][i] += band.BLIND * c["rated"][i] ** 2
    band.covariance(s["var_fast"], c["rho"], s["white"], s["R"])
    lasting.widen(state, s["R"])
    if floating:
        feet.widen(params, state, s["R"])
    keep = math.exp(-s["dt_s"] / c["slow_later_s"]) if s["dt_s"] > 0.0 else 0.0
    for i in range(n):
        s["explained_slow"][i] += (1.0 - keep) * (s["explained"][i] - s["explained_slow"][i])
        # What made the slow residual large stays in it for longer than its cause does.
        s["var_slow_kept"][i] = max(s["var_slow"][i], keep * s["var_slow_kept"][i])
        slow_var = s["var_slow_kept"][i] + s["R"][i, i] - s["var_fast"][i]
        out["band_fast"][i] = c["row_limit"] * math.sqrt(s["R"][i, i])
        if not floating:
            out["band_slow"][i] = c["slow_limit"] * math.sqrt(slow_var)
            s["slow_ratio"][i] = abs(s["row_slow"][i] - s["explained_slow"][i]) / out["band_slow"][i]
    link_torque.forget(params, state, s["R"])
    evidence.factor(s["R"], s["R_factor"])
    s["white"][:] = s["left"]
    evidence.whiten(s["R_factor"], s["white"])
    total = 0.0
    for i in range(n):
        total += s["white"][i] ** 2
        out["explained"][i] = s["explained"][i]
        s["fast_ratio"][i] = abs(s["left"][i]) / out["band_fast"][i]
        out["ratio"][i] = max(s["fast_ratio"][i], s["slow_ratio"][i])
        s["alone"][i], s["beside"][i] = s["left"][i], s["left"][i]
    s["body_ratio"] = total / c["body_limit"]
    if floating:
        _beside_feet(params, inputs, state, outputs)
    for i in range(n):
        s["ratio_peak"][i] = max(s["ratio_peak"][i], out["ratio"][i])
    out["body_ratio"] = s["body_ratio"]


@kernel
def _beside_feet(params: Block, inputs: Block, state: Block, outputs: Block) -> None:
    """Take as ratio of a row what it has beyond all others; add to that of the body what feet should not do.

    The slow residual is looked at every evidence step: a push on the trunk is little beside the noise of its
    acceleration, but lasts.
    """
    c, x, s, out = params[0], inputs[0], state[0], outputs[0]
    n = s["left"].shape[0]
    share = c["body_share"][feet.dofs_taken(state)]
    if s["sampled"] + 1 >= c["evidence_samples"]:
        for i in range(n):
            s["white"][i] = s["explained_var"][i] + c["cusum_sd"][i] ** 2
            if x["judged"][i] == 0:
                s["white"][i] += band.BLIND * c["rated"][i] ** 2
        band.covariance(s["var_slow"], c["rho"], s["white"], s["slow_R"])
        lasting.widen(state, s["slow_R"])
        feet.widen(params, state, s["slow_R"])
        evidence.factor(s["slow_R"], s["slow_factor"])
        for i in range(n):
            s["white"][i] = s["r_slow"][i] - s["explained"][i]
        evidence.whiten(s["slow_factor"], s["white"])
        feet_kernels.invert(s["slow_factor"], s["inverse"])
        feet_kernels.pulls(s["inverse"], s["white"], s["pull"], s["alone"], s["alone_sd"])
        s["slow_body_ratio"] = 0.0
        for i in range(n):
            s["slow_ratio"][i] = abs(s["alone"][i]) / (c["slow_limit"] * s["alone_sd"][i])
            s["slow_body_ratio"] += s["white"][i] ** 2 / (share * c["slow_body_limit"])
            s["alone_slow"][0, i], s["alone_slow"][1, i] = s["alone"][i], s["alone_sd"][i]
        s["white"][:] = s["left"]
        evidence.whiten(s["R_factor"], s["white"])
    feet_kernels.invert(s["R_factor"], s["inverse"])
    feet_kernels.pulls(s["inverse"], s["white"], s["pull"], s["alone"], s["alone_sd"])
    for i in range(n):
        out["band_fast"][i] = c["row_limit"] * s["alone_sd"][i]
        out["band_slow"][i] = c["slow_limit"] * s["alone_slow"][1, i]
        s["fast_ratio"][i] = abs(s["alone"][i]) / out["band_fast"][i]
        out["ratio"][i] = max(s["fast_ratio"][i], s["slow_ratio"][i])
    s["body_ratio"] /= share
    feet.forces(params, state, outputs)


@kernel
def _respond(params: Block, state: Block) -> None:
    """Pass torque, friction's shape and velocity through the very filter that makes the fast residual."""
    c, s = params[0], state[0]
    dt, form = s["dt_s"], c["form"]
    if dt == 0.0:
        s["respond"][:, :, :2] = 0.0
        s["through_filter"][:, :2] = 0.0
        return
    k = ledger.gain_step(dt, c["period_ns"], c["gain_fast"].shape[0])
    for i in range(s["tau"].shape[0]):
        for f in range(3):
            w = s["tau"][i]
            if f == 1:
                w = math.tanh(s["v_at"][i] / c["friction_velocity"][i])
            elif f == 2:
                w = s["v_at"][i]
            _pass(form, w, dt, c["gain_fast"][k, i], c["pole_fast"], s["respond"][i, f])
            s["feature"][i, f] = s["respond"][i, f, 2]
    for j in range(c["link_row"].shape[0]):
        i = c["link_row"][j]
        _pass(form, s["through"][j], dt, c["gain_fast"][k, i], c["pole_fast"], s["through_filter"][j])
    link_torque.features(params, state)


@kernel
def _pass(form: int, w: float, dt: float, gain: Floats, pole: float, x: Floats) -> None:
    """Advance the response x (3) of the residual's form to a torque w."""
    if form == _JOINT_SPACE:
        ledger.respond_joint_space(w, dt, gain, x)
    elif form == _FIRST_ORDER:
        ledger.respond_first_order(w, dt, pole, x)
    else:
        ledger.respond_second_order(w, dt, pole, x)


@kernel
def judge(params: Block, inputs: Block, state: Block, outputs: Block) -> None:
    """Open an event when the residual leaves its band or drifts off, end it after a time of quiet."""
    c, x, s, out = params[0], inputs[0], state[0], outputs[0]
    t_ns = s["at_ns"]
    s["step_due"] = 0
    out["settling"] = 1 if t_ns < s["settled_ns"] else 0
    if out["settling"] != 0 or out["feet_unknown"] != 0:
        if out["feet_unknown"] != 0 and s["event_open"] != 0:
            end(params, state, outputs)
        s["ring_held"] = 0
        s["sampled"] = 0
        s["slow_ratio"][:] = 0.0
        s["slow_body_ratio"] = 0.0
        s["event_quiet_ns"] = t_ns
        return
    drifted = _sum_up(params, inputs, state)
    lost = feet.lost(params, inputs, state, outputs)
    row = band.largest(out["ratio"], x["judged"])
    ratio = 0.0
    if row >= 0:
        ratio = max(out["ratio"][row], s["body_ratio"], s["slow_body_ratio"], s["foot_lasts"])
    if max(ratio, s["foot_now"]) < c["onset_ratio"] and lost < 0:
        s["event_quiet_ns"] = t_ns
    s["step_due"] = 1 if _remember(params, inputs, state, outputs) else 0
    if ratio > 1.0 and (s["event_open"] == 0 or s["event_drifted"] != 0):
        # An event that began by drifting and now breaks out is another one: it is weighed from here.
        s["event_drifted"] = 0
        _open(state, outputs, row, s["event_quiet_ns"])
    elif drifted >= 0 and s["event_open"] == 0:
        s["event_drifted"] = 1
        _open(state, outputs, drifted // 2, s["cusum_since_ns"][drifted // 2, drifted % 2])
    elif lost >= 0 and s["event_open"] == 0:
        _open(state, outputs, row, s["foot_felt_ns"][lost])
    if s["event_open"] == 0:
        return
    if ratio > s["event_ratio"]:
        s["event_ratio"] = ratio
        s["event_row"] = row
        s["event_size"] = s["alone"][row]
    drifts = lost >= 0
    for i in range(s["cusum"].shape[0]):
        if x["judged"][i] != 0 and s["event_drifted"] != 0:
            drifts = drifts or max(s["cusum"][i, 0], s["cusum"][i, 1]) > 0.5 * c["cusum_limit"]
    if drifts or ratio > c["onset_ratio"]:
        s["event_loud_ns"] = t_ns
    if drifts or ratio > c["quiet_ratio"]:
        s["event_over_ns"] = t_ns
    elif t_ns - s["event_over_ns"] > c["quiet_ns"]:
        stays = lasting.outlasts(params, state) and lasting.confirm(params, state, outputs, s["sure_of"])
        if not stays:
            end(params, state, outputs)


@kernel
def _open(state: Block, outputs: Block, row: int, onset_ns: int) -> None:
    s = state[0]
    if s["event_open"] == 0:
        outputs[0]["notice"] |= _EVENT_OPENED
    s["event_open"], s["weigh_afresh"], s["event_doubtful"] = 1, 1, 0
    s["event_onset_ns"] = onset_ns
    s["event_loud_ns"], s["event_over_ns"] = s["at_ns"], s["at_ns"]
    s["event_row"], s["event_ratio"], s["event_size"] = row, 0.0, s["alone"][row]


@kernel
def end(params: Block, state: Block, outputs: Block) -> None:
    """Close the event; begin the sums anew, and tracking, which may have learnt of the cause."""
    s = state[0]
    tracking.forget(params[0]["track_sd"], s["track"], s["track_P"])
    s["event_open"] = 0
    s["weighed"] = 0
    s["cusum"][:] = 0.0
    outputs[0]["notice"] |= _EVENT_ENDED


@kernel
def _sum_up(params: Block, inputs: Block, state: Block) -> int:
    """Advance the sums of block means; return 2 * row + direction of one beyond its limit, or -1."""
    c, x, s = params[0], inputs[0], state[0]
    n = s["left"].shape[0]
    for i in range(n):
        # A joint that stands hides any torque up to its Coulomb friction, for as long as it stands.
        if s["loaded"][i] != 0:
            s["cusum_sum"][i] = 0.0  # the force of a foot is not known well enough
        elif s["cause"][i, band.STANDS] < _STANDING:
            sd = math.sqrt(s["var_slow"][i] + s["explained_var"][i] + c["cusum_sd"][i] ** 2)
            s["cusum_sum"][i] += (s["row_slow"][i] - s["explained"][i]) / sd
    s["cusum_count"] += 1
    if s["cusum_count"] < c["cusum_samples"]:
        return -1
    found, largest = -1, c["cusum_limit"]
    for i in range(n):
        mean = s["cusum_sum"][i] / s["cusum_count"]
        mean = min(max(mean, -_CLIP), _CLIP)
        s["cusum_sum"][i] = 0.0
        if x["judged"][i] == 0:
            s["cusum"][i] = 0.0
            continue
        band.cusum(mean, c["cusum_reference"], s["cusum"][i])
        for k in range(2):
            if s["cusum"][i, k] == 0.0:
                s["cusum_since_ns"][i, k] = s["at_ns"]
            if s["cusum"][i, k] > largest:
                found, largest = 2 * i + k, s["cusum"][i, k]
            # What stands beyond the limit is known; a higher sum would only take longer to come down.
            s["cusum"][i, k] = min(s["cusum"][i, k], 1.5 * c["cusum_limit"])
    s["cusum_count"] = 0
    return found


@kernel
def _remember(params: Block, inputs: Block, state: Block, outputs: Block) -> bool:
    """Every evidence step: keep what weighing needs, and let tracked friction follow while all is quiet."""
    c, x, s = params[0], inputs[0], state[0]
    s["sampled"] += 1
    if s["sampled"] < c["evidence_samples"]:
        return False
    s["sampled"] = 0
    k = s["ring_head"] % RING
    s["ring_ns"][k] = s["at_ns"]
    s["ring_loud"][k] = 1 if s["event_quiet_ns"] < s["at_ns"] else 0
    s["ring_q"][k] = s["q_at"]
    s["ring_v"][k] = s["v_at"]
    for i in range(s["a"].shape[0]):
        s["ring_a"][k, i] = s["a"][i] + s["e_slow"][i]
    s["ring_r"][k] = s["left"]
    s["ring_beside"][k] = s["beside"]
    s["ring_foot_J"][k] = s["foot_J"]
    s["ring_carries"][k] = s["foot_carries"]
    s["ring_var"][k] = s["var_fast"]
    s["ring_stand"][k] = s["var_stand"]
    for i in range(s["left"].shape[0]):
        s["ring_extra"][k, i] = s["explained_var"][i]
    for i in range(s["a"].shape[0]):
        # Whatever acts on the robot may also turn the friction that a standing joint hides.
        s["ring_hidden"][k, i] = (
            c["hides"][s["grounded"]] * c["coulomb"][i] * s["cause"][i, band.STANDS]
        ) ** 2
    link_torque.hidden(params, s["ring_hidden"][k])
    s["ring_feature"][k] = s["feature"]
    s["ring_head"] += 1
    s["ring_held"] = min(s["ring_held"] + 1, RING)
    if s["event_open"] == 0 and x["guided"] == 0:
        dt_s = c["evidence_samples"] * c["period_ns"] * 1e-9
        for i in range(s["left"].shape[0]):
            if x["judged"][i] == 0 or lasting.holds_row(state, i) or link_torque.is_link_side(params, i):
                continue
            variance = s["var_fast"][i]
            if s["loaded"][i] != 0:
                variance = max(variance, s["alone_sd"][i] ** 2 - s["explained_var"][i])
            variance = c["track_noise"] * (variance + _STUCK * s["var_stand"][i])
            tracking.track(
                i, s["alone"][i] + s["tracked"][i], variance, s["feature"], c["track_sd"],
                c["track_keep"], c["track_clip"], s["track"], s["track_P"],
            )  # fmt: skip
            trend.follow(params, state, outputs, i, variance, dt_s)
    return True
