"""The configuration file: TOML in, one validated and frozen `Config` out.

The descriptions below are the only documentation of the keys: `limbtell init` writes them as comments and
the errors quote them. Checks which need the robot description itself (do the joints exist in it?) are in
`monitor.setup.build`; everything that the file alone can get wrong is refused here.
"""

from __future__ import annotations

import ipaddress
import json
import re
import tomllib
from collections.abc import Iterable, Mapping
from math import cos, hypot, sin, sqrt
from pathlib import Path
from typing import Annotated, Any, Literal, Self

import numpy as np
from pydantic import AfterValidator, Field, PrivateAttr, model_validator

from monitor.errors import ConfigError
from monitor.setup.table import Table, refusal, shown, validated

SCHEMA = 1
STANDARD_GRAVITY = (0.0, 0.0, -9.81)

Text = Annotated[str, Field(max_length=1000, pattern=r"^[^\x00-\x1f\x7f]*$")]
Name = Annotated[str, Field(min_length=1, max_length=200, pattern=r"^[^\x00-\x1f\x7f]+$")]
Positive = Annotated[float, Field(gt=0)]
NotNegative = Annotated[float, Field(ge=0)]
Vector3 = tuple[float, float, float]


def _refuse_doubled(table: str, names: Iterable[str]) -> None:
    seen: dict[str, int] = {}
    for index, name in enumerate(names):
        if name in seen:
            raise refusal((table, index, "name"), f"{name!r}, as in {table}[{seen[name]}]", "every name once")
        seen[name] = index


def _plus_or_minus_one(value: int) -> int:
    if value not in (1, -1):
        raise refusal((), f"{value}", "1 or -1")
    return value


_TCP = re.compile(r"tcp://(\[[0-9A-Fa-f:.]+\]|[^\s\[\]:;/]+):(\d{1,5})")


def _endpoint(key: str, address: str) -> tuple[str, int | None]:
    """Host and port of a ZeroMQ address; `ipc` counts as host `localhost` without a port."""
    if re.fullmatch(r"ipc://.{1,100}", address):
        return "localhost", None
    match = _TCP.fullmatch(address)
    if match is None or not 0 < int(match[2]) < 65536:
        raise refusal(
            key, json.dumps(address), "tcp://HOST:PORT or ipc://PATH", 'For example "tcp://127.0.0.1:5555".'
        )
    return match[1].strip("[]"), int(match[2])


def _is_loopback(host: str) -> bool:
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return host in ("localhost", "lo")


class JointConfig(Table):
    """`[[robot.joint]]`: what one joint reports, and how far that may be believed."""

    name: Name = Field(description="Name of the joint in the robot description.")
    sign: Annotated[int, AfterValidator(_plus_or_minus_one)] = Field(
        default=1, description="Multiplies position, velocity and torques from the wire: 1 or -1."
    )
    zero_offset: float = Field(
        default=0.0,
        description="Added to the position after the sign: position = sign * q + zero_offset [rad].",
    )
    torque_meaning: Literal["joint", "motor", "current", "link"] = Field(
        default="joint",
        description=(
            'What `tau` on the wire is: "joint", motor torque on the joint side of the gear [N m]; "motor", '
            'motor torque before the gear [N m], multiplied by gear_ratio; "current", motor current [A], '
            'multiplied by torque_constant and gear_ratio; "link", a torque sensor behind the gear [N m], '
            "which sees neither rotor inertia nor joint friction."
        ),
    )
    torque_constant: Positive | None = Field(
        default=None,
        examples=[0.1],
        description='Motor torque per current [N m/A]; required with torque_meaning = "current".',
    )
    gear_ratio: Positive = Field(
        default=1.0, description='Motor turns per joint turn; used with torque_meaning "motor" and "current".'
    )
    gravity_compensated: bool = Field(
        default=False, description="true where `tau` has the gravity torque of the model already taken off."
    )
    torque_delay_s: float = Field(
        default=0.0,
        ge=-0.1,
        le=0.1,
        description="How much later than the position the torque is reported; may be negative [s].",
    )
    armature: NotNegative = Field(
        default=0.0,
        description=(
            "Rotor inertia seen through the gear: gear_ratio^2 * rotor inertia; with a coupling matrix, that "
            "of the motor which the wire reports in this place [kg m^2]."
        ),
    )
    coulomb_friction: NotNegative = Field(
        default=0.0, description="Coulomb friction of the joint, behind any coupling [N m]."
    )
    viscous_friction: NotNegative = Field(
        default=0.0, description="Viscous friction of the joint, behind any coupling [N m s/rad]."
    )
    friction_offset: float = Field(
        default=0.0, description="Part of the friction that has one direction [N m]."
    )
    friction_velocity: Positive = Field(
        default=0.004,
        description="v0 of the Coulomb friction tanh(v / v0), well below working speeds [rad/s].",
    )
    rated_torque: Positive = Field(
        description="Torque the joint may give lastingly, on the joint side; sizes refer to it [N m]."
    )
    peak_torque: Positive = Field(
        default_factory=lambda earlier: earlier["rated_torque"],
        description="Largest torque the drive can give, on the joint side; default: rated_torque [N m].",
    )
    encoder_step: Positive = Field(
        default=5e-5, description="Smallest step of the position reading, on the joint side [rad]."
    )
    position_noise_sd: Positive = Field(
        default_factory=lambda earlier: earlier["encoder_step"] / sqrt(12.0),
        description="Standard deviation of the position; default: encoder_step / sqrt(12) [rad].",
    )
    velocity_noise_sd: Positive = Field(
        default=0.005, description="Standard deviation of the velocity [rad/s]."
    )
    torque_noise_sd: NotNegative = Field(
        default_factory=lambda earlier: 0.005 * earlier["rated_torque"],
        description="Standard deviation of the torque, joint side; default: 0.5 % of rated_torque [N m].",
    )
    link_torque_sensor: bool = Field(
        default=False,
        description=(
            "true where `tau_link` on the wire brings the torque of a sensor at the link side of this joint "
            "[N m], beside the motor torque `tau`: drive, world and sensor are told apart then."
        ),
    )
    link_torque_noise_sd: NotNegative = Field(
        default_factory=lambda earlier: 0.005 * earlier["rated_torque"],
        description="Standard deviation of that reading; default: 0.5 % of rated_torque [N m].",
    )
    link_torque_range: Positive = Field(
        default_factory=lambda earlier: 3.0 * earlier["peak_torque"],
        description="Largest torque it can read, silent beyond; default: 3 times peak_torque [N m].",
    )
    position_min: float | None = Field(
        default=None,
        examples=[-3.0],
        description="Lower end of the travel; default: the robot description's [rad].",
    )
    position_max: float | None = Field(
        default=None,
        examples=[3.0],
        description="Upper end of the travel; default: the robot description's [rad].",
    )
    velocity_max: Positive | None = Field(
        default=None, examples=[2.0], description="Highest speed; default: the robot description's [rad/s]."
    )

    @property
    def torque_scale(self) -> float:
        """Joint-side N m (N) per unit of `tau` on the wire, before the sign."""
        if self.torque_meaning == "current":
            return (self.torque_constant or 1.0) * self.gear_ratio
        return self.gear_ratio if self.torque_meaning == "motor" else 1.0

    @model_validator(mode="after")
    def _check(self) -> Self:
        if self.torque_meaning == "current" and self.torque_constant is None:
            raise refusal("torque_constant", "nothing", 'a number, because torque_meaning is "current"')
        if self.peak_torque < self.rated_torque:
            raise refusal(
                "peak_torque", f"{self.peak_torque}", f"at least the rated_torque, {self.rated_torque}"
            )
        if self.link_torque_sensor and self.torque_meaning == "link":
            raise refusal(
                "link_torque_sensor",
                'true beside torque_meaning = "link"',
                "the motor's own torque in `tau`",
                "One reading cannot tell drive and world apart; send the motor's torque as `tau`.",
            )
        low, high = self.position_min, self.position_max
        if low is not None and high is not None and low >= high:
            raise refusal("position_min", f"{low}", f"less than position_max, {high}")
        return self


class BaseNoise(Table):
    """`[robot.base_noise]`."""

    position_sd: Positive = Field(default=0.001, description="Standard deviation of the base position [m].")
    attitude_sd: Positive = Field(
        default=0.0015, description="Standard deviation of the base attitude [rad]."
    )
    velocity_sd: Positive = Field(default=0.01, description="Standard deviation of the base velocity [m/s].")
    rate_sd: Positive = Field(
        default=0.01, description="Standard deviation of the base angular rate [rad/s]."
    )


class FootConfig(Table):
    """`[[robot.foot]]`."""

    name: Name = Field(examples=["front_left"], description="Name of the foot, as operators know it.")
    link: Name = Field(
        examples=["front_left_shank"], description="Link of the robot description which carries the foot."
    )
    point: Vector3 = Field(
        default=(0.0, 0.0, 0.0),
        description="Where it meets ground, or the centre of a foot that is a ball; axes of the link [m].",
    )
    radius: NotNegative = Field(
        default=0.0, description="Of a foot that is a ball: ground is met so far below its centre [m]."
    )


class RobotConfig(Table):
    """`[robot]`."""

    name: Text = Field(default="", description="What people call this robot; shown in alarms and reports.")
    urdf: Name = Field(description="Robot description (URDF); the path is relative to this file.")
    base: Literal["fixed", "floating"] = Field(
        default="fixed", description='"fixed" for an arm that is bolted down, "floating" for whatever walks.'
    )
    gravity: Vector3 = Field(
        default=STANDARD_GRAVITY,
        description=(
            "Gravity vector: in the axes of a fixed base, or in world axes for a floating one [m/s^2]."
        ),
    )
    mount_rpy: Vector3 = Field(
        default=(0.0, 0.0, 0.0),
        description=(
            "Attitude of a fixed base in the world: roll, pitch, yaw about the fixed x, y, z axes [rad]. "
            "Another way to say where gravity points; leave one of the two at its default."
        ),
    )
    calibration: Text = Field(
        default="",
        description=(
            "What commissioning found (JSON): a model this robot obeys, and how far it leaves it while all "
            'is well; the path is relative to this file. "" for none: model of the description, wide band.'
        ),
    )
    serial: Text = Field(default="", description='Serial number the robot must announce; "" accepts any.')
    coupling: tuple[tuple[float, ...], ...] = Field(
        default=(),
        description=(
            "Coupled transmissions: joint positions = coupling * motor positions, one row per joint in the "
            "order below; [] where every motor drives its own joint."
        ),
    )
    tool_link: Text = Field(
        default="",
        description=(
            'Link whose frame is the tool frame, where announced payloads are carried; "" for none: coverage '
            "is conditional then while a payload is announced."
        ),
    )
    base_noise: BaseNoise = Field(
        default=BaseNoise(),
        description="How noisy the state of a floating base is; without effect for a fixed one.",
    )
    joint: tuple[JointConfig, ...] = Field(
        max_length=200,
        description=(
            "The joints, in their order on the wire. For a prismatic joint read m for rad, N for N m, "
            "kg for kg m^2."
        ),
    )
    foot: tuple[FootConfig, ...] = Field(
        default=(), max_length=50, description="Feet, in the order of `feet` on the wire; none for an arm."
    )

    @property
    def gravity_vector(self) -> Vector3:
        """Gravity in base axes (fixed base, mount attitude applied) or world axes (floating) [m/s^2]."""
        if not any(self.mount_rpy):
            return self.gravity
        # Third row of R = Rz(yaw) Ry(pitch) Rx(roll), the world's vertical seen from the base.
        roll, pitch, _ = self.mount_rpy
        down = self.gravity[2]
        return (
            -sin(pitch) * down,
            cos(pitch) * sin(roll) * down,
            cos(pitch) * cos(roll) * down,
        )

    @model_validator(mode="after")
    def _check(self) -> Self:
        if not self.joint:
            raise refusal("joint", "[]", "at least one joint")
        _refuse_doubled("joint", (joint.name for joint in self.joint))
        _refuse_doubled("foot", (foot.name for foot in self.foot))
        self._check_gravity()
        self._check_coupling()
        self._check_link_sensors()
        return self

    def _check_gravity(self) -> None:
        if hypot(*self.gravity) > 30.0:
            raise refusal("gravity", f"{list(self.gravity)}", "a length of at most 30 m/s^2")
        if not any(self.mount_rpy):
            return
        if self.base == "floating":
            raise refusal(
                "mount_rpy", f"{list(self.mount_rpy)}", "[0, 0, 0]: a floating base reports its own attitude"
            )
        if self.gravity != STANDARD_GRAVITY:
            raise refusal(
                "mount_rpy",
                f"{list(self.mount_rpy)} beside gravity = {list(self.gravity)}",
                "one of the two at its default",
                "Keep the one you measured and remove the other.",
            )

    def _check_link_sensors(self) -> None:
        for i, joint in enumerate(self.joint):
            if joint.link_torque_sensor and self.base == "floating":
                raise refusal(
                    ("joint", i, "link_torque_sensor"),
                    'true beside base = "floating"',
                    "false, or a fixed base",
                    "On a walking robot, link side and motor side of a joint are not taken apart yet.",
                )

    def _check_coupling(self) -> None:
        if not self.coupling:
            return
        for i, joint in enumerate(self.joint):
            if joint.link_torque_sensor:
                raise refusal(
                    ("joint", i, "link_torque_sensor"),
                    "true beside a coupling matrix",
                    "false, or motors that drive a joint each",
                    "Behind a coupling, link side and motor side of a joint are not taken apart yet.",
                )
        n, lengths = len(self.joint), [len(row) for row in self.coupling]
        if lengths != [n] * n:
            raise refusal("coupling", f"{len(lengths)} rows of lengths {lengths}", f"{n} rows of {n} numbers")
        singular = np.linalg.svd(np.array(self.coupling), compute_uv=False)
        if not singular[-1] > 1e-6 * singular[0]:
            raise refusal(
                "coupling",
                f"a matrix that cannot be inverted (singular values {singular[0]:.3g} to {singular[-1]:.3g})",
                "an invertible one",
                "Each motor must move the joints in a way the others together do not.",
            )


class InputConfig(Table):
    """`[input]`."""

    address: Text = Field(
        default="tcp://127.0.0.1:5555",
        description="ZeroMQ address the robot publishes at; limbtell connects to it (tcp:// or ipc://).",
    )
    rate_hz: float = Field(
        default=1000.0, ge=1.0, le=8000.0, description="Joint samples per second the robot sends."
    )
    queue: int = Field(
        default=4000,
        ge=10,
        le=1_000_000,
        description="Messages kept while the loop is busy; beyond, they are lost.",
    )
    messages_per_tick: int = Field(
        default=64,
        ge=1,
        le=10_000,
        description="Most messages taken in one tick, so that no burst delays it.",
    )
    condition_stale_s: Positive = Field(
        default=3.0,
        description="Age of the `robot` topic after which the condition of the robot is unknown [s].",
    )

    @model_validator(mode="after")
    def _check(self) -> Self:
        _endpoint("address", self.address)
        return self


class OutputConfig(Table):
    """`[output]`."""

    address: Text = Field(
        default="tcp://127.0.0.1:5556",
        description="ZeroMQ address limbtell publishes at (it binds; tcp:// or ipc://).",
    )
    queue: int = Field(
        default=10_000,
        ge=10,
        le=1_000_000,
        description="Messages kept per slow subscriber; beyond, dropped and counted.",
    )
    allow_remote: bool = Field(
        default=False, description="true lets the address be reachable from other machines, unencrypted."
    )

    @model_validator(mode="after")
    def _check(self) -> Self:
        host, _ = _endpoint("address", self.address)
        if not self.allow_remote and not _is_loopback(host):
            raise refusal(
                "address",
                json.dumps(self.address),
                "a loopback address: the socket is not encrypted",
                "Use tcp://127.0.0.1:PORT, or set output.allow_remote = true if the network is trusted.",
            )
        return self


class WatchConfig(Table):
    """`[watch]`."""

    loop_hz: float = Field(
        default=1000.0,
        ge=100.0,
        le=8000.0,
        description="Ticks per second: how often limbtell looks at its input.",
    )
    residual: Literal["joint-space", "second-order", "first-order"] = Field(
        default="joint-space",
        description=(
            'Form of the residual: "joint-space" fuses position and velocity (recommended); "second-order" '
            'and "first-order" are momentum observers.'
        ),
    )
    fast_walk: Positive = Field(
        default=6.0,
        description=(
            "Joint-space form, fast residual: how quickly the unexplained acceleration may wander "
            "[rad/s^2 per sqrt(s)]. Larger is quicker and noisier."
        ),
    )
    slow_walk: Positive = Field(
        default=1.0, description="The same for the slow residual [rad/s^2 per sqrt(s)]."
    )
    fast_bandwidth_hz: Positive = Field(
        default=15.0, description="Momentum forms: bandwidth of the fast residual [Hz]."
    )
    slow_bandwidth_hz: Positive = Field(
        default=3.0, description="Momentum forms: bandwidth of the slow residual [Hz]."
    )
    false_alarm_s: float = Field(
        default=2.6e6,
        ge=60.0,
        le=1e9,
        description=(
            "Wanted mean time between false alarms, in seconds of motion; commissioning sets the limits of "
            "events by it, and says how far its recordings can support that. The default is a month [s]."
        ),
    )
    quiet_s: Positive = Field(
        default=0.3, description="An event ends when the residual was inside its band this long [s]."
    )
    settle_s: NotNegative = Field(
        default=0.12, description="Pause of the watch after bad or missing samples [s]."
    )
    start_settle_s: NotNegative = Field(
        default=0.5, description="Pause of the watch after the stream starts or the robot restarts [s]."
    )
    wait_periods: int = Field(
        default=2, ge=0, le=50, description="Periods to wait for a missing sample before it counts as lost."
    )
    stream_stale_s: Positive = Field(
        default=0.1, description="Silence after which the stream counts as stale [s]."
    )
    gap_limit_s: Positive = Field(
        default=0.02,
        description=(
            "Lost samples in a row that span longer raise a signal alarm, and the balance begins anew; "
            "fewer are bridged and counted. At most 20 periods are bridged [s]."
        ),
    )
    clock_jump_periods: Positive = Field(
        default=50.0, description="How far the robot's clock may leave `seq` between two samples [periods]."
    )
    position_margin: NotNegative = Field(
        default=0.1, description="How far beyond the travel a position is still credible [rad or m]."
    )
    velocity_limit_ratio: Positive = Field(
        default=1.5, description="Largest credible speed, as a multiple of velocity_max."
    )
    torque_credible_ratio: Positive = Field(
        default=3.0, description="Largest credible torque, as a multiple of peak_torque."
    )
    torque_limit_ratio: float = Field(
        default=0.98,
        gt=0,
        le=1,
        description="Share of peak_torque at which the drive counts as at its limit: reported, not a fault.",
    )
    foot_force_ratio: Positive = Field(
        default=0.4,
        description="How large each component of a standing foot's force is, as a share of the weight.",
    )
    foot_guard_s: NotNegative = Field(
        default=0.04,
        description=(
            "For so long after its planned lift-off a foot may still carry: it leaves the ground some "
            "milliseconds late, and the residual lags by some more [s]."
        ),
    )
    foot_early_s: NotNegative = Field(
        default=0.01,
        description="A foot may meet ground so long before it is planned to, which is no event [s].",
    )
    foot_landing_s: NotNegative = Field(
        default=0.02, description="A foot may meet ground so long after it was planned to [s]."
    )
    foot_lost_s: Positive = Field(
        default=0.015,
        description="A planned foot that was without force for so long has lost its hold [s].",
    )
    frozen_s: Positive = Field(
        default=0.05,
        description="A position that stays the same this long while the joint moves is frozen [s].",
    )
    frozen_velocity: Positive = Field(
        default=0.03, description="Velocity reading from which on the joint counts as moving [rad/s or m/s]."
    )
    frozen_torque_ratio: Positive = Field(
        default=0.5,
        description=(
            "A joint whose readings repeat exactly although torques beyond its friction and this share of "
            "rated torque act on it, one way and then the other, has a frozen encoder."
        ),
    )
    frozen_torque_s: Positive = Field(
        default=0.5, description="Longest time between such torques that belong together [s]."
    )
    position_jump: Positive | None = Field(
        default=None,
        examples=[0.0005],
        description=(
            "Largest credible jump of a position, beyond what its velocity, its last positions and "
            "credible_acceleration explain; default: encoder_step and 10 standard deviations of the joint's "
            "noise [rad or m]."
        ),
    )
    credible_acceleration: Positive = Field(
        default=1000.0, description="Acceleration of a joint in the hardest blow [rad/s^2 or m/s^2]."
    )
    noise_ratio: Positive = Field(
        default=3.5,
        description=(
            "Second differences of a position, velocity or torque beyond so many standard deviations are too "
            "noisy where they keep alternating; a torque's must also leave what its drive has shown before. "
            "The default finds 10 times the configured noise within 30 samples."
        ),
    )
    base_jump: Positive = Field(
        default=0.03,
        description=(
            "Floating base: largest credible step of position or attitude in one sample beyond what its "
            "velocity explains [m and rad]."
        ),
    )
    contradiction: Positive | None = Field(
        default=None,
        examples=[0.03],
        description=(
            "Largest credible difference of integrated velocity and change of position, beyond what "
            "velocity_lag_s explains; default: encoder_step, 10 standard deviations of the joint's noise, "
            "and credible_acceleration * velocity_lag_s^2 for a blow that the velocity does not show yet "
            "[rad or m]."
        ),
    )
    velocity_lag_s: NotNegative = Field(
        default=0.005, description="How late the velocity reading may be against the position [s]."
    )
    contradiction_s: Positive = Field(
        default=0.1, description="Time over which that difference is formed [s]."
    )
    dropouts_ratio: Positive = Field(
        default=0.05, description="Share of scattered samples lost within a second that raises an alarm."
    )
    duplicates_ratio: Positive = Field(
        default=0.05, description="Share of samples doubled within a second that raises an alarm."
    )
    command_error_ratio: Positive = Field(
        default=0.05,
        description="Difference of `tau` and `tau_cmd`, as a share of rated torque, that a drive may show.",
    )
    command_error_s: Positive = Field(
        default=0.02, description="A larger difference for this long is an actuator event by itself [s]."
    )
    brake_motion: Positive = Field(
        default=0.01,
        description=(
            "How far a joint may move after its brake is reported closed; motion in the first 0.3 s, while "
            "it closes, does not count [rad or m]."
        ),
    )

    @model_validator(mode="after")
    def _check(self) -> Self:
        for low, high in (("slow_walk", "fast_walk"), ("slow_bandwidth_hz", "fast_bandwidth_hz")):
            if getattr(self, low) >= getattr(self, high):
                raise refusal(low, f"{getattr(self, low)}", f"less than {high}, {getattr(self, high)}")
        if self.torque_credible_ratio <= 1.0:
            raise refusal(
                "torque_credible_ratio",
                f"{self.torque_credible_ratio}",
                "more than 1: a drive at its limit is not a bad signal",
            )
        if self.velocity_limit_ratio < 1.0:
            raise refusal("velocity_limit_ratio", f"{self.velocity_limit_ratio}", "at least 1")
        return self


Rate = Annotated[float, Field(gt=0, le=3600)]
Probability = Annotated[float, Field(gt=0.5, lt=1)]


class ExplainConfig(Table):
    """`[explain]`: how often what happens to this robot, in its hours of motion, and when to believe it."""

    contact_per_h: Rate = Field(default=100.0, description="Contacts with the world, on all links [1/h].")
    actuator_per_h: Rate = Field(default=1.0, description="Faults of actuators, of all joints [1/h].")
    position_sensor_per_h: Rate = Field(
        default=0.3, description="Position readings that get an offset, of all joints [1/h]."
    )
    torque_sensor_per_h: Rate = Field(
        default=0.3, description="Torque sensors at links that begin to read wrong, of all joints [1/h]."
    )
    load_per_h: Rate = Field(
        default=20.0, description="Loads taken up or lost without being announced [1/h]."
    )
    touchdown_per_h: Rate = Field(
        default=100.0, description="Feet that meet ground where none is planned, all feet [1/h]."
    )
    foothold_lost_per_h: Rate = Field(
        default=100.0, description="Feet that carry nothing where they are planned to, all feet [1/h]."
    )
    other_per_h: Rate = Field(default=1.0, description="Whatever is none of these [1/h].")
    nothing_per_h: Rate = Field(
        default=3.0, description="Events that nothing caused: noise, friction, errors of the model [1/h]."
    )
    certainty: Probability = Field(
        default=0.9,
        description='Probability from which on a verdict is given; below, it is "undecided" and names all.',
    )
    lasting_probability: Probability = Field(
        default=0.95,
        description=(
            "Probability from which on, held for lasting_s, a fault is lasting: the model takes it in, "
            "so that what happens beside it can be told."
        ),
    )
    lasting_s: Positive = Field(
        default=2.0, description="How long that probability has to hold before the fault is taken in [s]."
    )
    friction_drift: Positive = Field(
        default=0.5,
        description=(
            "How far Coulomb and viscous friction of a joint may slowly leave the commissioned ones, as a "
            "share of these; where they are next to nothing, of 2 % of rated torque (at 1 rad/s)."
        ),
    )
    offset_drift: Positive = Field(
        default=0.03,
        description="How far a constant torque may slowly come up, as a share of rated torque.",
    )
    drift_memory_s: Positive = Field(
        default=300.0,
        description="Time in motion, quiet otherwise, over which these are estimated; rest is left out [s].",
    )
    drift_s: Positive = Field(
        default=60.0,
        description="Time in motion for which one has to be beyond, with `certainty`, to raise an alarm [s].",
    )
    largest_load_kg: Positive = Field(
        default=1.0, description="Largest load that may be taken up unannounced, as expected [kg]."
    )

    @model_validator(mode="after")
    def _check(self) -> Self:
        if self.lasting_probability < self.certainty:
            raise refusal(
                "lasting_probability",
                f"{self.lasting_probability}",
                f"at least certainty, {self.certainty}: no fault is taken in that is not yet told",
            )
        return self


class AlarmsConfig(Table):
    """`[alarms]`."""

    publish: bool = Field(
        default=True, description="Send alarms on the output socket; they are recorded in any case."
    )


class RecordConfig(Table):
    """`[record]`."""

    enabled: bool = Field(default=True, description="Write sessions (black box).")
    folder: Name = Field(
        default="sessions", description="Folder of the sessions; a relative one starts at this file's folder."
    )
    flush_s: Positive = Field(
        default=1.0, description="A crash loses at most this much of the recording [s]."
    )
    snapshot_s: Positive = Field(
        default=10.0, description="Time between snapshots a replay can start from [s]."
    )
    queue: int = Field(
        default=20_000,
        ge=100,
        le=10_000_000,
        description="Messages kept for the recorder; beyond, a gap is recorded.",
    )
    max_session_s: Positive = Field(
        default=3600.0, description="A new session file begins after this time [s]."
    )
    keep_gib: Positive = Field(
        default=20.0, description="The oldest sessions are removed when all together are larger [GiB]."
    )

    @model_validator(mode="after")
    def _check(self) -> Self:
        for short in ("flush_s", "snapshot_s"):
            if getattr(self, short) > self.max_session_s:
                raise refusal(
                    short, f"{getattr(self, short)}", f"at most max_session_s, {self.max_session_s}"
                )
        return self


class DeskConfig(Table):
    """`[desk]`."""

    metrics_host: Name = Field(default="127.0.0.1", description="Address the metrics are served at.")
    metrics_port: int = Field(default=9637, ge=1, le=65535, description="Port the metrics are served at.")
    allow_remote: bool = Field(
        default=False, description="true lets metrics_host be reachable from other machines, unencrypted."
    )

    @model_validator(mode="after")
    def _check(self) -> Self:
        if not self.allow_remote and not _is_loopback(self.metrics_host):
            raise refusal(
                "metrics_host",
                json.dumps(self.metrics_host),
                "a loopback address: the metrics are not encrypted",
                'Use "127.0.0.1", or set desk.allow_remote = true if the network is trusted.',
            )
        return self


class RealtimeConfig(Table):
    """`[realtime]`."""

    priority: int = Field(
        default=0,
        ge=0,
        le=98,
        description="SCHED_FIFO priority of the loop, 1 to 98; 0 leaves the ordinary scheduler.",
    )
    cpu: tuple[Annotated[int, Field(ge=0, le=4095)], ...] = Field(
        default=(), description="Processors the loop may run on; [] for any."
    )
    lock_memory: bool = Field(
        default=False, description="Keep the memory of the loop from being swapped out."
    )


class Config(Table):
    """A whole configuration, with the text it was read from and the model files it names."""

    schema_version: Literal[1] = Field(alias="schema", description="Version of this file's format.")
    robot: RobotConfig = Field(description="What the machine is.")
    input: InputConfig = Field(default=InputConfig(), description="Where samples come from.")
    output: OutputConfig = Field(
        default=OutputConfig(), description="Where alarms, verdicts and health go to."
    )
    watch: WatchConfig = Field(
        default=WatchConfig(), description="How residuals are formed, and what counts as credible."
    )
    explain: ExplainConfig = Field(
        default=ExplainConfig(),
        description="How often what happens, in hours of motion, and when an explanation is believed.",
    )
    alarms: AlarmsConfig = Field(default=AlarmsConfig(), description="When people hear of it.")
    record: RecordConfig = Field(default=RecordConfig(), description="What is kept.")
    desk: DeskConfig = Field(default=DeskConfig(), description="Metrics for dashboards.")
    realtime: RealtimeConfig = Field(
        default=RealtimeConfig(),
        description="Rights the loop asks for; each is reported as granted or refused.",
    )

    _path: Path = PrivateAttr(default=Path())
    _source_toml: str = PrivateAttr(default="")
    _files: Mapping[str, str] = PrivateAttr(default_factory=dict)

    @property
    def path(self) -> Path:
        """The file this was read from (for `loads`: the given `where`)."""
        return self._path

    @property
    def source_toml(self) -> str:
        """The text as it was read."""
        return self._source_toml

    @property
    def urdf_text(self) -> str:
        """The robot description as it was read."""
        return self._files[self.robot.urdf]

    @property
    def calibration_text(self) -> str:
        """What commissioning wrote, as it was read; empty if the configuration names none."""
        return self._files[self.robot.calibration] if self.robot.calibration else ""

    def model_files(self) -> dict[str, str]:
        """Name (as the configuration writes it) → text of every model file; a session carries these."""
        return dict(self._files)

    @property
    def record_folder(self) -> Path:
        """Folder of the sessions."""
        return self._path.parent / self.record.folder

    @property
    def motion_limits(self) -> tuple[tuple[float, float], ...]:
        """(position_jump, contradiction) of each joint, in wire order [rad or m]."""
        watch, found = self.watch, []
        blow = watch.credible_acceleration * watch.velocity_lag_s**2
        for joint in self.robot.joint:
            jump, drift = _motion_limits(joint, watch, 1.0 / self.input.rate_hz, 10.0)
            found.append((watch.position_jump or jump, watch.contradiction or drift + blow))
        return tuple(found)

    @model_validator(mode="after")
    def _check(self) -> Self:
        self._check_rates()
        self._check_sockets()
        for key, (floor, why) in standstill_floors(self.robot, self.input, self.watch).items():
            limit = getattr(self.watch, key)
            if limit is not None and limit < floor:
                raise refusal(
                    ("watch", key),
                    f"{limit}",
                    f"at least {floor:.4g}, or it fires while the robot stands still ({why})",
                )
        return self

    def _check_rates(self) -> None:
        watch, rate = self.watch, self.input.rate_hz
        if watch.residual != "joint-space" and watch.fast_bandwidth_hz > rate / 5:
            raise refusal(
                ("watch", "fast_bandwidth_hz"),
                f"{watch.fast_bandwidth_hz}",
                f"at most a fifth of input.rate_hz, {rate / 5:g}",
            )
        if self.input.messages_per_tick * watch.loop_hz < rate:
            raise refusal(
                ("input", "messages_per_tick"),
                f"{self.input.messages_per_tick}",
                f"at least {rate / watch.loop_hz:.3g}: {watch.loop_hz:g} ticks a second must take in "
                f"{rate:g} samples",
            )

    def _check_sockets(self) -> None:
        if self.input.address == self.output.address:
            raise refusal(
                ("output", "address"), json.dumps(self.output.address), "another than input.address"
            )
        _, port = _endpoint("address", self.output.address)
        if port == self.desk.metrics_port:
            raise refusal(("desk", "metrics_port"), f"{port}", "another port than the one of output.address")


def standstill_floors(
    robot: RobotConfig, input_: InputConfig, watch: WatchConfig
) -> dict[str, tuple[float, str]]:
    """Least values of the credibility limits at which noise alone cannot fire them.

    Returns
    -------
    dict
        Key of `[watch]` → (least value in the key's unit, the reason in words). The margins are
        8 standard deviations where one sample can fire (1e-15 per sample), 4 where many in a row must.
    """
    period = 1.0 / input_.rate_hz
    joints = robot.joint
    motion = [_motion_limits(joint, watch, period, 8.0) for joint in joints]
    step = max(joint.encoder_step for joint in joints)
    position = max(joint.position_noise_sd for joint in joints) * sqrt(2.0)
    velocity = max(joint.velocity_noise_sd for joint in joints)
    torque = max(joint.torque_noise_sd / joint.rated_torque for joint in joints)
    waiting = f"{watch.wait_periods + 1} periods of waiting"
    base = (
        max(robot.base_noise.position_sd, robot.base_noise.attitude_sd) if robot.base == "floating" else 0.0
    )
    return {
        "base_jump": (8.0 * sqrt(2.0) * base, "base_noise"),
        "frozen_velocity": (4.0 * velocity, "velocity_noise_sd"),
        "frozen_s": (max(2.0 * step / watch.frozen_velocity, 3.0 * period), "encoder_step and input.rate_hz"),
        "frozen_torque_ratio": (8.0 * torque, "torque_noise_sd"),
        "position_jump": (max(jump for jump, _ in motion), "position and velocity noise"),
        "noise_ratio": (3.5, "noise as configured"),
        "contradiction": (max(drift for _, drift in motion), "position and velocity noise"),
        "contradiction_s": (3.0 * period, "input.rate_hz"),
        "brake_motion": (step + 8.0 * position, "position noise"),
        "command_error_ratio": (4.0 * torque, "torque_noise_sd"),
        "stream_stale_s": ((watch.wait_periods + 1) * period, waiting),
    }


def _motion_limits(joint: JointConfig, watch: WatchConfig, period: float, sds: float) -> tuple[float, float]:
    """Position jump and contradiction [rad or m] which the noise of a joint reaches at so many sds."""
    position, velocity = sqrt(2.0) * joint.position_noise_sd, sqrt(2.0) * joint.velocity_noise_sd
    jump = hypot(position, 0.5 * velocity * period)
    drift = hypot(position, velocity * sqrt(watch.contradiction_s * period))
    return joint.encoder_step + sds * jump, joint.encoder_step + sds * drift


def load(path: Path) -> Config:
    """Read a configuration file and the model files it names.

    Raises
    ------
    ConfigError
        The file cannot be read, or asks for something that cannot be.
    """
    text = read_text(path, str(path))
    config = _validated(text, str(path))
    files = {name: read_text(path.parent / name, f"{path}: {key}") for key, name in _named_files(config)}
    return _completed(config, path, text, files)


def loads(text: str, where: str, files: Mapping[str, str]) -> Config:
    """Read a configuration from memory, as a session carries it.

    Parameters
    ----------
    text : str
        TOML.
    where : str
        What errors call the text; becomes `Config.path`.
    files : Mapping[str, str]
        Texts of the model files by the names the configuration uses (see `Config.model_files`).
    """
    config = _validated(text, where)
    named = _named_files(config)
    for key, name in named:
        if name not in files:
            raise ConfigError(f"{where}: {key}", f"{name!r}", f"one of the files at hand: {sorted(files)}")
    return _completed(config, Path(where), text, {name: files[name] for _, name in named})


def read_text(path: Path, where: str) -> str:
    """Text of a UTF-8 file; a `ConfigError` at `where` if that cannot be had."""
    try:
        return path.read_bytes().decode("utf-8-sig")
    except OSError as error:
        raise ConfigError(where, f"{path}: {error.strerror}", "a file that can be read") from error
    except UnicodeDecodeError as error:
        raise ConfigError(where, f"{path}: byte {error.start} is not UTF-8", "text in UTF-8") from error


def _named_files(config: Config) -> list[tuple[str, str]]:
    """Return key and name of every model file."""
    named = [("robot.urdf", config.robot.urdf), ("robot.calibration", config.robot.calibration)]
    return [(key, name) for key, name in named if name]


def _completed(config: Config, path: Path, text: str, files: Mapping[str, str]) -> Config:
    config._path, config._source_toml, config._files = path, text, files
    return config


def _validated(text: str, where: str) -> Config:
    try:
        document = tomllib.loads(text)
    except (ValueError, RecursionError) as error:
        raise ConfigError(where, f"text that is not TOML: {error}", "TOML") from error
    _check_schema(document, where)
    return validated(Config, document, where, text)


def _check_schema(document: dict[str, Any], where: str) -> None:
    version = document.get("schema")
    if version == SCHEMA and type(version) is int:
        return
    found = "nothing" if "schema" not in document else shown(version)
    todo = f"Put `schema = {SCHEMA}` into the first line if the file was written for this version."
    if type(version) is int and version > SCHEMA:
        todo = "The file is newer than this program: update limbtell."
    elif type(version) is int:
        todo = "Write a new file with `limbtell init` and carry your values over."
    raise ConfigError(f"{where}: schema", found, f"{SCHEMA}", todo)
