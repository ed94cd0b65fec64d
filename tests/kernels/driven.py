"""Drives the step by itself, for other settings of numba: `allocations` or `rows FILE`.

`allocations` prints, for each kernel, how many allocations 1 and 1001 calls from compiled code make. `rows`
writes what the step computes; with NUMBA_DISABLE_JIT=1, interpreted.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from monitor.flow.step import step
from monitor.kernels.dynamics import dynamics, jacobian
from monitor.setup.build import Setup
from tests.flow.rig import FORMS, PAIR, PAIR_JOINTS, SLED, SLED_JOINTS, made

Floats = NDArray[np.float64]
FIELDS = (
    "M",
    "C",
    "g",
    "p",
    "Ctv",
    "q",
    "v",
    "tau",
    "r_fast",
    "r_slow",
    "e_fast",
    "a",
    "known",
    "q_fast",
    "drift",
    "left",
    "R",
    "track",
    "row_fast",
    "row_slow",
)
WEIGHED = ("null_log", "constant_log", "smooth_log", "smooth_x", "fault_theta")


def robots() -> Iterator[tuple[str, Setup]]:
    """Yield robots with each form of the residual, judged almost at once: fixed, sensed links; floating."""
    sensed = [joint | {"link_torque_sensor": True} for joint in PAIR_JOINTS]
    for form in FORMS:
        watch = {"residual": form, "settle_s": 0.002, "start_settle_s": 0.005}
        yield f"fixed {form}", made(PAIR, sensed, watch=watch)
        yield f"floating {form}", made(SLED, SLED_JOINTS, {"base": "floating"}, watch)


def put(inputs: Any, k: int) -> None:
    """Write sample k of a made-up motion; some are bad, late or early."""
    x = inputs[0]
    m = x["q"].shape[0]
    t = 1e-3 * k
    x["seq"], x["t_ns"] = k, 1_000_000 * k + 50_000 * (k % 3)
    for i in range(m):
        x["q"][i] = 0.3 * np.sin(2.0 * t + i)
        x["qd"][i] = 0.6 * np.cos(2.0 * t + i)
        x["tau"][i] = 3.0 * np.cos(5.0 * t + i)
        if i < x["tau_link"].shape[0]:
            x["tau_link"][i] = np.nan if k % 500 == 40 else x["tau"][i] - 1.0
        x["tau_cmd"][i] = x["tau"][i] + (4.0 if k % 50 > 20 else 0.0)
    x["base_quat"][:] = (np.cos(t), 0.0, np.sin(t), 0.0)
    x["base_p"][:] = (t, 0.0, 0.1 * t)
    x["base_v"][:] = (1.0, 0.0, 0.1)
    x["base_w"][:] = (0.0, 2.0, 0.0)
    if k % 37 == 36:
        x["q"][0] = np.nan
    x["judged"][:] = 1
    x["brake"][m - 1] = 1 if k % 400 > 300 else 0


def rows(setup: Setup, count: int) -> dict[str, Floats]:
    """Return the fields of `state` after each of so many samples."""
    blocks = setup.blocks()
    found: dict[str, list[Any]] = {name: [] for name in FIELDS + WEIGHED}
    for k in range(count):
        put(blocks.inputs, k)
        step(*blocks)
        for name in FIELDS + WEIGHED:
            found[name].append(blocks.state[0][name].copy())
    return {name: np.array(values) for name, values in found.items()}


def allocated(drive: Callable[..., Any], *arguments: Any) -> list[int]:
    """Return the allocations of `drive(1, ...)` and `drive(1001, ...)`, of which the first is compiled."""
    from numba.core.runtime import _nrt_python, rtsys

    drive(1, *arguments)
    was = _nrt_python.memsys_stats_enabled()
    _nrt_python.memsys_enable_stats()
    found = []
    try:
        for count in (1, 1001):
            before = rtsys.get_allocation_stats().alloc
            drive(count, *arguments)
            found.append(int(rtsys.get_allocation_stats().alloc - before))
    finally:
        if not was:
            _nrt_python.memsys_disable_stats()
    return found


def control() -> Callable[[int], float]:
    """Return a function that allocates once per count."""
    import numba

    def drive(count: int) -> float:
        total = 0.0
        for k in range(count):
            total += np.full(3 + k, 1.0).sum()
        return total

    compiled: Callable[[int], float] = numba.njit(drive)
    return compiled


def allocations() -> dict[str, list[int]]:
    """Return the allocations of 1 and 1001 calls by kernel; `control` is one that allocates."""
    import numba

    put_compiled = numba.njit(put)

    @numba.njit
    def drive_step(count: int, params: Any, inputs: Any, state: Any, outputs: Any) -> None:
        for k in range(count):
            put_compiled(inputs, k)
            step(params, inputs, state, outputs)

    @numba.njit
    def drive_dynamics(count: int, params: Any, inputs: Any, state: Any, J: Any) -> None:
        c, x, s = params[0], inputs[0], state[0]
        for _ in range(count):
            dynamics(
                c["parent"], c["kind"], c["dof"], c["multiplier"], c["offset"], c["R_PJ"], c["p_PJ"],
                c["axis"], x["E"], c["armature"], c["gravity"], s["q"], s["v"], s["R_W"], s["p_W"], s["S"],
                s["Sd"], s["V"], s["Ic"], s["Bc"], s["M"], s["C"], s["g"], s["p"], s["Ctv"],
            )  # fmt: skip
            jacobian(c["parent"], c["dof"], s["S"], c["parent"].shape[0] - 1, c["gravity"], J)

    figures = {"control": allocated(control())}
    for name, setup in robots():
        blocks = setup.blocks()
        figures[name] = allocated(drive_step, *blocks)
        J = np.zeros((6, setup.tree.n))
        figures[f"{name}, dynamics"] = allocated(drive_dynamics, *blocks[:3], J)
    return figures


if __name__ == "__main__":
    if sys.argv[1] == "allocations":
        json.dump(allocations(), sys.stdout)
    else:
        found = [rows(setup, 60) for _, setup in robots()]
        np.save(sys.argv[2], np.concatenate([row.ravel() for each in found for row in each.values()]))
