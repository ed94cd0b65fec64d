"""From a configuration to the blocks of the data path: the one place that allocates them."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_discrete_are

from monitor.errors import ConfigError
from monitor.explain.outline import Explanation
from monitor.flow.layout import (
    GAIN_STEPS,
    Blocks,
    Facts,
    Form,
    Sizes,
    Tool,
    inputs_fields,
    outputs_fields,
    params_fields,
    state_fields,
    zeros,
)
from monitor.flow.pipeline import Pipeline
from monitor.flow.step import step
from monitor.kernels import tracking
from monitor.kernels.ledger import BENDS
from monitor.robot.pseudo_inertia import transform
from monitor.robot.tree import WORLD, Tree, build_tree
from monitor.robot.urdf import parse_urdf
from monitor.setup import weighing
from monitor.setup.calibration import (
    Band,
    Calibration,
    Model,
    default_band,
    read_calibration,
    taken_apart,
)
from monitor.setup.config import Config, JointConfig

Floats = NDArray[np.float64]

# A brake that is reported closed may still be closing; from then on the joint must stand.
_BRAKE_SETTLE_S = 0.3
# A torque sensor at a link that fell silent counts again after reading for so long.
_SENSOR_BACK_S = 1.0
# Where nothing else bounds a reading: rad or m, and per second. Beyond, arithmetic would overflow.
_FARTHEST, _FASTEST = 1e6, 1e3


@dataclass(frozen=True, eq=False)
class Setup:
    """A configuration made ready: the robot, its facts and constants."""

    config: Config
    tree: Tree
    sizes: Sizes
    facts: Facts
    params: Any  # Block
    model: Model
    band: Band
    notes: tuple[str, ...]  # what the sensors cannot tell

    def with_band(self, band: Band) -> Setup:
        """Return the same robot with another band."""
        params = self.params.copy()
        weighing.fill_band(params, band)
        params.flags.writeable = False
        return replace(self, params=params, band=band)

    def blocks(self) -> Blocks:
        """Return fresh blocks for a run."""
        s = self.sizes
        inputs = zeros(inputs_fields(s))
        inputs["E"] = self.model.E
        inputs["tau_cmd"] = math.nan
        inputs["tau_link"] = math.nan
        state = zeros(state_fields(s))
        # What friction is today nobody knows yet.
        tracking.forget(self.params["track_sd"][0], state["track"][0], state["track_P"][0])
        return Blocks(self.params, inputs, state, zeros(outputs_fields(s)))

    def warm(self) -> None:
        """Compile the step for this robot and run it once, so that nothing compiles later."""
        blocks = self.blocks()
        blocks.inputs["base_quat"][0, 0] = 1.0
        step(*blocks)

    def pipeline(self, run: str, blocks: Blocks | None = None) -> Pipeline:
        """Return a data path in its first state, its kernels compiled."""
        self.warm()
        return Pipeline(self.facts, blocks or self.blocks(), run)


def build(config: Config, calibration: Calibration | None = None) -> Setup:
    """Return the robot of a configuration, checked against its description.

    The calibration is that of the configuration where none is given. Without one the model is that of the
    description, and the band a wide default.

    Raises
    ------
    ConfigError
        A joint, foot or tool link is not in the robot description, the units cannot be told, or the
        calibration is not this robot's.
    ModelError
        The description itself is refused.
    """
    where = str(config.path)
    description = parse_urdf(config.urdf_text, str(config.path.parent / config.robot.urdf))
    joints = config.robot.joint
    _check_joints(where, joints, tuple(j.name for j in description.joints if j.moves and j.mimic is None))
    armature = {joint.name: _rotor_inertia(joint) for joint in joints}
    tree = build_tree(description, config.robot.base, armature)
    lags, D = _lags(config)
    rated = _rated(tree, config)
    if calibration is None and config.calibration_text:
        place = str(config.path.parent / config.robot.calibration)
        calibration = read_calibration(config.calibration_text, place, tree, config)
    model = calibration.model if calibration else configured_model(tree, config)
    wide = default_band(rated, model.coulomb, model.viscous)
    band = calibration.band if calibration else apart(tree, config, wide)
    outline = weighing.outline(tree, config, rated, model)
    found = weighing.candidates(outline)
    facts = _facts(where, tree, config, found.explanations)
    sizes = weighing.sizes_of(found, tree, config, D)
    params = zeros(params_fields(sizes))
    params["rated"] = np.append(rated, rated[_sensed(tree, config)])
    _fill_tree(params, tree, config, model)
    _fill_wire(params, tree, config, lags)
    _fill_link_torque(params, tree, config)
    _fill_friction(params, tree, config, model)
    _fill_ledger(params, tree, config)
    _fill_limits(params, tree, config)
    weighing.fill_band(params, band)
    weighing.fill_evidence(params, tree, config, found)
    params.flags.writeable = False
    notes = tuple(weighing.cannot_tell(tree, config))
    return Setup(config, tree, sizes, facts, params, model, band, notes)


def configured_model(tree: Tree, config: Config) -> Model:
    """Return the model of the description and of the configuration's friction."""
    base = tree.n - len(tree.joints)
    viscous, coulomb, offset = friction = np.zeros((3, tree.n))
    for row, i in enumerate(_order(tree, config), start=base):
        joint = config.robot.joint[i]
        if joint.torque_meaning != "link":
            friction[:, row] = joint.viscous_friction, joint.coulomb_friction, joint.friction_offset
    bend = np.zeros((tree.n, BENDS))
    return Model(tree.arrays.E.copy(), tree.armature.copy(), viscous, coulomb, offset, bend)


def _rated(tree: Tree, config: Config) -> Floats:
    """Return what shares of torque refer to, by row: rated torque; for a base a third of the weight."""
    base = tree.n - len(tree.joints)
    weight = float(tree.arrays.E[:, 3, 3].sum() * np.linalg.norm(config.robot.gravity_vector))
    rated = np.full(tree.n, 0.3 * max(weight, 1.0))
    rated[: min(base, 3)] *= 0.3  # m: an arm typical for moments on a body
    for row, i in enumerate(_order(tree, config), start=base):
        rated[row] = config.robot.joint[i].rated_torque
    return rated


def _sensed(tree: Tree, config: Config) -> list[int]:
    """Return the rows of the joints with a torque sensor at the link side, in their order on the wire."""
    joints = config.robot.joint
    base = tree.n - len(joints)
    return [base + tree.joints.index(joint.name) for joint in joints if joint.link_torque_sensor]


def apart(tree: Tree, config: Config, band: Band) -> Band:
    """Return a band of whole joints taken apart where the configuration has a sensor at the link side."""
    noise = [joint.link_torque_noise_sd for joint in config.robot.joint if joint.link_torque_sensor]
    return taken_apart(band, _sensed(tree, config), np.array(noise))


def _check_joints(where: str, joints: tuple[JointConfig, ...], moving: tuple[str, ...]) -> None:
    for i, joint in enumerate(joints):
        if joint.name not in moving:
            raise ConfigError(
                f"{where}: robot.joint[{i}].name",
                repr(joint.name),
                f"a moving joint of the robot description: {', '.join(moving)}",
            )
    missing = [name for name in moving if name not in {joint.name for joint in joints}]
    if missing:
        raise ConfigError(
            f"{where}: robot.joint",
            f"no entry for {', '.join(missing)}",
            "one [[robot.joint]] for each moving joint of the robot description",
            "A joint that is not driven and not measured has to be `fixed` in the description.",
        )


def _order(tree: Tree, config: Config) -> list[int]:
    """Return, for each joint of the tree, where it stands on the wire."""
    names = [joint.name for joint in config.robot.joint]
    return [names.index(name) for name in tree.joints]


def _lags(config: Config) -> tuple[list[int], int]:
    """Return by how many samples the state and each torque are held back, and the length of the line."""
    samples = [round(joint.torque_delay_s * config.input.rate_hz) for joint in config.robot.joint]
    longest = max(0, *samples)
    return [longest, *(longest - s for s in samples)], 1 + longest - min(0, *samples)


def _fill_tree(params: Any, tree: Tree, config: Config, model: Model) -> None:
    for name, value in tree.arrays._asdict().items():
        if name != "E":
            params[name] = value
    params["gravity"] = config.robot.gravity_vector
    params["armature"] = model.armature
    if config.robot.coupling:
        # Rotors turn with the motors: their kinetic energy is a full matrix in the joints' coordinates.
        to_motors = np.linalg.inv(_coupling(config))
        motors = np.diag([_rotor_inertia(joint) for joint in config.robot.joint])
        order = _order(tree, config)
        params["armature"] = 0.0
        params["coupled"] = 1
        params["rotor"][0, -len(order) :, -len(order) :] = (to_motors.T @ motors @ to_motors)[
            np.ix_(order, order)
        ]


def _coupling(config: Config) -> Floats:
    """Return the matrix (m,m) from motor to joint positions, in the order of the wire."""
    return np.array(config.robot.coupling) if config.robot.coupling else np.eye(len(config.robot.joint))


def _rotor_inertia(joint: JointConfig) -> float:
    """Return the rotor inertia that enters the balance: a sensor behind the gear does not see it."""
    return 0.0 if joint.torque_meaning == "link" else joint.armature


def _fill_wire(params: Any, tree: Tree, config: Config, lags: list[int]) -> None:
    """Set how the wire's numbers become the model's: signs, zeros, couplings, order, units, delays."""
    joints, order = config.robot.joint, _order(tree, config)
    m = len(joints)
    coupling = _coupling(config)
    sign = np.array([float(joint.sign) for joint in joints])
    scale = np.array([joint.torque_scale for joint in joints])
    params["to_q"] = (coupling * sign)[order]
    params["q_zero"] = (coupling @ [joint.zero_offset for joint in joints])[order]
    # Power is the same on both sides: tau_joint = coupling^-T tau_motor.
    params["to_tau"] = (np.linalg.inv(coupling).T * (sign * scale))[order]
    params["gravity_part"][0, :] = 1.0
    params["gravity_part"][0, -m:] = [0.0 if joints[i].gravity_compensated else 1.0 for i in order]
    params["state_lag"] = lags[0]
    params["tau_lag"] = np.array(lags[1:])[order]
    for i, joint in enumerate(joints):
        params["tau_peak"][0, i] = config.watch.torque_limit_ratio * joint.peak_torque / joint.torque_scale
        params["tau_max"][0, i] = config.watch.torque_credible_ratio * joint.peak_torque / joint.torque_scale
        params["command_error"][0, i] = (
            config.watch.command_error_ratio * joint.rated_torque / joint.torque_scale
        )


def _fill_link_torque(params: Any, tree: Tree, config: Config) -> None:
    sensors = [(i, joint) for i, joint in enumerate(config.robot.joint) if joint.link_torque_sensor]
    params["link_row"] = _sensed(tree, config)
    params["link_wire"] = [i for i, _ in sensors]
    params["link_sign"] = [float(joint.sign) for _, joint in sensors]
    params["link_range"] = [joint.link_torque_range for _, joint in sensors]
    params["link_back_ns"] = round(1e9 * _SENSOR_BACK_S)


def _fill_friction(params: Any, tree: Tree, config: Config, model: Model) -> None:
    base = tree.n - len(tree.joints)
    params["friction_velocity"] = 1.0
    for row, i in enumerate(_order(tree, config), start=base):
        params["friction_velocity"][0, row] = config.robot.joint[i].friction_velocity
    params["viscous"], params["coulomb"], params["bend"] = model.viscous, model.coulomb, model.bend
    params["friction_offset"] = model.offset


def _fill_ledger(params: Any, tree: Tree, config: Config) -> None:
    watch, period_s = config.watch, 1.0 / config.input.rate_hz
    params["form"] = Form[watch.residual.upper().replace("-", "_")]
    params["pole_fast"] = 2.0 * math.pi * watch.fast_bandwidth_hz
    params["pole_slow"] = 2.0 * math.pi * watch.slow_bandwidth_hz
    noises = _noises(tree, config)
    gains = _alike(noises, tree.n - len(tree.joints))
    for k in range(GAIN_STEPS):
        for i, (position_sd, velocity_sd) in enumerate(gains):
            dt_s = (k + 1) * period_s
            params["gain_fast"][0, k, i] = riccati_gain(position_sd, velocity_sd, watch.fast_walk, dt_s)
            params["gain_slow"][0, k, i] = riccati_gain(position_sd, velocity_sd, watch.slow_walk, dt_s)
    for i, noise in enumerate(noises):
        params["e_variance"][0, i] = (
            weighing.response_variance(params["gain_fast"][0, 0, i], *noise, period_s)
            if watch.residual == "joint-space"
            else weighing.momentum_variance(watch.residual, float(params["pole_fast"][0]), noise[1], period_s)
        )
    params["cause_pole"] = math.log(2.0) / 0.007
    params["period_ns"] = round(1e9 * period_s)
    params["gap_ns"] = round(1e9 * max(1.5 * period_s, min(watch.gap_limit_s, (GAIN_STEPS + 0.5) * period_s)))
    params["settle_ns"] = round(1e9 * watch.settle_s)
    params["start_settle_ns"] = round(1e9 * watch.start_settle_s)
    params["quiet_ns"] = round(1e9 * watch.quiet_s)
    params["clock_jump_ns"] = round(1e9 * watch.clock_jump_periods * period_s)


def _alike(noises: list[tuple[float, float]], base: int) -> list[tuple[float, float]]:
    """Return the noise by which each row is filtered: that of the base for all rows of a walker.

    With gains in common the response does not depend on the mass matrix: a force on a foot shows in the rows
    of base and leg at the same time, in the proportion of its Jacobian. With their own, quicker gains of the
    joints every step of a foot would look like an outside force for some 20 ms.
    """
    if not base:
        return noises
    position, velocity = zip(*noises[:base], strict=True)
    return len(noises) * [(max(position), max(velocity))]


def _noises(tree: Tree, config: Config) -> list[tuple[float, float]]:
    """Return (position sd, velocity sd) of each row of v."""
    base = config.robot.base_noise
    rows = []
    if config.robot.base == "floating":
        rows = 3 * [(base.attitude_sd, base.rate_sd)] + 3 * [(base.position_sd, base.velocity_sd)]
    # Noise is the motors' where these are coupled; it adds up in squares.
    shares = _coupling(config)[_order(tree, config)] ** 2
    position = np.sqrt(shares @ [joint.position_noise_sd**2 for joint in config.robot.joint])
    velocity = np.sqrt(shares @ [joint.velocity_noise_sd**2 for joint in config.robot.joint])
    return rows + list(zip(position.tolist(), velocity.tolist(), strict=True))


@cache
def riccati_gain(position_sd: float, velocity_sd: float, walk: float, dt_s: float) -> Floats:
    """Return the steady-state Kalman gain (3,2) of position, velocity and unexplained acceleration.

    Position and velocity are measured with the given standard deviations [rad, rad/s]; the acceleration that
    the model does not explain is a random walk of `walk` [rad/s² per √s].
    """
    A = np.array([[1.0, dt_s, 0.5 * dt_s**2], [0.0, 1.0, dt_s], [0.0, 0.0, 1.0]])
    H = np.array([[1.0, 0.0, 0.0], [0.0, 1.0, 0.0]])
    # The acceleration's own step is spread over the interval: its integral moves velocity and position too.
    g = np.array([dt_s**2 / 6.0, dt_s / 2.0, 1.0])
    # In units of the noise, or the solver meets numbers ten orders apart; H stays the same in them.
    scale = np.array([position_sd, velocity_sd, walk * math.sqrt(dt_s)])
    g = walk * math.sqrt(dt_s) * g / scale
    P = solve_discrete_are((A * scale / scale[:, None]).T, H.T, np.outer(g, g), np.eye(2))
    gain: Floats = (P @ H.T @ np.linalg.inv(H @ P @ H.T + np.eye(2))) * scale[:, None] / scale[:2]
    gain.flags.writeable = False
    return gain


def _fill_limits(params: Any, tree: Tree, config: Config) -> None:
    """Set the limits of credibility, in units and order of the wire."""
    watch, joints = config.watch, config.robot.joint
    for i in range(len(joints)):
        low, high, speed = _travel(tree, config, i)
        params["q_min"][0, i], params["q_max"][0, i], params["qd_max"][0, i] = low, high, speed
        params["brake_motion"][0, i] = watch.brake_motion
        params["jump"][0, i], params["drift"][0, i] = config.motion_limits[i]
        params["frozen_velocity"][0, i] = watch.frozen_velocity
    _fill_noise(params, tree, config)
    params["acceleration_max"] = watch.credible_acceleration
    params["velocity_lag"] = watch.velocity_lag_s
    params["push_ns"] = round(1e9 * watch.frozen_torque_s)
    params["drift_s"] = watch.contradiction_s
    params["frozen_ns"] = round(1e9 * watch.frozen_s)
    params["command_error_ns"] = round(1e9 * watch.command_error_s)
    params["brake_settle_ns"] = round(1e9 * _BRAKE_SETTLE_S)
    params["base_position_max"] = _FARTHEST
    params["base_jump"] = watch.base_jump
    params["base_speed_max"] = _FASTEST


def _fill_noise(params: Any, tree: Tree, config: Config) -> None:
    """Set what the noise of each reading on the wire is, and what no friction of its joint holds."""
    watch, base = config.watch, tree.n - len(tree.joints)
    rows = {i: base + k for k, i in enumerate(_order(tree, config))}
    params["bend_ratio"] = watch.noise_ratio
    for i, joint in enumerate(config.robot.joint):
        position = math.hypot(joint.position_noise_sd, joint.encoder_step / math.sqrt(12.0))
        # The second difference of white noise has six times its variance.
        params["bend_q"][0, i] = watch.noise_ratio * math.sqrt(6.0) * position
        params["bend_qd"][0, i] = watch.noise_ratio * math.sqrt(6.0) * joint.velocity_noise_sd
        params["noise_qd"][0, i] = joint.velocity_noise_sd
        params["noise_tau"][0, i] = joint.torque_noise_sd / joint.torque_scale or math.inf
        params["wire_row"][0, i] = -1 if config.robot.coupling else rows[i]
        params["push"][0, i] = watch.frozen_torque_ratio * joint.rated_torque


def _travel(tree: Tree, config: Config, i: int) -> tuple[float, float, float]:
    """Return least and greatest credible position and speed of joint i as the wire reports them."""
    joint, k = config.robot.joint[i], tree.joints.index(config.robot.joint[i].name)
    if config.robot.coupling:
        # The wire reports motors; their travel is not the joints'.
        return -_FARTHEST, _FARTHEST, _FASTEST
    low = tree.limits.lower[k] if joint.position_min is None else joint.position_min
    high = tree.limits.upper[k] if joint.position_max is None else joint.position_max
    speed = tree.limits.velocity[k] if joint.velocity_max is None else joint.velocity_max
    ends = sorted(joint.sign * (end - joint.zero_offset) for end in (low, high))
    margin = config.watch.position_margin
    return (
        max(ends[0] - margin, -_FARTHEST),
        min(ends[1] + margin, _FARTHEST),
        min(config.watch.velocity_limit_ratio * speed, _FASTEST),
    )


def _facts(where: str, tree: Tree, config: Config, explanations: tuple[Explanation, ...]) -> Facts:
    robot, watch = config.robot, config.watch
    base = tree.n - len(tree.joints)
    order = _order(tree, config)
    coupling = _coupling(config)
    for i, foot in enumerate(robot.foot):
        _link(f"{where}: robot.foot[{i}].link", tree, foot.link)
    tool = _link(f"{where}: robot.tool_link", tree, robot.tool_link) if robot.tool_link else None
    base_rows = tuple(f"base_{kind}_{x}" for kind in ("turn", "move") for x in "xyz")[:base]
    units = ("N m",) * min(base, 3) + ("N",) * min(base, 3)
    units += tuple("N" if kind == "prismatic" else "N m" for kind in tree.joint_kinds)
    sensed = _sensed(tree, config)
    motors = tuple(f"{tree.joints[row - base]} (motor)" for row in sensed)
    return Facts(
        robot=robot.name or tree.name,
        joints=tuple(joint.name for joint in robot.joint),
        rows=base_rows + tree.joints + motors,
        units=units + tuple(units[row] for row in sensed),
        link_torque=tuple(i for i, joint in enumerate(robot.joint) if joint.link_torque_sensor),
        feet=tuple(foot.name for foot in robot.foot),
        floating=robot.base == "floating",
        serial=robot.serial,
        tree=tree,
        row_needs=((coupling != 0.0) | (np.abs(np.linalg.inv(coupling).T) > 1e-12))[order],
        explanations=explanations,
        twins=weighing.twins(tree),
        certainty=config.explain.certainty,
        tool=tool,
        wait_ns=round(1e9 * watch.wait_periods / config.input.rate_hz),
        stream_stale_ns=round(1e9 * watch.stream_stale_s),
        condition_stale_ns=round(1e9 * config.input.condition_stale_s),
        quiet_ns=round(1e9 * watch.quiet_s),
        dropouts_ratio=watch.dropouts_ratio,
        duplicates_ratio=watch.duplicates_ratio,
    )


def _link(where: str, tree: Tree, name: str) -> Tool:
    """Return where a link named in the configuration is."""
    for place in tree.links:
        if place.name == name and place.axis != WORLD:
            return Tool(place.axis, transform(place.R, place.p))
    moving = ", ".join(place.name for place in tree.links if place.axis != WORLD)
    raise ConfigError(where, repr(name), f"a moving link of the robot description: {moving}")
