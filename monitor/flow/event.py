"""When does an event begin and end: the residual in its band, sums over time, what is kept to date back."""

from __future__ import annotations

import math

from monitor.flow import lasting, link_torque, trend
from monitor.flow.layout import RING, Block, Floats, Form, Notice
from monitor.kernels import band, evidence, ledger, tracking
from monitor.kernels.jit import kernel

_JOINT_SPACE, _FIRST_ORDER = int(Form.JOINT_SPACE), int(Form.FIRST_ORDER)
_EVENT_OPENED, _EVENT_ENDED = int(Notice.EVENT_OPENED), int(Notice.EVENT_ENDED)
_STANDING = 0.1
_STUCK = 10.0  # the torque that a standing joint hides does not average out
_HIDES = 0.5  # of Coulomb friction
# A single block counts at most so many sd: the sums are for what lasts.
_CLIP = 6.0


@kernel
def into_band(params: Block, inputs: Block, state: Block, outputs: Block) -> None:
    """Fill what is left of the residual when tracked friction is taken off, its covariance and its ratios."""
    c, x, s, out = params[0], inputs[0], state[0], outputs[0]
    _respond(params, state)
    band.causes(
        s["M"], s["a"], s["v_at"], s["tau"], c["friction_velocity"], c["e_variance"], s["dt_s"],
        c["cause_pole"], c["hold_s"], s["held"], s["held_left_s"], s["cause"],
    )  # fmt: skip
    link_torque.causes(params, state)
    band.variance(s["cause"], c["cause_fast"], s["var_fast"])
    band.variance(s["cause"], c["cause_slow"], s["var_slow"])
    band.standing(s["cause"], c["cause_fast"], s["var_stand"])
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
    keep = math.exp(-s["dt_s"] / c["slow_later_s"]) if s["dt_s"] > 0.0 else 0.0
    for i in range(n):
        s["explained_slow"][i] += (1.0 - keep) * (s["explained"][i] - s["explained_slow"][i])
        # What made the slow residual large stays in it for longer than its cause does.
        s["var_slow_kept"][i] = max(s["var_slow"][i], keep * s["var_slow_kept"][i])
        slow_var = s["var_slow_kept"][i] + s["R"][i, i] - s["var_fast"][i]
        out["band_fast"][i] = c["row_limit"] * math.sqrt(s["R"][i, i])
        out["band_slow"][i] = c["slow_limit"] * math.sqrt(slow_var)
    link_torque.forget(params, state, s["R"])
    evidence.factor(s["R"], s["R_factor"])
    s["white"][:] = s["left"]
    evidence.whiten(s["R_factor"], s["white"])
    total = 0.0
    for i in range(n):
        total += s["white"][i] ** 2
        out["explained"][i] = s["explained"][i]
        s["fast_ratio"][i] = abs(s["left"][i]) / out["band_fast"][i]
        s["slow_ratio"][i] = abs(s["row_slow"][i] - s["explained_slow"][i]) / out["band_slow"][i]
        out["ratio"][i] = max(s["fast_ratio"][i], s["slow_ratio"][i])
        s["ratio_peak"][i] = max(s["ratio_peak"][i], out["ratio"][i])
    s["body_ratio"] = total / c["body_limit"]
    out["body_ratio"] = s["body_ratio"]


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
    if out["settling"] != 0:
        s["ring_held"] = 0
        s["sampled"] = 0
        s["event_quiet_ns"] = t_ns
        return
    drifted = _sum_up(params, inputs, state)
    row = band.largest(out["ratio"], x["judged"])
    ratio = max(out["ratio"][row], s["body_ratio"]) if row >= 0 else 0.0
    if ratio < c["onset_ratio"]:
        s["event_quiet_ns"] = t_ns
    s["step_due"] = 1 if _remember(params, inputs, state, outputs) else 0
    if ratio > 1.0 and (s["event_open"] == 0 or s["event_drifted"] != 0):
        # An event that began by drifting and now breaks out is another one: it is weighed from here.
        s["event_drifted"] = 0
        _open(state, outputs, row, s["event_quiet_ns"])
    elif drifted >= 0 and s["event_open"] == 0:
        s["event_drifted"] = 1
        _open(state, outputs, drifted // 2, s["cusum_since_ns"][drifted // 2, drifted % 2])
    if s["event_open"] == 0:
        return
    if ratio > s["event_ratio"]:
        s["event_ratio"] = ratio
        s["event_row"] = row
        s["event_size"] = s["left"][row]
    drifts = False
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
    s["event_row"], s["event_ratio"], s["event_size"] = row, 0.0, s["left"][row]


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
        if s["cause"][i, band.STANDS] < _STANDING:
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
    s["ring_var"][k] = s["var_fast"]
    s["ring_stand"][k] = s["var_stand"]
    for i in range(s["left"].shape[0]):
        s["ring_extra"][k, i] = s["explained_var"][i]
    for i in range(s["a"].shape[0]):
        # Whatever acts on the robot may also turn the friction that a standing joint hides.
        s["ring_hidden"][k, i] = (_HIDES * c["coulomb"][i] * s["cause"][i, band.STANDS]) ** 2
    link_torque.hidden(params, s["ring_hidden"][k])
    s["ring_feature"][k] = s["feature"]
    s["ring_head"] += 1
    s["ring_held"] = min(s["ring_held"] + 1, RING)
    if s["event_open"] == 0 and x["guided"] == 0:
        dt_s = c["evidence_samples"] * c["period_ns"] * 1e-9
        for i in range(s["left"].shape[0]):
            if x["judged"][i] == 0 or lasting.holds_row(state, i) or link_torque.is_link_side(params, i):
                continue
            variance = c["track_noise"] * (s["var_fast"][i] + _STUCK * s["var_stand"][i])
            tracking.track(
                i, s["left"][i] + s["tracked"][i], variance, s["feature"], c["track_sd"],
                c["track_keep"], c["track_clip"], s["track"], s["track_P"],
            )  # fmt: skip
            trend.follow(params, state, outputs, i, variance, dt_s)
    return True
