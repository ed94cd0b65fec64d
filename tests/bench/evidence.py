"""What the compiled step costs while all is quiet and while an event is weighed: an arm, and a walker.

A joint's torque is reported wrong by half its rated torque from the middle on, so that an event opens and is
weighed until it is certain. Samples are timed one by one; where others use the machine too, the slowest show
them, not the step.
"""

from __future__ import annotations

import time
from typing import Any

import numpy as np

from monitor.commission.drive import Samples, ready
from monitor.flow.layout import Block
from monitor.flow.step import step
from monitor.kernels.jit import resolved
from monitor.robot.robot import Robot
from monitor.setup.build import Setup, build
from tests.bench.common import rind_config
from tests.worlds.score_walker import config_of, samples_of
from tests.worlds.walker import walker_session

_SECONDS = 12.0
_BARS_US = {"arm, 7 joints": (8.0, 60.0), "walker, 12 joints": (20.0, 150.0)}


def _arm() -> tuple[Setup, Samples]:
    """Return the demo arm at rest against gravity, with the noise of its sensors."""
    setup, count, rng = build(rind_config()), round(1000 * _SECONDS), np.random.default_rng(1)
    q = np.tile(np.linspace(0.2, 0.8, 7), (count, 1))
    holds = Robot(setup.tree, setup.config.robot.gravity_vector).dynamics(q[0], np.zeros(7))[2]
    t_ns = 10**9 + 10**6 * np.arange(count)
    q = q + 1e-5 * rng.standard_normal(q.shape)
    return setup, Samples(
        t_ns, q, 0.007 * rng.standard_normal(q.shape), np.tile(holds, (count, 1)), np.zeros((count, 0))
    )


def _walker() -> tuple[Setup, Samples]:
    session = walker_session("trot", 1, 1, _SECONDS, happenings=False)
    return build(config_of(session)), samples_of(session)


def _times_us(setup: Setup, samples: Samples) -> tuple[Any, Any]:
    """Return how long each sample took, and whether an event was being weighed."""
    blocks = ready(setup, samples)
    run, x, state = resolved(step, *blocks), blocks.inputs[0], blocks.state[0]
    took, weighing = np.zeros(len(samples.t_ns)), np.zeros(len(samples.t_ns), bool)
    wrong = 0.5 * float(setup.params["rated"][0, -1])
    for k in range(len(took)):
        _put(x, samples, k)
        if k > len(took) // 2:
            x["tau"][-1] += wrong
        start = time.perf_counter_ns()
        run(*blocks)
        took[k] = 1e-3 * (time.perf_counter_ns() - start)
        weighing[k] = state["event_open"] and not state["concluded"]
    return took[1500:], weighing[1500:]


def _put(x: Block, samples: Samples, k: int) -> None:
    x["seq"] += 1
    x["t_ns"], x["q"], x["qd"], x["tau"] = samples.t_ns[k], samples.q[k], samples.qd[k], samples.tau[k]
    if samples.feet is not None:
        x["feet"] = samples.feet[k]
        for name, first, last in (("p", 0, 3), ("quat", 3, 7), ("v", 7, 10), ("w", 10, 13)):
            x[f"base_{name}"] = samples.base[k, first:last]


def _dynamics_us(setup: Setup) -> float:
    robot = Robot(setup.tree, setup.config.robot.gravity_vector)
    q, v = np.zeros(setup.tree.nq), np.zeros(setup.tree.n)
    q[3 if setup.sizes.base else 0] = 1.0
    start, count = time.perf_counter_ns(), 20_000
    for _ in range(count):
        robot.dynamics(q, v)
    return 1e-3 * (time.perf_counter_ns() - start) / count


def run() -> None:
    """Print both, in µs a sample, beside their aims and `Robot.dynamics`."""
    for (name, (quiet_bar, open_bar)), made in zip(_BARS_US.items(), (_arm, _walker), strict=True):
        setup, samples = made()
        took, weighing = _times_us(setup, samples)
        dynamics = _dynamics_us(setup)
        quiet, busy = took[~weighing], took[weighing]
        print(f"{name}: Robot.dynamics {dynamics:.1f} µs")
        typical = np.median(quiet)
        print(f"  quiet {typical:.1f} µs a sample (aim {quiet_bar:g}): {typical / dynamics:.1f} times that")
        if len(busy):
            mean, most = busy.mean(), np.quantile(busy, 0.99)
            print(f"  event open {mean:.0f} µs (aim {open_bar:g}): {mean / dynamics:.0f} times that")
            print(f"  99 % at most {most:.0f} µs, slowest {busy.max():.0f} µs (aim 250) of {len(busy)}")
