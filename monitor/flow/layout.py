"""The four blocks of the data path, each field declared once: name, shape, unit and meaning.

`params` is written by setup/build and never after; `inputs` by flow (wire, coverage); `state` by the step and
the counters of flow; `outputs` by the step. A block is a one-element structured array: `x = state[0]` and
`x["r"]` read the same compiled and interpreted. A snapshot of the data path holds all but `params`.

Sizes: n degrees of freedom (a floating base counts six), nq numbers in q, m joints on the wire, N axes,
D samples in the delay line, B bodies and F feet that may be touched, X explanations, K constant and Q smooth
candidates (ways an explanation may look), T joints with a torque sensor at their link side. What is judged
and weighed has `rows`: the n of the model (link sides, where there is such a sensor), then T motor sides.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from enum import IntEnum
from functools import cache
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from monitor.explain.outline import Explanation
from monitor.kernels.band import CAUSES
from monitor.kernels.ledger import BENDS
from monitor.robot.tree import Tree

Block = NDArray[np.void]
Floats = NDArray[np.float64]


class Sizes(NamedTuple):
    """What the shapes of all blocks follow from."""

    n: int
    nq: int
    m: int
    N: int
    D: int
    B: int
    F: int
    X: int
    K: int
    Q: int
    T: int = 0

    @property
    def rows(self) -> int:
        """Rows that are judged: those of the model, then the motor sides."""
        return self.n + self.T

    @property
    def most(self) -> int:
        """States of the largest smooth candidate."""
        return self.rows + 3 * SMOOTH

    @property
    def base(self) -> int:
        """Degrees of freedom of the base: 6 or 0."""
        return self.n - self.m


class Blocks(NamedTuple):
    """The four blocks of one robot's data path."""

    params: Block
    inputs: Block
    state: Block
    outputs: Block


class Tool(NamedTuple):
    """Where payloads are carried."""

    axis: int  # axis that moves the tool link
    T: NDArray[np.float64]  # (4,4) pose of the link in the body frame of that axis


@dataclass(frozen=True, eq=False)
class Facts:
    """What flow has to know of the robot and the configuration beside the blocks; times in ns."""

    robot: str
    joints: tuple[str, ...]  # order of the wire
    rows: tuple[str, ...]  # names of the rows that are judged: those of v, base first, then the motor sides
    units: tuple[str, ...]  # N m or N, by row
    link_torque: tuple[int, ...]  # places on the wire of the joints with a torque sensor at the link side
    feet: tuple[str, ...]
    floating: bool
    serial: str
    row_needs: NDArray[np.bool_]  # (m,m): which joints on the wire enter which joint row
    tree: Tree
    explanations: tuple[Explanation, ...]  # in the order of `outputs.probability`, after nothing and other
    twins: Mapping[str, str]  # by link: the only joint that forces on it load
    certainty: float  # probability from which on a verdict is given
    tool: Tool | None
    wait_ns: int  # longest wait for a missing sample
    stream_stale_ns: int
    condition_stale_ns: int
    quiet_ns: int
    dropouts_ratio: float  # shares of samples within a second that raise an alarm
    duplicates_ratio: float


class Form(IntEnum):
    """How the residual is formed from one sample to the next (methods in kernels/ledger.py)."""

    JOINT_SPACE = 0
    SECOND_ORDER = 1
    FIRST_ORDER = 2


class Signal(IntEnum):
    """Why a sample was not credible; the name, lower case with hyphens, is the alarm's detail."""

    OK = 0
    NON_FINITE = 1
    OUT_OF_RANGE = 2
    CLOCK = 3
    JUMP = 4
    FROZEN = 5
    CONTRADICTION = 6
    BASE_POSE = 7
    NOISE = 8


class Coverage(IntEnum):
    """How far the monitor can see."""

    WATCHING = 0
    CONDITIONAL = 1
    BLIND = 2


class Reason(IntEnum):
    """Why coverage is not `watching`; the first that applies is given, gravest first."""

    NONE = 0
    NO_STREAM = 1  # no joint sample yet, or the stream is silent
    REFUSED = 2  # another robot's serial
    SETTLING = 3  # after a start, a gap, bad samples or a change of condition
    BRAKED = 4
    UNPOWERED = 5
    CONDITION_UNKNOWN = 6  # topic `robot` absent or stale
    GUIDED = 7
    CALIBRATING = 8
    STOPPED = 9  # a stop is in force: the drives may be braking or about to lose power
    HELD = 10  # floating base: people or a dock hold the body, with forces nobody knows
    FEET_UNKNOWN = 11  # on the ground, and nobody says which feet are planned to stand
    PAYLOAD_UNKNOWN = 12
    SINCE_START = 13  # something was there already when the judgement began
    LINK_TORQUE_MISSING = 14  # a torque sensor is configured and does not read: drive and world are one sum


class Notice(IntEnum):
    """Bits of `outputs.notice`: what flow has to look at after a step."""

    EVENT_OPENED = 1
    EVENT_ENDED = 2
    WEIGHED = 128
    FAULT_CONFIRMED = 256
    FAULT_CEASED = 512
    BAD_SAMPLE = 4
    BRAKE_MOVED = 8
    TORQUE_AT_LIMIT = 16
    DISOBEYED = 32
    GAP = 64
    DRIFTED = 1024
    LINK_TORQUE = 2048  # a link's torque sensor fell silent or came back


# What an event may be held to be. These names are stable; programs read them.
VERDICTS = (
    "contact", "touchdown", "foothold-lost", "actuator", "position-sensor", "torque-sensor", "load", "signal",
    "system", "undecided",
)  # fmt: skip

# Alarm kinds and their priorities; what they mean is documented in the README.
KINDS = {
    "unexplained-torque": "high",
    "contact": "high",
    "actuator": "high",
    "sensor": "medium",
    "load": "medium",
    "brake": "high",
    "robot": "high",
    "drive": "medium",
    "drift": "medium",
    "signal": "medium",
    "wire": "medium",
    "system": "medium",
}

# Upper edges [s] of the histogram of how late a tick began; one more bucket holds the rest.
LATENESS_EDGES_S = (50e-6, 100e-6, 200e-6, 500e-6, 1e-3, 2e-3, 5e-3, 10e-3, 50e-3, 200e-3)


# Residuals and what goes with them, kept for an event that is dated back: so many evidence steps.
RING = 32
# Columns of a smooth candidate, at most; a constant and the shapes of its rise; parameters of a lasting
# fault, at most; filtered torque, tanh(v/v0), v.
SMOOTH, RISE, LASTING, FEATURES = 6, 3, 4, 3
# Lasting faults that can be part of the model at a time.
FAULTS = 2

# Gains of the joint-space form are kept for Δt of 1 to so many periods; a longer gap re-bases. The number is
# fixed, since it is part of the blocks' type, for which the step is compiled.
GAIN_STEPS = 20


class Right(IntEnum):
    """Whether the machine granted what the loop asked for."""

    NOT_ASKED = 0
    GRANTED = 1
    REFUSED = 2


f8, i8 = "f8", "i8"
Field = tuple[str, str, tuple[Any, ...]]


def params_fields(s: Sizes) -> list[Field]:
    """Constants of one robot and one configuration."""
    n, m, N, rows = s.n, s.m, s.N, s.rows
    return [
        # the tree: see kernels/dynamics.py
        ("parent", i8, (N,)),
        ("kind", i8, (N,)),
        ("dof", i8, (N,)),
        ("multiplier", f8, (N,)),
        ("offset", f8, (N,)),
        ("R_PJ", f8, (N, 3, 3)),
        ("p_PJ", f8, (N, 3)),
        ("axis", f8, (N, 3)),
        ("armature", f8, (n,)),  # kg m²: rotor inertia seen at the joint, where motors are not coupled
        ("coupled", i8, ()),  # 1: rotor inertia is the matrix `rotor` instead
        ("rotor", f8, (n, n)),  # kg m²: coupling^-T diag(motors' inertia) coupling^-1
        ("gravity", f8, (3,)),  # m/s²
        # from the wire to the model: q = to_q @ wire + q_zero, v = to_q @ wire, tau = to_tau @ wire
        ("to_q", f8, (m, m)),
        ("q_zero", f8, (m,)),
        ("to_tau", f8, (m, m)),
        ("gravity_part", f8, (n,)),  # 1, or 0 where the reported torque leaves gravity out
        ("state_lag", i8, ()),  # samples by which q and qd are held back
        ("tau_lag", i8, (m,)),  # samples by which each joint's torque is held back
        # torque sensors at the link side
        ("link_row", i8, (s.T,)),  # row of v of the joint
        ("link_wire", i8, (s.T,)),  # its place on the wire
        ("link_sign", f8, (s.T,)),
        ("link_range", f8, (s.T,)),  # N m: beyond, the sensor reads nothing
        ("link_back_ns", i8, ()),  # how long a sensor that fell silent has to read before it counts again
        # friction of the model at the joint: viscous v + coulomb tanh(v / friction_velocity) + offset
        ("viscous", f8, (n,)),
        ("coulomb", f8, (n,)),
        ("bend", f8, (n, BENDS)),
        ("friction_offset", f8, (n,)),
        ("friction_velocity", f8, (n,)),
        # the ledger
        ("form", i8, ()),
        # by Δt in periods; rows q, v, e; columns position and velocity innovation
        ("gain_fast", f8, (GAIN_STEPS, n, 3, 2)),
        ("gain_slow", f8, (GAIN_STEPS, n, 3, 2)),
        ("pole_fast", f8, ()),  # rad/s, momentum forms
        ("pole_slow", f8, ()),
        # the band
        ("rated", f8, (rows,)),  # N m: what shares of torque refer to
        ("cause_fast", f8, (rows, CAUSES)),  # weights of the causes of the squared residual
        ("cause_slow", f8, (rows, CAUSES)),
        ("e_variance", f8, (n,)),  # (rad/s²)²: of e_fast by sensor noise alone
        ("cause_pole", f8, ()),  # rad/s: the causes' low-pass
        ("hold_s", f8, ()),  # how long standing or reversing counts on
        ("rho", f8, (rows, rows)),  # correlation of the residuals
        ("slow_share", f8, (rows,)),  # share of the variance that is slow noise
        ("slow_keep", f8, ()),  # its correlation over one evidence step
        # how far the model is trusted, [off the ground, on planned feet]:
        ("dependent", f8, (2,)),  # steps whose model error is one and the same
        ("evidence_weight", f8, (2,)),
        ("hides", f8, (2,)),  # share of Coulomb friction that a standing joint may hide
        ("model_error", f8, ()),  # share of the residual itself
        ("track_sd", f8, (rows, 3)),  # prior of added Coulomb, viscous and constant friction
        ("track_keep", f8, ()),  # what is kept over one evidence step
        ("track_noise", f8, ()),  # how many evidence steps count as one
        ("track_clip", f8, ()),  # sd
        # the trend of friction over hours: limits of added Coulomb, viscous and constant friction
        ("trend_limit", f8, (rows, 3)),
        ("trend_keep", f8, ()),  # what is kept over one evidence step
        ("trend_sure", f8, ()),  # sd beyond the limit that make it certain
        ("trend_s", f8, ()),  # for how long, before it counts
        # events
        ("row_limit", f8, ()),  # |residual| / sd of one row that opens an event, fast and slow
        ("slow_limit", f8, ()),
        ("slow_later_s", f8, ()),  # by how much the slow residual is later than the fast one
        ("body_limit", f8, ()),  # of all rows: r' R^-1 r
        ("quiet_ratio", f8, ()),  # share of the limits below which the robot is quiet
        ("onset_ratio", f8, ()),  # share of the limits below which an event has not begun
        ("cusum_sd", f8, (rows,)),  # N m: lasting error of the model; what is summed counts it beside noise
        ("cusum_reference", f8, ()),
        ("cusum_limit", f8, ()),
        ("cusum_samples", i8, ()),  # samples in a block
        # evidence
        ("evidence_samples", i8, ()),  # samples between evidence steps
        ("column_lag", i8, ()),  # evidence steps by which the residual lags the posture
        ("evidence_stages", i8, ()),  # stages of one evidence step; and how many are done per sample
        ("stages_at_once", i8, ()),
        ("least", f8, ()),  # prior sd: a constant below is no fault
        ("body_axis", i8, (s.B,)),
        ("body_centre", f8, (s.B, 3)),  # m, body frame
        ("foot_axis", i8, (s.F,)),
        ("foot_point", f8, (s.F, 3)),
        ("foot_radius", f8, (s.F,)),  # m: ground is met so far below the point
        ("up", f8, (3,)),  # against gravity
        ("foot_force_sd", f8, ()),  # N: prior of each component of the force of a foot that stands
        ("foot_guard_ns", i8, ()),  # for so long after its planned lift-off a foot may still carry
        ("foot_lands_ns", i8, ()),  # a foot that stands may take so long to meet ground
        ("foot_lost_ns", i8, ()),  # and may be without force for so long
        ("foothold_of", i8, (s.F,)),  # explanation of a lost foothold, by foot
        ("foot_early_ns", i8, ()),  # a foot may meet ground so long before it is planned to
        ("slow_body_limit", f8, ()),  # as body_limit, of the slow residual of a walker
        ("foot_limit", f8, ()),  # of the squared normalised force of a foot that should feel none
        ("body_share", f8, (s.F + 1,)),  # of body_limit, by feet on the ground: each takes three components
        ("load_axis", i8, ()),
        ("load_centre", f8, (3,)),
        ("other_sd", f8, (rows,)),  # N m: of something else
        ("of_family", i8, (s.X,)),  # of each explanation: family, index and prior sd of what may last
        ("of_index", i8, (s.X,)),
        ("of_sd", f8, (s.X, LASTING)),
        ("sure", f8, ()),  # probability from which on an explanation is certain
        ("sure_ns", i8, ()),  # and for how long, before it counts as lasting
        ("log_rate", f8, (s.X + 2,)),  # of nothing, something else, then the explanations
        # candidates: family and index as in monitor/explain, the explanation they belong to
        ("constant_family", i8, (s.K,)),
        ("constant_index", i8, (s.K,)),
        ("constant_of", i8, (s.K,)),
        ("constant_sd", f8, (s.K,)),
        ("constant_one_sided", i8, (s.K,)),
        ("constant_share", f8, (s.K,)),  # log share of the explanation's rate
        ("constant_ends", f8, (s.K,)),  # log chance that it ends within an evidence step
        ("smooth_family", i8, (s.Q,)),
        ("smooth_index", i8, (s.Q,)),
        ("smooth_of", i8, (s.Q,)),
        ("smooth_columns", i8, (s.Q,)),
        ("smooth_sd", f8, (s.Q, SMOOTH)),
        ("smooth_share", f8, (s.Q,)),
        ("smooth_ends", f8, (s.Q,)),
        ("smooth_sized", i8, (s.Q,)),  # components that make up the size: a force's three, or the first
        ("smooth_settles", i8, (s.Q,)),
        ("smooth_one_sided", i8, (s.Q,)),
        ("smooth_dt_T", f8, (s.Q, SMOOTH)),  # evidence step over time constant
        ("smooth_moves", f8, (s.Q, SMOOTH)),  # share of the prior's variance with which a component goes on
        # limits of credibility, in joint order of the wire
        ("q_min", f8, (m,)),
        ("q_max", f8, (m,)),
        ("qd_max", f8, (m,)),
        ("tau_max", f8, (m,)),
        ("tau_peak", f8, (m,)),  # at or beyond it the drive is at its limit
        ("command_error", f8, (m,)),  # largest credible difference of tau and tau_cmd
        ("command_error_ns", i8, ()),
        ("clock_jump_ns", i8, ()),  # how far Δt may leave Δseq times the period
        ("jump", f8, (m,)),  # rad: largest credible step of position beyond what the motion explains
        ("acceleration_max", f8, ()),  # rad/s²: of the hardest blow
        ("drift", f8, (m,)),  # rad: largest credible difference of ∫v dt and Δq
        ("velocity_lag", f8, ()),  # s: by which the velocity may be late
        ("drift_s", f8, ()),  # s: that difference is forgotten with this time constant
        ("frozen_velocity", f8, (m,)),  # rad/s: a joint that reports more than this does move
        ("frozen_ns", i8, ()),
        ("bend_q", f8, (m,)),  # rad, rad/s: second differences of q and qd that noise does not reach
        ("bend_qd", f8, (m,)),
        ("bend_ratio", f8, ()),  # standard deviations in these limits
        ("noise_qd", f8, (m,)),  # rad/s: sd of the velocity
        ("noise_tau", f8, (m,)),  # sd of the torque on the wire; infinite where none is configured
        ("wire_row", i8, (m,)),  # row of v of the joint on the wire, -1 behind a coupling
        ("push", f8, (m,)),  # N m beyond friction that nothing holds both ways
        ("push_ns", i8, ()),  # ways that far apart belong together
        ("base_position_max", f8, ()),  # m
        ("base_jump", f8, ()),  # m or rad: as `jump`, for the pose of the base
        ("base_speed_max", f8, ()),  # m/s and rad/s
        ("brake_motion", f8, (m,)),  # rad a braked joint may move
        ("period_ns", i8, ()),
        ("gap_ns", i8, ()),  # a longer Δt re-bases the ledger
        ("settle_ns", i8, ()),  # pause of the judgement after a re-base
        ("start_settle_ns", i8, ()),  # the same after a start or a change of condition
        ("quiet_ns", i8, ()),  # quiet that ends an event
        ("brake_settle_ns", i8, ()),  # a closing brake may still move for so long
    ]


def inputs_fields(s: Sizes) -> list[Field]:
    """One sample as the robot sent it, and the condition it is in."""
    m, N = s.m, s.N
    return [
        # t_ns to feet lie together: `flow.wire` writes a message there in one copy.
        ("t_ns", i8, ()),  # robot clock
        ("seq", i8, ()),
        ("q", f8, (m,)),  # rad or m, order and sign of the wire
        ("qd", f8, (m,)),
        ("tau", f8, (m,)),
        ("base_p", f8, (3,)),  # m, world
        ("base_quat", f8, (4,)),  # w x y z
        ("base_v", f8, (3,)),  # m/s, world axes
        ("base_w", f8, (3,)),  # rad/s, body axes
        ("tau_cmd", f8, (m,)),  # commanded torque, units of tau; NaN where not sent
        ("tau_link", f8, (s.T,)),  # N m, sign of the wire; NaN where not sent
        ("feet", i8, (s.F,)),  # 1 planned to stand, 0 not, -1 not said
        ("rebase", i8, ()),  # 0 no, 1 gap or bad signal, 2 start, restart or change of condition
        ("brake", i8, (m,)),  # 1 closed
        ("drive", i8, (m,)),  # 1 powered
        ("guided", i8, ()),  # 1: a person or a calibration moves the robot
        ("judged", i8, (s.rows,)),  # 1 where the residual may open an event
        ("grounded", i8, ()),  # 1: a floating base whose planned feet carry it
        ("E", f8, (N, 4, 4)),  # pseudo-inertias, announced payload included
    ]


def state_fields(s: Sizes) -> list[Field]:
    """Everything one step hands to the next, and the counters."""
    n, nq, m, N, D, T, rows = s.n, s.nq, s.m, s.N, s.D, s.T, s.rows
    work: list[Field] = [
        ("R_W", f8, (N + 1, 3, 3)),
        ("p_W", f8, (N + 1, 3)),
        ("S", f8, (N, 6)),
        ("Sd", f8, (N, 6)),
        ("V", f8, (N + 1, 6)),
        ("Ic", f8, (N, 10)),
        ("Bc", f8, (N, 12)),
        ("M", f8, (n, n)),
        ("C", f8, (n, n)),
        ("g", f8, (n,)),
        ("p", f8, (n,)),
        ("Ctv", f8, (n,)),
        ("M_last", f8, (n, n)),
        ("L", f8, (n, n)),  # Cholesky factor
    ]
    return [
        *work,
        ("q", f8, (nq,)),  # the sample in model terms, delays evened out
        ("v", f8, (n,)),
        ("tau", f8, (n,)),
        ("line_q", f8, (D, nq)),  # delay lines
        ("line_v", f8, (D, n)),
        ("line_tau", f8, (D, m)),
        ("line_link", f8, (D, T)),
        ("line_ns", i8, (D,)),
        ("line_at", i8, ()),
        ("line_held", i8, ()),
        ("started", i8, ()),  # 0 until the ledger has a first sample
        ("pending", i8, ()),  # reason to re-base that waits for a good sample
        ("entered_ns", i8, ()),  # robot clock of the last good sample, before the delay line
        ("at_ns", i8, ()),  # robot clock of the state in model terms
        ("t_ns", i8, ()),  # robot clock of the last sample in the ledger
        ("dt_s", f8, ()),
        ("q_at", f8, (nq,)),  # where the dynamics are taken
        ("v_at", f8, (n,)),
        ("known", f8, (n,)),  # N m: motor torque less friction and gravity
        ("friction_slope", f8, (n,)),  # N m s/rad: friction in proportion to velocity, at v_at
        # joint-space form: fused state and unexplained acceleration per bandwidth
        ("q_fast", f8, (nq,)),
        ("v_fast", f8, (n,)),
        ("e_fast", f8, (n,)),
        ("q_slow", f8, (nq,)),
        ("v_slow", f8, (n,)),
        ("e_slow", f8, (n,)),
        ("a", f8, (n,)),  # acceleration the model expects over the last Δt
        # momentum forms: estimates per bandwidth
        ("p_fast", f8, (n,)),
        ("p_slow", f8, (n,)),
        ("p_last", f8, (n,)),
        ("u", f8, (n,)),  # N m: dp/dt as the model expects it; joint space: M a, friction apart
        ("u_last", f8, (n,)),
        ("r_fast", f8, (n,)),  # N m: residuals
        ("r_slow", f8, (n,)),
        # link side and motor side apart, see flow/link_torque.py
        ("tau_link", f8, (T,)),  # N m: the sample in model terms
        ("read_ns", i8, (T,)),  # robot clock since when the sensor reads without a break; 0 not at all
        ("unsensed", i8, (m,)),  # 1: the joint's sensor is configured and does not read
        ("motor_u", f8, (T,)),  # N m: what the motor gives beyond what passes to the link
        ("motor_u_last", f8, (T,)),
        ("motor_p", f8, (T,)),  # momentum of the rotor, and its estimates (momentum forms)
        ("motor_p_last", f8, (T,)),
        ("motor_p_fast", f8, (T,)),
        ("motor_p_slow", f8, (T,)),
        ("motor_filter", f8, (T, 2, 3)),  # filters of the joint-space form, by bandwidth
        ("motor_fast", f8, (T,)),  # N m: residuals of the motor side
        ("motor_slow", f8, (T,)),
        ("through", f8, (T,)),  # N m: what should pass to the link, as the drive has it
        ("through_filter", f8, (T, 3)),
        ("row_fast", f8, (rows,)),  # N m: residuals of the rows that are judged
        ("row_slow", f8, (rows,)),
        ("raw_q", f8, (m,)),  # last credible sample on the wire, for the signal checks
        ("raw_qd", f8, (m,)),
        ("raw_base_p", f8, (3,)),
        ("raw_base_quat", f8, (4,)),
        ("raw_base_v", f8, (3,)),
        ("raw_base_w", f8, (3,)),
        ("base_still_ns", i8, ()),  # how long the base pose has not changed although its velocity says so
        ("raw_t_ns", i8, ()),
        ("raw_seq", i8, ()),
        ("raw_held", i8, ()),
        ("still_ns", i8, (m,)),  # how long the position has not changed although velocity says so
        ("drift", f8, (m,)),  # rad: leaky Δq − ∫v dt
        ("swing", f8, (m,)),  # rad/s: change of the velocity reading, equally leaky
        ("raw_tau", f8, (m,)),
        ("raw_dt_ns", i8, ()),  # Δt of the last comparison
        ("step_q", f8, (m,)),  # last changes of the readings
        ("step_qd", f8, (m,)),
        ("step_tau", f8, (m,)),
        ("bend_q", f8, (m,)),  # last second differences
        ("bend_qd", f8, (m,)),
        ("bend_tau", f8, (m,)),
        ("score_q", f8, (m,)),  # how much too noisy the reading is
        ("score_qd", f8, (m,)),
        ("score_tau", f8, (m,)),
        # second differences of the torque: the largest mean square of some time, and the mean now
        ("rough_tau", f8, (m,)),
        ("rough_sum", f8, (m,)),
        ("rough_count", i8, (m,)),
        ("same_ns", i8, (m,)),  # how long position and velocity have repeated exactly
        ("copy_ns", i8, ()),  # how long all readings have
        ("run_qd", i8, (m,)),  # exact repetitions in a row at standstill
        ("run_tau", i8, (m,)),
        ("lively_qd", i8, (m,)),  # how surely the reading is noisy at standstill
        ("lively_tau", i8, (m,)),
        ("pushed_ns", i8, (m, 2)),  # same_ns when last pushed either way, -1 never
        ("brake_ns", i8, (m,)),  # since when the brake is closed; 0 open
        ("brake_q", f8, (m,)),
        ("brake_moved", i8, (m,)),
        ("disobeyed_ns", i8, (m,)),  # since when tau differs from tau_cmd; 0 not at all
        ("disobeyed", i8, (m,)),  # 1 once that lasted too long
        ("ratio_peak", f8, (rows,)),  # largest band ratio since the last health message
        # band: filters of the regressors (error of position, velocity, e per feature), causes, variances
        ("respond", f8, (n, FEATURES, 3)),
        ("feature", f8, (rows, FEATURES)),  # tau, tanh(v/v0), v through the residual's filter
        ("cause", f8, (rows, CAUSES)),
        ("held", f8, (n,)),
        ("held_left_s", f8, (n,)),
        ("var_fast", f8, (rows,)),
        ("var_slow", f8, (rows,)),
        ("var_stand", f8, (rows,)),  # part of var_fast
        ("track", f8, (rows, 3)),
        ("track_P", f8, (rows, 3, 3)),
        # all in shares of the limits: what was seen in the memory of the trend, its estimate and sd
        ("trend_info", f8, (rows, 3, 3)),
        ("trend_sum", f8, (rows, 3)),
        ("trend", f8, (rows, 3)),
        ("trend_sd", f8, (rows, 3)),
        ("trend_beyond_s", f8, (rows, 3)),  # time seen since it is certainly beyond its limit
        ("drifted", i8, (3 * rows,)),  # 1: for so long that it is said; 3 row + parameter
        ("explained", f8, (rows,)),  # N m that tracked friction and lasting faults explain
        ("var_slow_kept", f8, (rows,)),  # var_slow, never falling faster than the slow residual
        ("explained_slow", f8, (rows,)),  # N m: explained, as late as the slow residual
        ("fast_ratio", f8, (rows,)),
        ("slow_ratio", f8, (rows,)),
        ("explained_var", f8, (rows,)),
        ("tracked", f8, (rows,)),  # N m of it by tracked friction
        ("left", f8, (rows,)),  # N m: fast residual less what is explained
        ("R", f8, (rows, rows)),
        ("R_factor", f8, (rows, rows)),
        ("white", f8, (rows,)),
        ("body_ratio", f8, ()),
        # feet
        ("foot_J", f8, (s.F, 3, n)),  # Jacobian of the point where each foot meets ground, world axes
        ("foot_carries", i8, (s.F,)),  # 1: it may carry: planned to, or was until a moment ago
        ("foot_lifted_ns", i8, (s.F,)),  # when it was last planned to stand
        ("foot_landed_ns", i8, (s.F,)),  # since when it is planned to stand
        ("foot_felt_ns", i8, (s.F,)),  # when it was last felt to carry, or need not
        ("loaded", i8, (rows,)),  # 1: the row feels a foot that may carry
        ("inverse", f8, (rows, rows)),  # of R_factor
        ("beside", f8, (rows,)),  # N m: left beside the likeliest forces of the feet that may carry
        ("alone", f8, (rows,)),  # N m: what a row has more than all others predict; and its sd
        ("alone_sd", f8, (rows,)),
        ("alone_slow", f8, (2, rows)),  # the same of the slow residual, at the last evidence step
        ("slow_R", f8, (rows, rows)),
        ("slow_factor", f8, (rows, rows)),
        ("pull", f8, (rows,)),  # R^-1 left
        ("foot_white", f8, (3, rows)),
        ("foot_covariance", f8, (3, 3)),
        ("foot_ratio", f8, (s.F, 3)),  # how far the force of a foot stands out, least of the last moments
        ("foot_ratio_ns", i8, (s.F, 3)),
        ("foot_lasts", f8, ()),  # the largest of those least ones
        ("foot_now", f8, ()),  # the largest of this sample, however short
        ("grounded", i8, ()),
        ("slow_body_ratio", f8, ()),
        ("cusum_sum", f8, (rows,)),
        ("cusum_count", i8, ()),
        ("cusum", f8, (rows, 2)),
        ("cusum_since_ns", i8, (rows, 2)),
        ("step_due", i8, ()),  # 1: this sample went into the ring
        ("sampled", i8, ()),  # samples since the last entry of the ring
        # what an evidence step needs, kept for RING steps
        ("ring_ns", i8, (RING,)),
        ("ring_q", f8, (RING, nq)),
        ("ring_v", f8, (RING, n)),
        ("ring_a", f8, (RING, n)),
        ("ring_r", f8, (RING, rows)),
        ("ring_var", f8, (RING, rows)),
        ("ring_stand", f8, (RING, rows)),
        ("ring_extra", f8, (RING, rows)),
        ("ring_hidden", f8, (RING, rows)),  # (N m)²: friction that a standing joint may hide
        ("ring_feature", f8, (RING, rows, FEATURES)),
        ("ring_loud", i8, (RING,)),  # 1: something stood out
        ("ring_beside", f8, (RING, rows)),
        ("ring_foot_J", f8, (RING, s.F, 3, n)),
        ("ring_carries", i8, (RING, s.F)),
        ("ring_head", i8, ()),  # entries written so far
        ("ring_held", i8, ()),  # entries since the last re-base
        ("weigh_next", i8, ()),  # next entry to weigh, and its next stage
        ("weigh_stage", i8, ()),
        ("weighed", i8, ()),  # evidence steps of this event
        # work of one evidence step
        ("x_R_W", f8, (N + 1, 3, 3)),
        ("x_p_W", f8, (N + 1, 3)),
        ("x_S", f8, (N, 6)),
        ("x_Sd", f8, (N, 6)),
        ("x_V", f8, (N + 1, 6)),
        ("x_Vd", f8, (N + 1, 6)),
        ("x_Ic", f8, (N, 10)),
        ("x_Bc", f8, (N, 12)),
        ("x_M", f8, (n, n)),
        ("x_C", f8, (n, n)),
        ("x_g", f8, (n,)),
        ("x_p", f8, (n,)),
        ("x_Ctv", f8, (n,)),
        ("x_q", f8, (nq,)),
        ("x_id", f8, (n,)),
        ("slope", f8, (n, n)),
        ("x_y", f8, (rows,)),
        ("x_d", f8, (rows,)),
        ("x_G", f8, (rows, rows)),
        ("x_H", f8, (rows, SMOOTH)),
        ("x_gain", f8, (rows, rows)),
        ("x_innovation", f8, (rows,)),
        ("x_spread", f8, (rows,)),
        ("x_spread_kept", f8, (rows,)),
        ("x_gain_kept", f8, (rows, rows)),
        ("x_feature", f8, (rows, FEATURES)),
        ("x_L", f8, (RISE, RISE)),
        ("x_u", f8, (s.most,)),
        ("x_factor", f8, (rows, rows)),
        # lasting faults
        ("fault_of", i8, (FAULTS,)),  # 1 + number of the explanation; 0 free
        ("fault_family", i8, (FAULTS,)),
        ("fault_index", i8, (FAULTS,)),
        ("fault_columns", i8, (FAULTS,)),
        ("fault_theta", f8, (FAULTS, LASTING)),
        ("fault_free", f8, (FAULTS,)),  # (N m)²: variance of torque that varies freely
        ("fault_P", f8, (FAULTS, LASTING, LASTING)),
        ("fault_H", f8, (FAULTS, rows, SMOOTH)),
        ("fault_idle_s", f8, (FAULTS,)),  # time it was not felt though it should have been
        ("fault_event", i8, (FAULTS,)),
        ("fault_ceased", i8, (FAULTS,)),  # event of the fault that was in the slot before
        ("fault_gain", f8, (LASTING,)),
        ("fault_before", f8, (LASTING,)),
        ("sure_of", i8, ()),  # explanation that is certain, since when
        ("sure_since_ns", i8, ()),
        ("concluded", i8, ()),  # 1: certain for so long that weighing on would only grow stale
        # evidence of this event: nothing, something else, candidates
        ("null_s", f8, (rows,)),
        ("null_P", f8, (rows, rows)),
        ("null_log", f8, ()),
        ("quiet_s", f8, (rows,)),  # slow noise since the residual was last loud
        ("quiet_P", f8, (rows, rows)),
        ("x_quiet_s", f8, (rows,)),
        ("x_quiet_P", f8, (rows, rows)),
        ("quiet_log", f8, ()),  # of this step: evidence of nothing, whatever was before
        ("other_s", f8, (rows,)),
        ("other_P", f8, (rows, rows)),
        ("other_log", f8, ()),
        ("foothold_log", f8, (s.F,)),  # of a foothold that was lost, over nothing
        ("foothold_force", f8, (s.F, 2)),  # N: the force of its foot against gravity, and its sd
        ("constant_s", f8, (s.K, RISE, rows)),
        ("constant_A", f8, (s.K, RISE, RISE)),
        ("constant_b", f8, (s.K, RISE)),
        ("constant_x", f8, (s.K, RISE)),  # estimate, in prior sd
        ("constant_log", f8, (s.K,)),  # evidence, whether it still acts or has ended
        ("constant_ended", f8, (s.K,)),  # evidence of having ended
        ("constant_acts", f8, (s.K,)),
        ("constant_size", f8, (s.K,)),  # estimate while it acted, and its sd
        ("constant_size_sd", f8, (s.K,)),
        ("smooth_x", f8, (s.Q, s.most)),
        ("smooth_P", f8, (s.Q, s.most**2)),
        ("smooth_log", f8, (s.Q,)),
        ("smooth_ended", f8, (s.Q,)),
        ("smooth_acts", f8, (s.Q,)),
        ("smooth_misfit", f8, (s.Q,)),
        ("smooth_peak", f8, (s.Q, SMOOTH)),  # estimate when its size was largest; a contact's in body axes
        ("smooth_peak_sd", f8, (s.Q,)),  # of the size then
        ("smooth_peak_size", f8, (s.Q,)),
        ("settled_ns", i8, ()),  # robot clock from which the judgement goes on
        ("start_settled_ns", i8, ()),  # the same after the last start or change of condition
        ("event_open", i8, ()),
        ("event_number", i8, ()),  # of the open event; written by flow
        ("event_onset_ns", i8, ()),
        ("event_over_ns", i8, ()),  # last time anything stood outside its band
        ("event_quiet_ns", i8, ()),  # last time all was well inside
        ("event_loud_ns", i8, ()),  # last time it was not
        ("weigh_afresh", i8, ()),  # 1: all evidence so far is of no account
        ("event_doubtful", i8, ()),  # 1: a reading was not credible when it began, or soon after
        ("event_drifted", i8, ()),  # 1: opened by the sums, small and lasting
        ("event_row", i8, ()),  # row with the largest ratio so far
        ("event_ratio", f8, ()),
        ("event_size", f8, ()),  # N m at that row and ratio
        # running numbers of outgoing messages
        ("alarm_seq", i8, ()),
        ("verdict_seq", i8, ()),
        ("health_seq", i8, ()),
        # counters; flow writes those that are not the step's
        ("stepped", i8, ()),
        ("rebased", i8, ()),
        ("bad", i8, (len(Signal),)),
        ("at_limit", i8, (m,)),
        ("received", i8, ()),
        ("duplicates", i8, ()),
        ("late", i8, ()),
        ("lost", i8, ()),
        ("restarts", i8, ()),
        ("wire_errors", i8, ()),
        ("refused", i8, ()),
        ("events", i8, ()),
        ("verdicts", i8, (len(VERDICTS),)),  # events by what they were last held to be, once they are over
        ("alarms_raised", i8, (len(KINDS),)),
        ("alarms_standing", i8, (len(KINDS),)),
        ("coverage_ns", i8, (len(Coverage), len(Reason))),
    ]


def outputs_fields(s: Sizes) -> list[Field]:
    """What one step says."""
    n, m, rows = s.n, s.m, s.rows
    return [
        ("r_fast", f8, (n,)),  # N m (N for prismatic rows): torque the model does not explain
        ("r_slow", f8, (n,)),
        ("row_fast", f8, (rows,)),  # the same, link and motor side apart where a sensor lies between them
        ("row_slow", f8, (rows,)),
        ("band_fast", f8, (rows,)),  # N m: largest residual that is not an event, as it stands now
        ("band_slow", f8, (rows,)),
        ("explained", f8, (rows,)),  # N m of r_fast that tracked friction explains
        ("ratio", f8, (rows,)),  # |residual| / band, fast or slow; 1 opens an event
        ("body_ratio", f8, ()),  # the same for all rows together
        ("probability", f8, (s.X + 2,)),  # of nothing, something else, then the explanations
        ("tau_model", f8, (n,)),  # N m: what inverse dynamics expects of each joint
        ("foot_force", f8, (s.F, 3)),  # N: of the ground on each foot, world axes; zero where none is planned
        ("foot_force_sd", f8, (s.F, 3)),
        ("feet_unknown", i8, ()),  # 1: on the ground, and the sample does not say which feet stand
        ("notice", i8, ()),  # bits of `Notice`
        ("signal", i8, ()),  # `Signal` of this sample
        ("signal_joint", i8, ()),  # joint it concerns, -1 none
        ("settling", i8, ()),
        ("coverage", i8, (m,)),  # `Coverage` and `Reason` per joint, and whole
        ("reason", i8, (m,)),
        ("coverage_whole", i8, ()),
        ("reason_whole", i8, ()),
    ]


def loop_fields() -> list[Field]:
    """What the loop counts of itself, in shared memory for the desk; some of it is told to the data path."""
    return [
        ("pid", i8, ()),
        ("started_ns", i8, ()),  # CLOCK_MONOTONIC
        ("tick_ns", i8, ()),  # CLOCK_MONOTONIC of the last tick: the heartbeat
        ("ticks", i8, ()),
        ("overruns", i8, ()),  # deadlines that passed while a tick was still busy
        ("lateness", i8, (len(LATENESS_EDGES_S) + 1,)),  # ticks by how late they began
        ("lateness_sum_ns", i8, ()),
        ("lateness_max_ns", i8, ()),
        ("busy_ns", i8, ()),  # time spent in ticks
        ("messages", i8, ()),  # received on the input socket
        ("full_ticks", i8, ()),  # ticks that took as many messages as one may
        ("published", i8, ()),
        ("publish_dropped", i8, ()),
        ("record_dropped", i8, ()),  # tuples and ticks the recorder did not get
        ("late_compilations", i8, ()),
        ("right_priority", i8, ()),  # `Right`
        ("right_cpu", i8, ()),
        ("right_memory", i8, ()),
        ("utc_offset_ns", i8, ()),
        ("utc_uncertainty_ns", i8, ()),
    ]


@cache
def _dtype(fields: tuple[Field, ...]) -> np.dtype[np.void]:
    return np.dtype(list(fields), align=True)


def block_dtype(fields: list[Field]) -> np.dtype[np.void]:
    """Return the layout of a block; equal fields give the same object.

    A compiled kernel knows a layout at once by identity; an equal other object it compares field by field in
    each call, which costs several times the arithmetic of a sample.
    """
    return _dtype(tuple(fields))


def zeros(fields: list[Field]) -> Block:
    """Return a zeroed one-element block."""
    return np.zeros(1, block_dtype(fields))
