"""The four blocks of the data path, each field declared once: name, shape, unit and meaning.

`params` is written by setup/build and never after; `inputs` by flow (wire, coverage); `state` by the step and
the counters of flow; `outputs` by the step. A block is a one-element structured array: `x = state[0]` and
`x["r"]` read the same compiled and interpreted. A snapshot of the data path holds all but `params`.

Sizes: n degrees of freedom (a floating base counts six), nq numbers in q, m joints on the wire, N axes,
D samples in the delay line.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum
from functools import cache
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

Block = NDArray[np.void]
Floats = NDArray[np.float64]


class Sizes(NamedTuple):
    """What the shapes of all blocks follow from."""

    n: int
    nq: int
    m: int
    N: int
    D: int

    @property
    def base(self) -> int:
        """Degrees of freedom of the base: 6 or 0."""
        return self.n - self.m


class Tool(NamedTuple):
    """Where payloads are carried."""

    axis: int  # axis that moves the tool link
    T: NDArray[np.float64]  # (4,4) pose of the link in the body frame of that axis


@dataclass(frozen=True, eq=False)
class Facts:
    """What flow has to know of the robot and the configuration beside the blocks; times in ns."""

    robot: str
    joints: tuple[str, ...]  # order of the wire
    rows: tuple[str, ...]  # names of the rows of v, base first
    units: tuple[str, ...]  # N m or N, by row
    feet: tuple[str, ...]
    floating: bool
    serial: str
    row_needs: NDArray[np.bool_]  # (m,m): which joints on the wire enter which joint row
    tool: Tool | None
    wait_ns: int  # longest wait for a missing sample
    stream_stale_ns: int
    condition_stale_ns: int
    quiet_ns: int


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
    NOT_HOISTED = 10  # floating base: forces of feet, hands or docks are not told apart from faults
    PAYLOAD_UNKNOWN = 11


class Notice(IntEnum):
    """Bits of `outputs.notice`: what flow has to look at after a step."""

    EVENT_OPENED = 1
    EVENT_ENDED = 2
    BAD_SAMPLE = 4
    BRAKE_MOVED = 8
    TORQUE_AT_LIMIT = 16
    DISOBEYED = 32
    GAP = 64


# Alarm kinds and their priorities; what they mean is documented in the README.
KINDS = {
    "unexplained-torque": "high",
    "brake": "high",
    "robot": "high",
    "drive": "medium",
    "signal": "medium",
    "wire": "medium",
    "system": "medium",
}

# Upper edges [s] of the histogram of how late a tick began; one more bucket holds the rest.
LATENESS_EDGES_S = (50e-6, 100e-6, 200e-6, 500e-6, 1e-3, 2e-3, 5e-3, 10e-3, 50e-3, 200e-3)


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
    n, m, N = s.n, s.m, s.N
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
        # friction of the model at the joint: viscous v + coulomb tanh(v / friction_velocity) + offset
        ("viscous", f8, (n,)),
        ("coulomb", f8, (n,)),
        ("friction_offset", f8, (n,)),
        ("friction_velocity", f8, (n,)),
        # the ledger
        ("form", i8, ()),
        # by Δt in periods; rows q, v, e; columns position and velocity innovation
        ("gain_fast", f8, (GAIN_STEPS, n, 3, 2)),
        ("gain_slow", f8, (GAIN_STEPS, n, 3, 2)),
        ("pole_fast", f8, ()),  # rad/s, momentum forms
        ("pole_slow", f8, ()),
        ("band_fast", f8, (n,)),  # N m; infinite where a row is never judged
        ("band_slow", f8, (n,)),
        # limits of credibility, in joint order of the wire
        ("q_min", f8, (m,)),
        ("q_max", f8, (m,)),
        ("qd_max", f8, (m,)),
        ("tau_max", f8, (m,)),
        ("tau_peak", f8, (m,)),  # at or beyond it the drive is at its limit
        ("command_error", f8, (m,)),  # largest credible difference of tau and tau_cmd
        ("command_error_ns", i8, ()),
        ("clock_jump_ns", i8, ()),  # how far Δt may leave Δseq times the period
        ("jump", f8, (m,)),  # rad: largest credible step of position beyond what velocity explains
        ("drift", f8, (m,)),  # rad: largest credible difference of ∫v dt and Δq
        ("drift_s", f8, ()),  # s: that difference is forgotten with this time constant
        ("frozen_velocity", f8, (m,)),  # rad/s: a joint that reports more than this does move
        ("frozen_ns", i8, ()),
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
        # t_ns to tau_cmd lie together: `flow.wire` writes a message there in one copy.
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
        ("rebase", i8, ()),  # 0 no, 1 gap or bad signal, 2 start, restart or change of condition
        ("brake", i8, (m,)),  # 1 closed
        ("drive", i8, (m,)),  # 1 powered
        ("judged", i8, (s.n,)),  # 1 where the residual may open an event
        ("E", f8, (N, 4, 4)),  # pseudo-inertias, announced payload included
    ]


def state_fields(s: Sizes) -> list[Field]:
    """Everything one step hands to the next, and the counters."""
    n, nq, m, N, D = s.n, s.nq, s.m, s.N, s.D
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
        ("slope", f8, (n,)),  # N m s/rad: friction in proportion to velocity, at v_at
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
        ("drift", f8, (m,)),  # rad: leaky ∫v dt − Δq
        ("brake_ns", i8, (m,)),  # since when the brake is closed; 0 open
        ("brake_q", f8, (m,)),
        ("brake_moved", i8, (m,)),
        ("disobeyed_ns", i8, (m,)),  # since when tau differs from tau_cmd; 0 not at all
        ("disobeyed", i8, (m,)),  # 1 once that lasted too long
        ("ratio_peak", f8, (n,)),  # largest band ratio since the last health message
        ("settled_ns", i8, ()),  # robot clock from which the judgement goes on
        ("event_open", i8, ()),
        ("event_onset_ns", i8, ()),
        ("event_over_ns", i8, ()),  # last time anything stood outside its band
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
        ("alarms_raised", i8, (len(KINDS),)),
        ("alarms_standing", i8, (len(KINDS),)),
        ("coverage_ns", i8, (len(Coverage), len(Reason))),
    ]


def outputs_fields(s: Sizes) -> list[Field]:
    """What one step says."""
    n, m = s.n, s.m
    return [
        ("r_fast", f8, (n,)),  # N m (N for prismatic rows): torque the model does not explain
        ("r_slow", f8, (n,)),
        ("ratio", f8, (n,)),  # largest |residual| / band of both bandwidths
        ("tau_model", f8, (n,)),  # N m: what inverse dynamics expects of each joint
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
