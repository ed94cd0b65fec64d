"""What a sample costs in the step alone, while all is quiet and while an event is weighed: mean and worst.

Each sample is timed on its own; the same recording runs several times and the least time of each sample
counts, so that what is left is the work and not the machine's interruptions. The time of a call that does
nothing is taken off.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from monitor.commission.drive import Samples, ready
from monitor.flow.layout import Block, Blocks
from monitor.flow.step import step
from monitor.kernels.jit import kernel, resolved
from monitor.robot.robot import Robot
from monitor.setup.build import Setup, build
from replay.simulate import Push, Rind, Schedule
from tests.bench.common import rind_config
from tests.bench.dynamics import compiled_us
from tests.worlds.score_walker import config_of, samples_of
from tests.worlds.walker import walker_session

Floats = NDArray[np.float64]

_TURNS, _WARM = 9, 1500
_BASE = {
    "base_p": slice(0, 3), "base_quat": slice(3, 7), "base_v": slice(7, 10), "base_w": slice(10, 13)
}  # fmt: skip


class Subject(NamedTuple):
    """A robot and its recording: quiet work, then something that keeps an event open."""

    name: str
    setup: Setup
    samples: Samples


def rind() -> Subject:
    """Return the demo's arm, leant on for a second and a half."""
    pushes = (Push(3.0, 1.5, "fork", (25.0, 10.0, -15.0), rise_s=0.3),)
    robot = Rind(1, Schedule(pushes))
    rows = [robot.step() for _ in range(5000)]
    t_ns = np.array([row.t_ns for row in rows])
    q, qd, tau = (np.array([getattr(row, name) for row in rows]) for name in ("q", "qd", "tau"))
    return Subject("7-joint arm", build(rind_config()), Samples(t_ns, q, qd, tau, np.zeros((len(q), 0))))


def terrace() -> Subject:
    """Return a trotting walker, one joint of which says half its rated torque too much from the middle on."""
    session = walker_session("trot", 1, 1, 10.0, happenings=False)
    setup, samples = build(config_of(session)), samples_of(session)
    samples.tau[len(samples.tau) // 2 :, -1] += 0.5 * float(setup.params["rated"][0, -1])
    return Subject("12-joint walker", setup, samples)


SUBJECTS: tuple[Callable[[], Subject], ...] = (rind, terrace)


@kernel
def _nothing(params: Block, inputs: Block, state: Block, outputs: Block) -> None:
    pass


def run() -> None:
    """Print microseconds a sample, and as multiples of the dynamics of the same robot."""
    print("robot         |  state   | samples | mean µs | worst µs | over dynamics")
    for made in SUBJECTS:
        subject = made()
        took, is_open = _timed(subject)
        tree = subject.setup.tree
        alone = compiled_us(Robot(tree), np.zeros(tree.nq), np.ones(tree.n))
        print(f"{subject.name:13} | dynamics |         | {alone:7.2f} |          |")
        quiet = ~is_open
        quiet[:_WARM] = False
        for state, chosen in (("quiet", quiet), ("event", is_open)):
            mean, worst = took[chosen].mean(), took[chosen].max()
            print(
                f"{subject.name:13} | {state:8} | {chosen.sum():7d} | {mean:7.2f} | {worst:8.2f} |"
                f" {mean / alone:6.1f}",
                flush=True,
            )


def _timed(subject: Subject) -> tuple[Floats, NDArray[np.bool_]]:
    """Return the least time of each sample [µs], and whether an event was open after it."""
    found, opened = [], np.zeros(len(subject.samples.t_ns), bool)
    for _ in range(_TURNS):
        blocks = ready(subject.setup, subject.samples)
        empty = _turn(resolved(_nothing, *blocks), blocks, subject.samples, opened)
        blocks = ready(subject.setup, subject.samples)
        found.append(_turn(resolved(step, *blocks), blocks, subject.samples, opened) - np.median(empty))
    return np.min(found, axis=0) / 1e3, opened


def _turn(
    call: Callable[..., Any], blocks: Blocks, samples: Samples, opened: NDArray[np.bool_]
) -> NDArray[np.int64]:
    """Return the time of each call [ns], all rows judged; fill where an event is open."""
    took = np.zeros(len(opened), np.int64)
    x, state = blocks.inputs[0], blocks.state[0]
    for k in range(len(took)):
        x["seq"], x["t_ns"] = k, samples.t_ns[k]
        x["q"], x["qd"], x["tau"] = samples.q[k], samples.qd[k], samples.tau[k]
        if samples.feet is not None:
            x["feet"] = samples.feet[k]
            for name, columns in _BASE.items():
                x[name] = samples.base[k, columns]
        begin = time.perf_counter_ns()
        call(*blocks)
        took[k] = time.perf_counter_ns() - begin
        opened[k] = state["event_open"]
    return took
