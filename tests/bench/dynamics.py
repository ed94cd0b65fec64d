"""M, C and g of serial revolute chains: ours against the reference library's (`pin`) three calls."""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
import pinocchio as pin
from numpy.typing import NDArray

from monitor.kernels.dynamics import dynamics
from monitor.kernels.jit import kernel
from monitor.robot.robot import Robot
from monitor.robot.tree import build_tree
from monitor.robot.urdf import parse_urdf

Floats = NDArray[np.float64]

JOINTS = (7, 12, 20, 30, 60)
_ROUNDS, _CALLS = 40, 300


def chain_urdf(joints: int, seed: int = 1) -> str:
    """Return the URDF of a serial chain of revolute joints with any axes and plausible bodies."""
    rng = np.random.default_rng(seed)
    parts = ["<robot name='chain'><link name='l0'/>"]
    for i in range(1, joints + 1):
        mass, com, axis = rng.uniform(0.5, 3.0), rng.normal(0, 0.1, 3), rng.normal(size=3)
        a, b, c = mass * rng.uniform(0.01, 0.02, 3)
        x, y, z = rng.normal(0, 0.3, 3)
        r, p, w = rng.uniform(-1, 1, 3)
        parts.append(
            f"<link name='l{i}'><inertial><origin xyz='{com[0]} {com[1]} {com[2]}'/><mass value='{mass}'/>"
            f"<inertia ixx='{a}' iyy='{b}' izz='{c}' ixy='0' ixz='0' iyz='0'/></inertial></link>"
            f"<joint name='j{i}' type='revolute'><parent link='l{i - 1}'/><child link='l{i}'/>"
            f"<origin xyz='{x} {y} {z}' rpy='{r} {p} {w}'/>"
            f"<axis xyz='{' '.join(map(str, axis / np.linalg.norm(axis)))}'/>"
            "<limit lower='-3' upper='3' velocity='3' effort='100'/></joint>"
        )
    return "".join([*parts, "</robot>"])


@kernel
def _many(k, pa, ki, do, mu, of, R, p, ax, E, ar, gr, q, v, w1, w2, w3, w4, w5, w6, w7, M, C, g, P, c):  # type: ignore[no-untyped-def]
    for _ in range(k):
        q[0] += 1e-9  # so that no call can be taken out of the loop
        dynamics(pa, ki, do, mu, of, R, p, ax, E, ar, gr, q, v, w1, w2, w3, w4, w5, w6, w7, M, C, g, P, c)


def best_us(call: Callable[[], object], per_call: int = 1, calls: int = _CALLS) -> float:
    """Return the least mean time of one call over some rounds, in microseconds."""
    best = np.inf
    for _ in range(_ROUNDS):
        start = time.perf_counter()
        for _ in range(calls):
            call()
        best = min(best, time.perf_counter() - start)
    return best / calls / per_call * 1e6


def compiled_us(robot: Robot, q: Floats, v: Floats) -> float:
    """Return the time of M, C and g at q, v in compiled code, in microseconds."""
    tree = robot.tree
    N, n = len(tree.arrays.parent), tree.n
    shapes = (
        (N + 1, 3, 3), (N + 1, 3), (N, 6), (N, 6), (N + 1, 6), (N, 10), (N, 12), (n, n), (n, n), n, n, n,
    )  # fmt: skip
    arrays = [np.empty(shape) for shape in shapes]
    arguments = (*tree.arrays, tree.armature, np.array([0.0, 0.0, -9.81]), q, v, *arrays)
    _many(2, *arguments)
    return best_us(lambda: _many(300, *arguments), 300, 1)


def run() -> None:
    """Print a table; the ratios are the library's three calls over ours in compiled code and from Python."""
    print("       |     µs a call of all three terms               | pin, three calls | pin over ours   |")
    print("joints | compiled | Python, preallocated | Robot.dynamics |               µs | compiled Python |")
    for n in JOINTS:
        text = chain_urdf(n)
        robot = Robot(build_tree(parse_urdf(text), "fixed"))
        model = pin.buildModelFromXML(text)
        data = model.createData()
        rng = np.random.default_rng(0)
        q, v = rng.uniform(-1, 1, n), rng.uniform(-1, 1, n)
        work = robot.workspace()

        def three_calls(model=model, data=data, q=q, v=v) -> None:  # type: ignore[no-untyped-def]
            pin.crba(model, data, q)
            pin.computeCoriolisMatrix(model, data, q, v)
            pin.computeGeneralizedGravity(model, data, q)

        robot.dynamics(q, v)
        inside = compiled_us(robot, q, v)
        ours = best_us(lambda work=work, q=q, v=v: work.fill(q, v))  # type: ignore[misc]
        fresh = best_us(lambda robot=robot, q=q, v=v: robot.dynamics(q, v))  # type: ignore[misc]
        theirs = best_us(three_calls)
        print(
            f"{n:6d} | {inside:8.2f} | {ours:20.2f} | {fresh:14.2f} | {theirs:16.2f} |"
            f" {theirs / inside:8.2f} {theirs / ours:6.2f} |",
            flush=True,
        )
