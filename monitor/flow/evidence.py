"""What explains the event: all candidates weighed against the same residuals, spread over several samples.

An evidence step is taken for every entry of the ring from the onset on. Its stages: prepare (geometry, noise,
constant candidates), then smooth candidates in parts, then the posterior. So no sample carries all the work.
"""

from __future__ import annotations

import math

from monitor.explain import ACTUATOR, CONTACT, FOOTHOLD, TOUCHDOWN, fill
from monitor.flow import feet, lasting, link_torque
from monitor.flow.layout import RING, Block, Notice
from monitor.kernels import band
from monitor.kernels import evidence as ev
from monitor.kernels.dynamics import dynamics
from monitor.kernels.jit import kernel

_WEIGHED = int(Notice.WEIGHED)
_STEP = 1e-5  # rad or m: for the slope of inverse dynamics
_IMPOSSIBLE = -1e9  # a log evidence
_RISE_S = 0.005  # of the fast residual
_KNOWN_NS = 40_000_000  # certainty for so long suffices for what is known
_FOOT_NS = 12_000_000  # certainty for so long suffices for what a foot met or missed
_SHIFTS = 0.3
_WATCHED = 2  # evidence steps that a foot without force was watched before its event opened
_BEFORE = 10  # entries before the onset that tell the slow noise
_PAUSE_NS = 50_000_000
_SHAKEN = 0.03  # share of a standing joint's friction that jumps about while something acts
_NEAR = 0.1  # a smooth cause begins so near zero, in prior sd


@kernel
def begin(params: Block, inputs: Block, state: Block) -> None:
    """Forget all evidence; go back to the event's onset, as far as the ring reaches."""
    s = state[0]
    s["weigh_afresh"] = 0
    s["weighed"] = 0
    for f in range(s["foothold_log"].shape[0]):
        if s["foothold_log"][f] > 0.0:
            s["weighed"] = _WATCHED
    s["weigh_stage"] = 0
    s["sure_of"] = -1
    s["concluded"] = 0
    oldest = s["ring_head"] - min(s["ring_held"], RING - 2 - params[0]["column_lag"])
    s["weigh_next"] = s["ring_head"]
    while s["weigh_next"] > oldest and s["ring_ns"][(s["weigh_next"] - 1) % RING] > s["event_onset_ns"]:
        s["weigh_next"] -= 1
    n = s["null_s"].shape[0]
    s["null_log"], s["other_log"] = 0.0, 0.0
    _forget_slow(s["null_s"], s["null_P"])
    _look_before(params, inputs, state, max(oldest, s["weigh_next"] - _BEFORE))
    for i in range(n):
        s["other_s"][i], s["quiet_s"][i] = s["null_s"][i], s["null_s"][i]
        for j in range(n):
            s["other_P"][i, j], s["quiet_P"][i, j] = s["null_P"][i, j], s["null_P"][i, j]
    s["constant_s"][:] = 0.0
    s["constant_A"][:] = 0.0
    s["constant_b"][:] = 0.0
    s["constant_x"][:] = 0.0
    s["constant_log"][:] = 0.0
    s["constant_acts"][:] = 0.0
    s["constant_ended"][:] = _IMPOSSIBLE
    s["smooth_log"][:] = 0.0
    s["smooth_acts"][:] = 0.0
    s["smooth_ended"][:] = _IMPOSSIBLE
    s["constant_size"][:] = 0.0
    s["constant_size_sd"][:] = 0.0
    s["smooth_misfit"][:] = 0.0
    s["smooth_peak_size"][:] = 0.0
    s["smooth_peak"][:] = 0.0
    for k in range(s["smooth_log"].shape[0]):
        d = params[0]["smooth_columns"][k]
        m = n + 2 * d + params[0]["smooth_settles"][k]
        if params[0]["smooth_family"][k] == TOUCHDOWN:
            entry = min(s["weigh_next"], s["ring_head"] - 1) % RING
            feet.spare(state, params[0]["smooth_index"][k], entry, s["smooth_acts"], k)
        P = s["smooth_P"][k, : m * m].reshape((m, m))
        ev.smooth_start(d, _NEAR, s["null_s"], s["null_P"], s["smooth_x"][k], P)


@kernel
def _look_before(params: Block, inputs: Block, state: Block, first: int) -> None:
    """Find the slow noise from the entries before the event, so that the event is not taken for it."""
    s = state[0]
    for k in range(first, s["weigh_next"]):
        entry = k % RING
        _noise(params, inputs, state, entry)
        s["x_y"][:] = s["ring_r"][entry]
        ev.factor(s["R"], s["x_factor"])
        ev.whiten(s["x_factor"], s["x_y"])
        ev.whiten_slow(s["x_factor"], s["x_d"], s["x_G"])
        ev.null_step(
            s["x_y"], s["x_G"], params[0]["slow_keep"], s["null_s"], s["null_P"],
            s["x_gain"], s["x_innovation"], s["x_spread"],
        )  # fmt: skip


@kernel
def _forget_slow(x: Block, P: Block) -> None:
    """Set slow states to what is known of them at first: nothing."""
    for i in range(x.shape[0]):
        x[i] = 0.0
        for j in range(x.shape[0]):
            P[i, j] = 1.0 if i == j else 0.0


@kernel
def weigh(params: Block, inputs: Block, state: Block, outputs: Block) -> None:
    """Do this sample's share of the work on the event that is open."""
    c, s = params[0], state[0]
    behind = s["ring_head"] - s["weigh_next"] > 1
    # While nothing stands out there is nothing to explain: the cause may have ended.
    passed = s["weigh_stage"] == 0 and s["at_ns"] - s["event_loud_ns"] > _PAUSE_NS
    lasts = s["sure_of"] >= 0 and lasting.may_last(c["of_family"][s["sure_of"]])
    if passed and s["sure_of"] >= 0 and not lasts:
        s["concluded"] = 1
    if s["concluded"] != 0 or (passed and not lasts):
        s["weigh_next"] = s["ring_head"]
        return
    for _ in range(c["stages_at_once"] * (2 if behind else 1)):
        if s["weigh_next"] >= s["ring_head"]:
            return
        if s["weigh_next"] < s["ring_head"] - RING:
            s["weigh_next"] = s["ring_head"] - RING
            s["weigh_stage"] = 0
        if s["weigh_stage"] == 0:
            _prepare(params, inputs, state)
            _constants(params, state)
        else:
            _smooth(params, state, s["weigh_stage"] - 1)
        s["weigh_stage"] += 1
        if s["weigh_stage"] >= c["evidence_stages"]:
            s["weigh_stage"] = 0
            s["weigh_next"] += 1
            s["weighed"] += 1
            posterior(params, state, outputs)
            outputs[0]["notice"] |= _WEIGHED
            if _conclude(params, inputs, state, outputs):
                return


@kernel
def _conclude(params: Block, inputs: Block, state: Block, outputs: Block) -> bool:
    """Stop weighing what is certain for long: a lasting fault becomes part of the model and ends its event.

    At once where another row leaves its band, or where the fault is known and has only changed.
    """
    c, x, s, p = params[0], inputs[0], state[0], outputs[0]["probability"]
    best = 2
    for i in range(3, p.shape[0]):
        if p[i] > p[best]:
            best = i
    if p[best] < c["sure"] or s["event_doubtful"] != 0:
        s["sure_of"] = -1
        return False
    best -= 2
    if s["sure_of"] != best:
        s["sure_of"], s["sure_since_ns"] = best, s["at_ns"]
    sure_ns = s["at_ns"] - s["sure_since_ns"]
    family = c["of_family"][best]
    if family == FOOTHOLD or (family == TOUCHDOWN and sure_ns > _FOOT_NS):
        s["concluded"] = 1  # what follows is a stumble
        return False
    known = lasting.slot_of(params, state, best) >= 0
    if known and sure_ns > _KNOWN_NS:
        return lasting.confirm(params, state, outputs, best)
    if sure_ns > c["sure_ns"] or (sure_ns > _KNOWN_NS and _elsewhere(params, x, state, outputs, best)):
        if lasting.confirm(params, state, outputs, best):
            return True
        if sure_ns > c["sure_ns"]:
            s["concluded"] = 1
    return False


@kernel
def _elsewhere(params: Block, x: Block, state: Block, outputs: Block, best: int) -> bool:
    """Whether a row other than that of a faulty actuator is out of its band."""
    c = params[0]
    if c["of_family"][best] != ACTUATOR:
        return False
    for i in range(c["rated"].shape[0]):
        if i != c["of_index"][best] // 8 and x["judged"][i] != 0 and outputs[0]["ratio"][i] > 1.0:
            return True
    return False


@kernel
def follow(params: Block, inputs: Block, state: Block, outputs: Block) -> None:
    """Every evidence step: let the parameters of lasting faults follow."""
    s = state[0]
    if s["event_open"] == 0 and lasting.needs_geometry(state):
        _geometry(params, inputs, state, s["ring_head"] - 1)
    lasting.track(params, state, outputs, params[0]["evidence_samples"] * params[0]["period_ns"] * 1e-9)


@kernel
def _inverse_dynamics(params: Block, inputs: Block, state: Block, entry: int) -> None:
    """Fill x_id with the torque of ring entry's v and a at posture x_q, and all work arrays with it."""
    c, s = params[0], state[0]
    dynamics(
        c["parent"], c["kind"], c["dof"], c["multiplier"], c["offset"], c["R_PJ"], c["p_PJ"], c["axis"],
        inputs[0]["E"], c["armature"], c["gravity"], s["x_q"], s["ring_v"][entry],
        s["x_R_W"], s["x_p_W"], s["x_S"], s["x_Sd"], s["x_V"], s["x_Ic"], s["x_Bc"],
        s["x_M"], s["x_C"], s["x_g"], s["x_p"], s["x_Ctv"],
    )  # fmt: skip
    for i in range(s["x_id"].shape[0]):
        total = c["gravity_part"][i] * s["x_g"][i]
        for j in range(s["x_id"].shape[0]):
            total += s["x_M"][i, j] * s["ring_a"][entry, j] + s["x_C"][i, j] * s["ring_v"][entry, j]
        s["x_id"][i] = total


@kernel
def _geometry(params: Block, inputs: Block, state: Block, number: int) -> None:
    """Fill poses, twists and their rates, and the slope of inverse dynamics for an entry of the ring.

    They are taken a little earlier: what a cause did then is what the residual shows now.
    """
    c, s = params[0], state[0]
    held = min(s["ring_held"], RING - 1)
    entry = max(number - c["column_lag"], s["ring_head"] - held) % RING
    n = s["x_id"].shape[0]
    base = n - c["tau_lag"].shape[0]
    shift = s["x_q"].shape[0] - n
    s["x_q"][:] = s["ring_q"][entry]
    for i in range(base, n):
        s["x_q"][i + shift] += _STEP
        _inverse_dynamics(params, inputs, state, entry)
        s["slope"][i] = s["x_id"]
        s["x_q"][i + shift] -= _STEP
    _inverse_dynamics(params, inputs, state, entry)
    for i in range(base, n):
        for j in range(n):
            s["slope"][i, j] = (s["slope"][i, j] - s["x_id"][j]) / _STEP
    _accelerations(params, state, entry)
    lasting.refresh(params, state)


@kernel
def _prepare(params: Block, inputs: Block, state: Block) -> None:
    """Fill geometry and the whitened noise model of the next entry."""
    s = state[0]
    entry = s["weigh_next"] % RING
    _geometry(params, inputs, state, s["weigh_next"])
    s["x_feature"][:] = s["ring_feature"][entry]
    _noise(params, inputs, state, entry)
    _nothing_or_other(params, state, entry)


@kernel
def _noise(params: Block, inputs: Block, state: Block, entry: int) -> None:
    """Fill R, the fast part of the noise at one entry, and x_d, the sd of the slow part."""
    c, x, s = params[0], inputs[0], state[0]
    # What a joint hides that stands stays as it is; under a foot it changes with every shift of load.
    stuck = 0.01 if s["v"].shape[0] == c["tau_lag"].shape[0] else _SHIFTS
    for i in range(s["x_d"].shape[0]):
        stands = s["ring_stand"][entry, i]
        var = s["ring_var"][entry, i] - stands
        # What an explanation cannot get right of a large residual: noise that lasts a while, and noise that
        # comes and goes with the motion. White noise stands for the latter: as strong as dependent steps are.
        rough = (c["model_error"] * s["ring_beside"][entry, i]) ** 2
        slow = c["slow_share"][i] * var + stands + s["ring_extra"][entry, i] + c["cusum_sd"][i] ** 2
        slow += s["ring_hidden"][entry, i]
        s["x_d"][i] = math.sqrt(slow + rough)
        s["x_y"][i] = (1.0 - c["slow_share"][i]) * var + stuck * stands + _SHAKEN * s["ring_hidden"][entry, i]
        s["x_spread"][i] = c["dependent"][s["grounded"]] * rough
        if x["judged"][i] == 0:
            s["x_spread"][i] += band.BLIND * c["rated"][i] ** 2
    band.covariance(s["x_y"], c["rho"], s["x_spread"], s["R"])
    lasting.widen(state, s["R"])
    feet.widen_at(params, state, entry, s["R"])
    link_torque.forget(params, state, s["R"])


@kernel
def _accelerations(params: Block, state: Block, entry: int) -> None:
    """Fill x_Vd: rates of the bodies' twists, gravity taken off."""
    c, s = params[0], state[0]
    N = c["parent"].shape[0]
    for k in range(3):
        s["x_Vd"][N, k] = 0.0
        s["x_Vd"][N, 3 + k] = -c["gravity"][k]
    for i in range(N):
        d = c["dof"][i]
        a, v = s["ring_a"][entry, d], s["ring_v"][entry, d]
        for k in range(6):
            s["x_Vd"][i, k] = s["x_Vd"][c["parent"][i], k] + s["x_S"][i, k] * a + s["x_Sd"][i, k] * v


@kernel
def _nothing_or_other(params: Block, state: Block, entry: int) -> None:
    """Weigh `something else` and `nothing`; leave whitened residual, slow map and gains to the candidates."""
    c, s = params[0], state[0]
    n = s["x_y"].shape[0]
    L, keep = s["x_factor"], c["slow_keep"]
    for i in range(n):
        s["x_spread_kept"][i] = s["R"][i, i]
        s["R"][i, i] += c["other_sd"][i] ** 2
        s["x_y"][i] = s["ring_r"][entry, i]
    wide = ev.factor(s["R"], L)
    ev.whiten(L, s["x_y"])
    ev.whiten_slow(L, s["x_d"], s["x_G"])
    other = ev.null_step(
        s["x_y"], s["x_G"], keep, s["other_s"], s["other_P"], s["x_gain"], s["x_innovation"], s["white"]
    )
    for i in range(n):
        s["R"][i, i] = s["x_spread_kept"][i]
        s["x_y"][i] = s["ring_r"][entry, i]
    narrow = ev.factor(s["R"], L)
    ev.whiten(L, s["x_y"])
    ev.whiten_slow(L, s["x_d"], s["x_G"])
    null = ev.null_step(
        s["x_y"], s["x_G"], keep, s["null_s"], s["null_P"], s["x_gain"], s["x_innovation"], s["x_spread"]
    )
    s["other_log"] += other - 0.5 * (wide - narrow)
    # What is left when a cause has ended: nothing, and slow noise that has learned nothing of the cause.
    s["x_quiet_s"][:] = s["quiet_s"]
    s["x_quiet_P"][:] = s["quiet_P"]
    s["quiet_log"] = ev.null_step(
        s["x_y"], s["x_G"], keep, s["x_quiet_s"], s["x_quiet_P"],
        s["x_gain_kept"], s["x_spread_kept"], s["white"],
    )  # fmt: skip
    if s["ring_loud"][entry] == 0:
        s["quiet_s"][:] = s["x_quiet_s"]
        s["quiet_P"][:] = s["x_quiet_P"]
    s["null_log"] += null


@kernel
def _fill(params: Block, state: Block, family: int, index: int) -> None:
    """Fill x_H with a candidate's columns."""
    c, s = params[0], state[0]
    fill(
        family, index, s["x_feature"], s["slope"], s["x_M"], c["body_axis"], c["body_centre"], c["foot_axis"],
        c["foot_point"], c["foot_radius"], c["up"], c["load_axis"], c["load_centre"], c["parent"], c["dof"],
        s["x_S"], s["x_V"], s["x_Vd"], s["x_R_W"], s["x_p_W"], c["link_row"], c["armature"], s["x_H"],
    )  # fmt: skip


@kernel
def _constants(params: Block, state: Block) -> None:
    """Advance the evidence of all constant candidates."""
    c, s = params[0], state[0]
    n = s["x_y"].shape[0]
    after = s["weighed"] * c["evidence_samples"] * c["period_ns"] * 1e-9 / _RISE_S
    fades = math.exp(-after)
    for k in range(c["constant_of"].shape[0]):
        _fill(params, state, c["constant_family"][k], c["constant_index"][k])
        # What begins at once is seen to rise through the residual's filter: value, and two shapes that fade.
        d = 3
        for i in range(n):
            s["x_H"][i, 0] *= c["constant_sd"][k]
            s["x_H"][i, 1] = s["x_H"][i, 0] * fades
            s["x_H"][i, 2] = s["x_H"][i, 1] * after
        ev.whiten_columns(s["x_factor"], s["x_H"], d)
        A, b = s["constant_A"][k], s["constant_b"][k]
        ev.constant_step(
            s["x_H"], d, s["x_G"], c["slow_keep"], s["x_gain"], s["x_innovation"], s["x_spread"],
            s["constant_s"][k], A, b,
        )  # fmt: skip
        acted = s["constant_acts"][k]
        acts = s["null_log"] + ev.constant_evidence(A, b, d, s["x_L"], s["constant_x"][k])
        sd = ev.first_sd(s["x_L"], d)
        one_sided = _one_sided(params, state, c["constant_one_sided"][k], c["constant_of"][k])
        acts += ev.worth(s["constant_x"][k, 0], sd, c["least"], one_sided)
        ended = _ended(s["constant_ended"][k], acted, c["constant_ends"][k], s["quiet_log"])
        s["constant_acts"][k], s["constant_ended"][k] = acts, ended
        s["constant_log"][k] = _either(acts, ended)
        if acts > ended:
            s["constant_size"][k] = s["constant_x"][k, 0] * c["constant_sd"][k]
            s["constant_size_sd"][k] = c["constant_sd"][k] * sd


@kernel
def _one_sided(params: Block, state: Block, declared: int, explanation: int) -> int:
    """Return whether a constant must be positive; a fault that lasts may also become less."""
    return 0 if lasting.slot_of(params, state, explanation) >= 0 else declared


@kernel
def _either(a: float, b: float) -> float:
    """Return log(exp a + exp b)."""
    top = max(a, b)
    return top + math.log(math.exp(a - top) + math.exp(b - top))


@kernel
def _ended(ended: float, acted: float, chance: float, quiet: float) -> float:
    """Return the evidence of a cause that has ended: some time before, or just before this step."""
    return _either(ended, acted + chance) + quiet


@kernel
def _smooth(params: Block, state: Block, part: int) -> None:
    """Advance the evidence of one part of the smooth candidates."""
    c, s = params[0], state[0]
    n, count = s["x_y"].shape[0], c["smooth_of"].shape[0]
    parts = c["evidence_stages"] - 1
    for k in range(count * part // parts, count * (part + 1) // parts):
        d = c["smooth_columns"][k]
        settles = c["smooth_settles"][k]
        m = n + 2 * d + settles
        _fill(params, state, c["smooth_family"][k], c["smooth_index"][k])
        for i in range(n):
            for j in range(d):
                s["x_H"][i, j] *= c["smooth_sd"][k, j]
        ev.whiten_columns(s["x_factor"], s["x_H"], d)
        P = s["smooth_P"][k, : m * m].reshape((m, m))
        log_evidence, misfit = ev.smooth_step(
            s["x_H"],
            s["x_y"],
            s["x_G"],
            d,
            settles,
            c["slow_keep"],
            c["smooth_dt_T"][k],
            c["smooth_moves"][k],
            s["smooth_x"][k],
            P,
            s["x_u"],
        )
        acted = s["smooth_acts"][k]
        ended = _ended(s["smooth_ended"][k], acted, c["smooth_ends"][k], s["quiet_log"])
        s["smooth_acts"][k], s["smooth_ended"][k] = acted + log_evidence, ended
        acts = s["smooth_acts"][k]
        value = 2 * d + n  # where the first component settles
        if settles > 0 and (settles == 1 or c["smooth_sized"][k] == 1):
            sd = math.sqrt(P[value, value])
            one_sided = _one_sided(params, state, c["smooth_one_sided"][k], c["smooth_of"][k])
            acts += ev.worth(s["smooth_x"][k, value], sd, c["least"], one_sided)
        s["smooth_log"][k] = _either(acts, ended)
        s["smooth_misfit"][k] += misfit
        _keep_peak(params, state, k, d, P)


@kernel
def _keep_peak(params: Block, state: Block, k: int, d: int, P: Block) -> None:
    """Keep the estimate of a smooth candidate where it was largest: force, or torque, with its sd."""
    c, s = params[0], state[0]
    x, sd = s["smooth_x"][k], c["smooth_sd"][k]
    if c["smooth_settles"][k] > 0 and c["smooth_sized"][k] == 1:
        # What settles is as large as the value it settles at, while it acts.
        value = 2 * d + s["x_y"].shape[0]
        if s["smooth_acts"][k] > s["smooth_ended"][k]:
            s["smooth_peak_size"][k] = x[value] * sd[0]
            s["smooth_peak_sd"][k] = math.sqrt(P[value, value]) * sd[0]
        return
    size2 = 0.0
    for i in range(c["smooth_sized"][k]):
        size2 += (x[i] * sd[i]) ** 2
    if size2 < s["smooth_peak_size"][k] ** 2:  # equal: no joint feels the force, only its moment
        return
    # All of the uncertainty counts: a force may have a part that no joint feels.
    variance = 0.0
    for i in range(c["smooth_sized"][k]):
        variance += sd[i] ** 2 * P[i, i]
    s["smooth_peak_size"][k] = math.sqrt(size2)
    s["smooth_peak_sd"][k] = math.sqrt(variance)
    for i in range(d):
        s["smooth_peak"][k, i] = x[i] * sd[i]
    if c["smooth_family"][k] == CONTACT:
        _to_body(s["x_R_W"][c["body_axis"][c["smooth_index"][k]]], s["smooth_peak"][k])


@kernel
def _to_body(R: Block, wrench: Block) -> None:
    """Turn a force and a moment from world axes into those of a body with orientation R."""
    for half in range(0, 6, 3):
        a, b, c = wrench[half], wrench[half + 1], wrench[half + 2]
        for i in range(3):
            wrench[half + i] = R[0, i] * a + R[1, i] * b + R[2, i] * c


@kernel
def posterior(params: Block, state: Block, outputs: Block) -> None:
    """Fill the probability of every explanation: rates times evidence, candidates of one added up.

    Evidence counts `evidence_weight` times: the model is not quite right, residuals depend on each other more
    than it knows, and a posterior that takes it at its word is too sure ("Inconsistency of Bayesian inference
    for misspecified linear models, and a proposal for repairing it", Bayesian Analysis 2017,
    doi 10.1214/17-BA1085). The weight is what makes probabilities on simulated arms come true.
    """
    c, s, p = params[0], state[0], outputs[0]["probability"]
    X = p.shape[0]
    weight = c["evidence_weight"][s["grounded"]]
    top = max(s["null_log"], s["other_log"])
    for k in range(s["constant_log"].shape[0]):
        top = max(top, s["constant_log"][k])
    for k in range(s["smooth_log"].shape[0]):
        top = max(top, s["smooth_log"][k])
    for f in range(s["foothold_log"].shape[0]):
        top = max(top, s["null_log"] + s["foothold_log"][f])
    p[:] = 0.0
    p[0] = math.exp(weight * (s["null_log"] - top))
    p[1] = math.exp(weight * (s["other_log"] - top))
    for k in range(s["constant_log"].shape[0]):
        log = weight * (s["constant_log"][k] - top)
        p[2 + c["constant_of"][k]] += math.exp(log + c["constant_share"][k])
    for k in range(s["smooth_log"].shape[0]):
        log = weight * (s["smooth_log"][k] - top)
        p[2 + c["smooth_of"][k]] += math.exp(log + c["smooth_share"][k])
    for f in range(s["foothold_log"].shape[0]):
        p[2 + c["foothold_of"][f]] += math.exp(weight * (s["null_log"] + s["foothold_log"][f] - top))
    total = 0.0
    for i in range(X):
        p[i] *= math.exp(c["log_rate"][i])
        total += p[i]
    for i in range(X):
        p[i] /= total
