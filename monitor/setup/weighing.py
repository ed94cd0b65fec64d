"""Fills what events and evidence need into `params`: band, limits, bodies, explanations and their rates."""

from __future__ import annotations

import math
from statistics import NormalDist
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from monitor import explain
from monitor.explain import actuator
from monitor.explain.outline import Candidate, Explanation, Outline
from monitor.flow.layout import LASTING, SMOOTH, Form, Sizes
from monitor.kernels import ledger
from monitor.kernels.dynamics import REVOLUTE
from monitor.robot.robot import Robot
from monitor.robot.shape import bodies
from monitor.robot.tree import WORLD, Tree
from monitor.setup.calibration import Band, body_limit
from monitor.setup.config import Config

Floats = NDArray[np.float64]

SLOW_S = 1.5  # correlation of slow noise
# Rhythm of evidence by degrees of freedom: time between steps [s], stages of a step
# A walker has many more candidates, and each costs more; no sample may cost too much.
RHYTHM = {10: (0.004, 4), 1000: (0.008, 16)}
BLOCK_S = 0.1  # of the sums
HOLD_S = 0.03
LEAST = 0.12  # prior sd: smaller ones are no fault
MODEL_ERROR = 0.03
# How far a model is trusted, off the ground and on planned feet: steps that share one model error, weight of
# evidence, share of Coulomb friction that a standing joint may hide. Found on simulated arms and walkers:
# unknown forces of feet leave the evidence weaker by themselves.
TRUST = ((25.0, 0.5, 0.5), (1.0 / 16.0, 1.0, 0.0))
TRACK_S = 120.0
TRACK_NOISE_S = 0.08  # as long the noise of friction tracking counts as one
TRACK_CLIP = 2.5
OTHER = 0.2  # of rated
# Postures that are tried, and the share below which a change is rounding.
_POSTURES, _UNCHANGED = 5, 1e-9


class Candidates(NamedTuple):
    """Candidates in the order of the blocks, each with the number of its explanation."""

    explanations: tuple[Explanation, ...]
    constant: tuple[tuple[int, Candidate], ...]
    smooth: tuple[tuple[int, Candidate], ...]


def outline(tree: Tree, config: Config, rated: Floats, model: Any) -> Outline:
    """Return the robot as explanations see it."""
    base = tree.n - len(tree.joints)
    body = bodies(tree)
    weight = float(tree.arrays.E[:, 3, 3].sum() * np.linalg.norm(config.robot.gravity_vector))
    return Outline(
        joints=tree.joints,
        units=tuple("N" if kind == "prismatic" else "N m" for kind in tree.joint_kinds),
        base=base,
        rated=rated[base:],
        coulomb=model.coulomb[base:],
        viscous=model.viscous[base:],
        silent=tuple(silent(tree, config)),
        bodies=body.names,
        radius=body.radius,
        telling=np.array(
            [_telling(tree, rated, axis, centre) for axis, centre in zip(body.axis, body.centre, strict=True)]
        ),
        feet=tuple(foot.name for foot in config.robot.foot if base),
        sensed=tuple(tree.joints.index(x.name) for x in config.robot.joint if x.link_torque_sensor),
        weight=max(weight, 1.0),
        carrier=_carrier(tree, config)[0],
        payload=config.explain.largest_load_kg,
        rates={name: getattr(config.explain, f"{name.replace('-', '_')}_per_h") for name in explain.NAMES},
    )


def cannot_tell(tree: Tree, config: Config) -> list[str]:
    """Return in sentences which explanations the sensors of a robot cannot support, and what would help."""
    return [*_like_an_actuator(tree, config), *_without_effect(tree, config), *_behind_the_gear(config)]


def twins(tree: Tree) -> dict[str, str]:
    """Return by link the only joint that forces on it load: its Jacobian has a single row."""
    base = tree.n - len(tree.joints)
    found = {}
    body = bodies(tree)
    for name, axis in zip(body.names, body.axis.tolist(), strict=True):
        rows = set()
        while axis != WORLD:
            rows.add(int(tree.arrays.dof[axis]))
            axis = int(tree.arrays.parent[axis])
        if len(rows) == 1:
            found[name] = tree.joints[rows.pop() - base]
    return found


def _like_an_actuator(tree: Tree, config: Config) -> list[str]:
    """Say which faults of an actuator cannot be told from a force on some link.

    Joints with a torque sensor at the link side are left out: there drive and world are two rows.
    """
    sensed = {joint.name for joint in config.robot.joint if joint.link_torque_sensor}
    links: dict[str, list[str]] = {}
    for link, joint in twins(tree).items():
        links.setdefault(joint, []).append(link)
    return [
        f"a force that loads only joint {joint!r}, as any on {_listed(names)} does, cannot "
        "be told from a fault of its actuator; a torque sensor at the joint's link side or a force sensor at "
        "the base would settle it"
        for joint, names in links.items()
        if joint not in sensed
    ]


def silent(tree: Tree, config: Config) -> list[str]:
    """Return the joints on which neither gravity nor inertia depends, as on one with a vertical axis."""
    robot = Robot(tree, config.robot.gravity_vector)
    rng = np.random.default_rng(0)
    base = tree.n - len(tree.joints)
    moved = np.zeros(len(tree.joints), bool)
    for _ in range(_POSTURES):
        q, v = rng.uniform(-1.0, 1.0, tree.nq), rng.uniform(-1.0, 1.0, tree.n)
        q[3:7] /= np.linalg.norm(q[3:7]) if base else 1.0
        here = robot.dynamics(q, v)
        for i in range(len(tree.joints)):
            there = robot.dynamics(q + np.eye(tree.nq)[tree.nq - len(tree.joints) + i], v)
            moved[i] |= any(
                np.abs(b - a).max() > _UNCHANGED * np.abs(a).max() for a, b in zip(here, there, strict=True)
            )
    return [joint for joint, once in zip(tree.joints, moved, strict=True) if not once]


def _without_effect(tree: Tree, config: Config) -> list[str]:
    """Say of which joints an offset of the position is not noticed."""
    names = silent(tree, config)
    if not names:
        return []
    return [
        f"an offset in the position of {_listed(names)} has no effect that could be noticed: neither gravity "
        "nor inertia depends on it; a reference mark or a second encoder would settle it"
    ]


def _behind_the_gear(config: Config) -> list[str]:
    names = [joint.name for joint in config.robot.joint if joint.torque_meaning == "link"]
    if not names:
        return []
    return [
        f"the torque sensor behind the gear of {_listed(names)} does not see the drive: what is called an "
        "actuator fault there is one of the sensor; the motor's own torque beside it would settle it"
    ]


def _listed(names: list[str]) -> str:
    return ", ".join(map(repr, names))


def _telling(tree: Tree, rated: Floats, axis: int, centre: Floats) -> float:
    """Return the force at a body's centre that loads some joint before it with its rated torque."""
    reach, force, i = float(np.linalg.norm(centre)), math.inf, int(axis)
    while i >= 0 and not (tree.base == "floating" and i < 6):
        if tree.arrays.kind[i] == REVOLUTE:
            force = min(force, float(rated[tree.arrays.dof[i]]) / max(reach, 0.03))
        reach += float(np.linalg.norm(tree.arrays.p_PJ[i]))
        i = int(tree.arrays.parent[i])
    return force if math.isfinite(force) else 0.0


def _carrier(tree: Tree, config: Config) -> tuple[str, int]:
    """Return name and axis of the link that carries loads: the tool link's, or a fixed arm's last."""
    name = config.robot.tool_link
    if name:
        return name, next(place.axis for place in tree.links if place.name == name)
    last = int(np.flatnonzero(tree.arrays.E[:, 3, 3] > 0.0)[-1])
    if tree.base == "floating":
        last = 5
    return next(place.name for place in tree.links if place.axis == last), last


def candidates(outline_: Outline) -> Candidates:
    """Return all explanations of a robot with their candidates."""
    found = tuple(explain.explanations(outline_))
    every = [(i, one) for i, explanation in enumerate(found) for one in explanation.candidates]
    # What predicts no residual is told by other means, and is no candidate of the evidence.
    constant = tuple(pair for pair in every if pair[1].time_s is None and pair[1].sd)
    smooth = tuple(pair for pair in every if pair[1].time_s is not None)
    return Candidates(found, constant, smooth)


def fill_band(params: Any, band: Band) -> None:
    """Set the band and its limits."""
    params["cause_fast"], params["cause_slow"] = band.fast, band.slow
    params["rho"], params["slow_share"] = band.rho, band.slow_share
    params["track_sd"] = band.track_sd
    params["row_limit"], params["slow_limit"] = band.row_limit, band.slow_limit
    params["body_limit"] = band.body_limit
    params["cusum_sd"], params["cusum_limit"] = band.cusum_sd, band.cusum_limit
    params["slow_body_limit"], params["foot_limit"] = band.slow_body_limit, band.foot_limit
    params["cusum_reference"] = 2.0
    params["quiet_ratio"], params["onset_ratio"] = 0.6, 0.4
    params["hold_s"], params["model_error"] = HOLD_S, MODEL_ERROR
    params["dependent"], params["evidence_weight"], params["hides"] = zip(*TRUST, strict=True)


def fill_evidence(params: Any, tree: Tree, config: Config, found: Candidates) -> None:
    """Set the rhythm of evidence, the bodies, the candidates and their rates."""
    period_s = 1.0 / config.input.rate_hz
    between_s, stages = next(rhythm for most, rhythm in RHYTHM.items() if tree.n <= most)
    samples = max(1, round(between_s / period_s))
    dt = samples * period_s
    params["evidence_samples"], params["evidence_stages"] = samples, stages
    params["column_lag"] = round(_lag_s(params) / dt)
    params["slow_later_s"] = max(_lag_s(params, "slow") - _lag_s(params), period_s)
    params["stages_at_once"] = math.ceil(stages / samples)
    params["slow_keep"] = math.exp(-dt / SLOW_S)
    params["track_keep"] = math.exp(-dt / TRACK_S)
    params["track_noise"], params["track_clip"] = TRACK_NOISE_S / between_s, TRACK_CLIP
    _fill_trend(params, config, dt)
    params["least"] = LEAST
    params["cusum_samples"] = max(1, round(BLOCK_S / period_s))
    params["other_sd"] = OTHER * params["rated"]
    _fill_bodies(params, tree, config)
    _fill_feet(params, tree, config)
    _fill_candidates(params, found, dt)
    settings = config.explain
    params["sure"], params["sure_ns"] = settings.lasting_probability, round(1e9 * settings.lasting_s)
    for number, explanation in enumerate(found.explanations):
        first = explanation.candidates[0]
        params["of_family"][0, number] = explain.NAMES.index(first.family)
        params["of_index"][0, number] = first.number
        params["of_sd"][0, number] = _lasting_sd(explanation)
        if first.family == "foothold-lost":
            params["foothold_of"][0, first.number] = number
    rates = [settings.nothing_per_h, settings.other_per_h, *(x.rate_per_h for x in found.explanations)]
    params["log_rate"] = np.log(rates)


def _fill_trend(params: Any, config: Config, dt: float) -> None:
    """Set how far friction may leave the commissioned one, and how certainly and for how long."""
    settings, rated, of = config.explain, params["rated"][0], params["link_row"][0]
    for a, (name, floor) in enumerate(
        (("coulomb", actuator.COULOMB_FLOOR), ("viscous", actuator.VISCOUS_FLOOR))
    ):
        params["trend_limit"][0, :, a] = settings.friction_drift * np.maximum(
            np.append(params[name][0], params[name][0, of]), floor * rated
        )
    params["trend_limit"][0, :, 2] = settings.offset_drift * rated
    params["trend_keep"] = math.exp(-dt / settings.drift_memory_s)
    params["trend_sure"] = NormalDist().inv_cdf(settings.certainty)
    params["trend_s"] = settings.drift_s


def _load_centre(tree: Tree, config: Config, axis: int) -> Floats:
    """Return about where loads sit in the carrier's body frame [m]: its tool frame, or its far end."""
    for place in tree.links:
        if place.name == config.robot.tool_link:
            return place.p
    body = bodies(tree)
    carriers = np.flatnonzero(body.axis == axis)
    far_end: Floats = 2.0 * body.centre[carriers[0]] if len(carriers) else np.zeros(3)
    return far_end


def _lasting_sd(explanation: Explanation) -> Floats:
    """Return the prior sd of the parameters an explanation has when it lasts (LASTING)."""
    constants = tuple(one.sd[0] for one in explanation.candidates if one.time_s is None and one.sd)
    settled = next((one.sd for one in explanation.candidates if one.settles == len(one.sd) <= LASTING), ())
    values = constants or settled
    sd = np.zeros(LASTING)
    sd[: len(values)] = values
    return sd


def _fill_bodies(params: Any, tree: Tree, config: Config) -> None:
    body = bodies(tree)
    params["body_axis"], params["body_centre"] = body.axis, body.centre
    for i, foot in enumerate(config.robot.foot):
        place = next(place for place in tree.links if place.name == foot.link and place.axis != WORLD)
        params["foot_axis"][0, i] = place.axis
        params["foot_point"][0, i] = place.R @ foot.point + place.p
        params["foot_radius"][0, i] = foot.radius
    axis = _carrier(tree, config)[1]
    params["load_axis"] = axis
    params["load_centre"] = _load_centre(tree, config, axis)


def _fill_feet(params: Any, tree: Tree, config: Config) -> None:
    """Set what is known of feet that stand beforehand, and how punctual they are."""
    gravity, watch = np.array(config.robot.gravity_vector), config.watch
    strength = float(np.linalg.norm(gravity))
    params["up"] = -gravity / strength if strength else (0.0, 0.0, 1.0)
    weight = float(tree.arrays.E[:, 3, 3].sum()) * strength
    params["foot_force_sd"] = watch.foot_force_ratio * max(weight, 1.0)
    params["foot_guard_ns"] = round(1e9 * watch.foot_guard_s)
    params["foot_lands_ns"] = round(1e9 * watch.foot_landing_s)
    params["foot_lost_ns"] = round(1e9 * watch.foot_lost_s)
    params["foot_early_ns"] = round(1e9 * watch.foot_early_s)
    for feet in range(len(config.robot.foot) + 1):
        params["body_share"][0, feet] = body_limit(max(tree.n - 3 * feet, 1)) / body_limit(tree.n)


def _fill_candidates(params: Any, found: Candidates, dt: float) -> None:
    for name, group in (("constant", found.constant), ("smooth", found.smooth)):
        for k, (number, one) in enumerate(group):
            params[f"{name}_family"][0, k] = explain.NAMES.index(one.family)
            params[f"{name}_index"][0, k] = one.number
            params[f"{name}_of"][0, k] = number
            params[f"{name}_one_sided"][0, k] = one.one_sided
            params[f"{name}_share"][0, k] = math.log(one.share)
            params[f"{name}_ends"][0, k] = math.log(dt / one.lasts_s)
            if one.time_s is None:
                params["constant_sd"][0, k] = one.sd[0]
            else:
                params["smooth_columns"][0, k] = len(one.sd)
                unused = (0.0,) * (SMOOTH - len(one.sd))
                params["smooth_sd"][0, k] = one.sd + unused
                params["smooth_dt_T"][0, k] = dt / np.array(one.times_s + (1.0,) * len(unused))
                params["smooth_moves"][0, k] = one.moves + unused
                params["smooth_settles"][0, k] = one.settles
                params["smooth_sized"][0, k] = 3 if one.family in ("contact", "touchdown") else 1


def sizes_of(found: Candidates, tree: Tree, config: Config, lines: int) -> Sizes:
    """Return the sizes of all blocks."""
    return Sizes(
        n=tree.n, nq=tree.nq, m=len(config.robot.joint), N=len(tree.arrays.parent), D=lines,
        B=len(bodies(tree).names), F=len(config.robot.foot), X=len(found.explanations),
        K=len(found.constant), Q=len(found.smooth),
        T=sum(joint.link_torque_sensor for joint in config.robot.joint),
    )  # fmt: skip


def _lag_s(params: Any, which: str = "fast") -> float:
    """Return the mean delay of a residual behind its cause [s]: the area above its step response."""
    period_s = params["period_ns"][0] * 1e-9
    form = Form(int(params["form"][0]))
    x, lag = np.zeros(3), 0.0
    for _ in range(round(0.5 / period_s)):
        if form == Form.JOINT_SPACE:
            ledger.respond_joint_space(1.0, period_s, params[f"gain_{which}"][0, 0, -1], x)
        elif form == Form.FIRST_ORDER:
            ledger.respond_first_order(1.0, period_s, params[f"pole_{which}"][0], x)
        else:
            ledger.respond_second_order(1.0, period_s, params[f"pole_{which}"][0], x)
        lag += period_s * (1.0 - x[2])
    return lag


def response_variance(gain: Floats, position_sd: float, velocity_sd: float, dt_s: float) -> float:
    """Return the variance of the unexplained acceleration that sensor noise alone makes.

    gain (3,2) as of `riccati_gain`; summed over the response to one noisy sample, until it has died away.
    """
    A = np.array([[1.0, dt_s, 0.5 * dt_s**2], [0.0, 1.0, dt_s], [0.0, 0.0, 1.0]])
    x = gain * np.array([position_sd, velocity_sd])
    F = (np.eye(3) - gain @ np.eye(2, 3)) @ A
    total, term = 0.0, math.inf
    for _ in range(100_000):
        term = float(x[2] @ x[2])
        total += term
        if np.abs(x).max() < 1e-9 * math.sqrt(total):
            break
        x = F @ x
    return total


def momentum_variance(form: str, pole: float, velocity_sd: float, dt_s: float) -> float:
    """Return the same for the forms that keep the ledger of momentum, by white noise of the velocity alone.

    First order, exact: the impulse response of `(1 - k)/dt (1 - 1/z)/(1 - k/z)`, `k = exp(-pole dt)`, squared
    and summed. Second order: noise of density `sd² dt` through `pole² s / (s² + sqrt(2) pole s + pole²)`.
    """
    if form == "first-order":
        keep = math.exp(-pole * dt_s)
        return (velocity_sd * (1.0 - keep) / dt_s) ** 2 * 2.0 / (1.0 + keep)
    return velocity_sd**2 * dt_s * pole**3 / (2.0 * math.sqrt(2.0))
