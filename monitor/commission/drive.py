"""Recordings through the very step of the live loop, many samples a call: what a fit of the band looks at."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import binary_dilation

from monitor.errors import SessionError
from monitor.flow.layout import FEATURES, Block, Blocks
from monitor.flow.step import step
from monitor.kernels.jit import kernel
from monitor.setup.build import Setup

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# How long before it is planned to a foot may meet ground, and how long after its planned lift-off the
# residual may still feel it, fast and slow [s].
_EARLY_S, LATE_S, SLOW_LATE_S = 0.02, 0.05, 0.2


class Samples(NamedTuple):
    """A recording as the wire would bring it.

    Attributes
    ----------
    t_ns : (T,)
        Robot clock [ns].
    q, qd, tau : (T,m)
        As reported, joints in the order of the wire.
    base : (T,13)
        Position, quaternion w-x-y-z, velocity (world), angular velocity (body); no columns without a base.
    feet : (T,F), optional
        1 where a foot is planned to stand; a floating base needs them.
    tau_link : (T,m), optional
        Torque at the link side as reported; what stands at joints without a sensor is of no account.
    hoisted : bool
        Whether a hoist holds the base, with a force nobody knows.
    """

    t_ns: Ints
    q: Floats
    qd: Floats
    tau: Floats
    base: Floats
    feet: Ints | None = None
    tau_link: Floats | None = None
    hoisted: bool = False


class Trace(NamedTuple):
    """What the step made of it, by sample: residuals (T,rows), causes (T,rows,C), features, variances.

    alone (T,4,rows) is what a row has beyond what all others predict, and its sd, see kernels/feet.py, fast
    and slow. foot (T,2) is how far the slow residual of all rows stands out beside feet, and the force of a
    foot that should be none. free (T,rows) is 1 where a row feels no force that is not known, judged (rows,)
    where one is judged.
    """

    r_fast: Floats
    r_slow: Floats
    explained: Floats
    cause: Floats
    feature: Floats
    variance: Floats
    ratio: Floats
    slow_ratio: Floats
    body_ratio: Floats
    cusum: Floats
    open: Ints
    settling: Ints
    alone: Floats
    foot: Floats
    free: Ints
    judged: Ints


def free_rows(setup: Setup, samples: Samples, late_s: float = LATE_S) -> Ints:
    """Return 1 for each sample and row (T,n) that feels no force of a foot on the ground or a hoist, else 0.

    For so long after its planned lift-off (late_s) a foot may still be felt.

    Raises
    ------
    SessionError
        If a floating base comes without planned feet, or with another number of them.
    """
    sizes, params = setup.sizes, setup.params[0]
    free = np.ones((len(samples.t_ns), sizes.n), np.int64)
    if not sizes.base:
        return free
    if samples.feet is None or samples.feet.shape != (len(free), sizes.F):
        raise SessionError(
            "recording of a walking robot",
            "no planned feet" if samples.feet is None else f"planned feet of shape {samples.feet.shape}",
            f"one column for each of {sizes.F} feet, one row for each of {len(free)} samples",
            "Without them nobody knows which legs carry load.",
        )
    if samples.hoisted:
        free[:, : sizes.base] = 0
        return free
    rate_hz = 1e9 / float(params["period_ns"])
    early, late = round(_EARLY_S * rate_hz), round(late_s * rate_hz)
    # Of a stretch with its centre in the middle the first half reaches back in time, the second ahead.
    reach = np.zeros(2 * max(early, late) + 1, bool)
    reach[max(early, late) - early : max(early, late) + late + 1] = True
    for foot in range(sizes.F):
        planned = samples.feet[:, foot] != 0
        stands = binary_dilation(planned, reach)
        axis = int(params["foot_axis"][foot])
        while axis >= 0:  # up to the base, which feels every foot
            free[stands, params["dof"][axis]] = 0
            axis = int(params["parent"][axis])
    return free


def _free(setup: Setup, samples: Samples) -> Ints:
    """Return `free_rows`, motor sides (T,rows) as their joints."""
    free = free_rows(setup, samples)
    return np.hstack([free, free[:, setup.params["link_row"][0]]])


def _links(params: Block, samples: Samples) -> Floats:
    """Return what the configured sensors at links read (T,sensors); NaN where the recording has none."""
    places = params["link_wire"][0]
    if samples.tau_link is None:
        return np.full((len(samples.t_ns), len(places)), np.nan)
    return np.ascontiguousarray(samples.tau_link[:, places])


@kernel
def _take(
    inputs: Block, k: int, t_ns: Ints, q: Floats, qd: Floats, tau: Floats, base: Floats,
    tau_link: Floats, feet: Ints,
) -> None:  # fmt: skip
    """Put sample k where the step expects it."""
    x = inputs[0]
    x["seq"] = x["seq"] + 1
    x["t_ns"] = t_ns[k]
    x["q"][:] = q[k]
    x["qd"][:] = qd[k]
    x["tau"][:] = tau[k]
    x["tau_link"][:] = tau_link[k]
    if base.shape[1] == 13:
        x["base_p"][:] = base[k, :3]
        x["base_quat"][:] = base[k, 3:7]
        x["base_v"][:] = base[k, 7:10]
        x["base_w"][:] = base[k, 10:13]
        x["feet"][:] = feet[k]


@kernel
def _run(
    params: Block, inputs: Block, state: Block, outputs: Block,
    t_ns: Ints, q: Floats, qd: Floats, tau: Floats, base: Floats, tau_link: Floats, feet: Ints,
    r_fast: Floats, r_slow: Floats, explained: Floats, cause: Floats, feature: Floats, variance: Floats,
    ratio: Floats, slow_ratio: Floats, body: Floats, cusum: Floats,
    is_open: Ints, settling: Ints, alone: Floats, foot: Floats,
) -> None:  # fmt: skip
    s, out = state[0], outputs[0]
    for k in range(t_ns.shape[0]):
        _take(inputs, k, t_ns, q, qd, tau, base, tau_link, feet)
        step(params, inputs, state, outputs)
        r_fast[k] = out["row_fast"]
        r_slow[k] = out["row_slow"]
        explained[k] = s["explained"]
        cause[k] = s["cause"]
        feature[k] = s["feature"]
        variance[k, 0] = s["var_fast"]
        variance[k, 1] = s["var_slow"]
        variance[k, 2] = s["explained_var"]
        ratio[k] = s["fast_ratio"]
        slow_ratio[k] = s["slow_ratio"]
        body[k] = out["body_ratio"]
        for i in range(ratio.shape[1]):
            cusum[k] = max(cusum[k], s["cusum"][i, 0], s["cusum"][i, 1])
        is_open[k] = s["event_open"]
        settling[k] = out["settling"]
        alone[k, 0] = s["alone"]
        alone[k, 1] = s["alone_sd"]
        alone[k, 2] = s["alone_slow"][0]
        alone[k, 3] = s["alone_slow"][1]
        foot[k, 0] = s["slow_body_ratio"]
        foot[k, 1] = s["foot_lasts"]


def ready(setup: Setup, samples: Samples) -> Blocks:
    """Return fresh blocks of a robot that is on, judged as far as its support allows."""
    blocks = setup.blocks()
    blocks.inputs["drive"], blocks.inputs["judged"] = 1, 1
    if samples.hoisted:
        blocks.inputs["judged"][0, : setup.sizes.base] = 0
    elif setup.sizes.base:
        blocks.inputs["grounded"] = 1
    return blocks


def _arrays(blocks: Blocks, samples: Samples) -> tuple[Any, ...]:
    """Return what `_take` reads; feet that are not said are so for the step too."""
    feet = samples.feet
    if feet is None:
        feet = np.full((len(samples.t_ns), blocks.inputs["feet"].shape[-1]), -1)
    return (*samples[:5], _links(blocks.params, samples), np.ascontiguousarray(feet, dtype=np.int64))


def run(setup: Setup, samples: Samples, judge_base: bool = True) -> Trace:
    """Return what the step makes of a recording, from a fresh start.

    With `judge_base` False what the rows of a base have alone is what the legs do not explain of them.

    Raises
    ------
    SessionError
        As `free_rows`; or if a torque sensor at a link is configured and does not read all through.
    """
    if not np.isfinite(_links(setup.params, samples)).all():
        raise SessionError(
            "recording of a robot with torque sensors at its links",
            "samples without `tau_link`" if samples.tau_link is not None else "no `tau_link`",
            "a reading of each sensor in each sample",
            "Record with the sensors, or take link_torque_sensor out of the configuration.",
        )
    free = _free(setup, samples)
    blocks = ready(setup, samples)
    if not judge_base:
        blocks.inputs["judged"][0, : setup.sizes.base] = 0
    T, n, causes = len(samples.t_ns), setup.sizes.rows, setup.params["cause_fast"].shape[-1]
    trace = Trace(
        r_fast=np.zeros((T, n)),
        r_slow=np.zeros((T, n)),
        explained=np.zeros((T, n)),
        cause=np.zeros((T, n, causes)),
        feature=np.zeros((T, n, FEATURES)),
        variance=np.zeros((T, 3, n)),
        ratio=np.zeros((T, n)),
        slow_ratio=np.zeros((T, n)),
        body_ratio=np.zeros(T),
        cusum=np.zeros(T),
        open=np.zeros(T, np.int64),
        settling=np.zeros(T, np.int64),
        alone=np.zeros((T, 4, n)),
        foot=np.zeros((T, 2)),
        free=free,
        judged=blocks.inputs["judged"][0].copy(),
    )
    arrays: tuple[Any, ...] = (*_arrays(blocks, samples), *trace[:-2])
    _run(*blocks, *arrays)
    return trace


@kernel
def _until(
    params: Block, inputs: Block, state: Block, outputs: Block, k: int, looked_for: int,
    t_ns: Ints, q: Floats, qd: Floats, tau: Floats, base: Floats, tau_link: Floats, feet: Ints,
) -> int:  # fmt: skip
    while k < t_ns.shape[0]:
        _take(inputs, k, t_ns, q, qd, tau, base, tau_link, feet)
        step(params, inputs, state, outputs)
        k += 1
        if outputs[0]["notice"] & looked_for:
            break
    return k


def until(blocks: Blocks, samples: Samples, k: int, looked_for: int) -> int:
    """Step from sample k on until the step takes notice of what is looked for (bits of `Notice`).

    The blocks are those of `ready`. Returns the number of samples stepped since
    the beginning: the last one is that of the notice.
    """
    arrays = _arrays(blocks, samples)
    return int(_until(*blocks, k, looked_for, *arrays))
