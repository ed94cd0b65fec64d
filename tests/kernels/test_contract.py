"""What every kernel owes: no allocation, everything written, interpreted the same, the same bytes again."""

from __future__ import annotations

import json
import math
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from monitor.flow.layout import Blocks, Form, Notice, outputs_fields
from monitor.flow.step import step
from monitor.kernels import band, dynamics, filters, ledger, signal
from monitor.setup.build import Setup
from tests.flow.rig import FORMS, PAIR, PAIR_JOINTS, SLED, SLED_JOINTS, made
from tests.kernels.driven import WEIGHED, put, robots, rows

Floats = NDArray[np.float64]
ROOT = Path(__file__).resolve().parents[2]
WORK = ("R_W", "p_W", "S", "Sd", "V", "Ic", "Bc", "M", "C", "g", "p", "Ctv")
FLOW = (
    "coverage",
    "reason",
    "coverage_whole",
    "reason_whole",
    "probability",
)  # outputs that flow/coverage writes, not the step; and what only evidence writes


def driven(*arguments: str, **environment: str) -> str:
    done = subprocess.run(
        [sys.executable, "-m", "tests.kernels.driven", *arguments],
        cwd=ROOT,
        env=os.environ | environment,
        capture_output=True,
        text=True,
        check=True,
    )
    return done.stdout


def setup_of(base: str, form: str) -> Setup:
    if base == "fixed":
        return made(PAIR, PAIR_JOINTS, watch={"residual": form})
    return made(SLED, SLED_JOINTS, {"base": "floating"}, {"residual": form})


def test_no_kernel_allocates() -> None:
    figures = json.loads(driven("allocations"))
    once, often = figures.pop("control")
    assert (once, often) == (1, 1001)
    assert len(figures) == 12
    assert {name: calls[1] for name, calls in figures.items()} == {
        name: calls[0] for name, calls in figures.items()
    }


def test_the_step_computes_the_same_when_it_is_interpreted(tmp_path: Path) -> None:
    file = tmp_path / "rows.npy"
    driven("rows", str(file), NUMBA_DISABLE_JIT="1")
    interpreted, at = np.load(file), 0
    for name, setup in robots():
        for field, compiled in rows(setup, 60).items():
            expected = interpreted[at : at + compiled.size].reshape(compiled.shape)
            at += compiled.size
            # What evidence makes of a slope, a difference over 1e-5 rad, carries its rounding.
            tolerance = 1e-8 if field in WEIGHED else 1e-12
            scale = max(1.0, float(np.abs(expected).max()))
            np.testing.assert_allclose(
                compiled, expected, rtol=0.0, atol=tolerance * scale, err_msg=f"{name} {field}"
            )
    assert at == len(interpreted)


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("base", ["fixed", "floating"])
def test_two_runs_of_the_step_leave_the_same_bytes(base: str, form: str) -> None:
    def run() -> bytes:
        blocks = setup_of(base, form).blocks()
        seen = bytearray()
        for k in range(300):
            put(blocks.inputs, k)
            step(*blocks)
            seen += blocks.outputs.tobytes()
        return bytes(seen) + blocks.state.tobytes()

    assert run() == run()


def poison(block: Any, names: tuple[str, ...]) -> None:
    for name in names:
        block[name] = math.nan if block[name].dtype.kind == "f" else -77


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("base", ["fixed", "floating"])
def test_poisoned_outputs_are_all_written_by_a_good_sample(base: str, form: str) -> None:
    blocks = setup_of(base, form).blocks()
    names = tuple(name for name, _, _ in outputs_fields(setup_of(base, form).sizes) if name not in FLOW)
    for k in range(5):
        put(blocks.inputs, k)
        poison(blocks.outputs, names)
        step(*blocks)
        for name in names:
            value = blocks.outputs[0][name]
            assert np.isfinite(value).all(), name
            assert not (np.asarray(value) == -77).any(), name


@pytest.mark.parametrize("base", ["fixed", "floating"])
@pytest.mark.parametrize("form", FORMS)
def test_work_arrays_carry_nothing_from_one_sample_to_the_next(base: str, form: str) -> None:
    clean, dirty = setup_of(base, form).blocks(), setup_of(base, form).blocks()
    names: tuple[str, ...] = (
        *WORK,
        "L",
        "q",
        "v",
        "tau",
        "q_at",
        "v_at",
        "known",
        "slope",
        "M_last",
        "p_last",
        "u_last",
        "at_ns",
    )
    if Form[form.upper().replace("-", "_")] != Form.JOINT_SPACE:
        names = tuple(name for name in names if name != "p")  # the momentum of the last sample is needed
    else:
        names = tuple(name for name in names if name != "M")  # and so is the last mass matrix here
    for k in range(30):
        for blocks in (clean, dirty):
            put(blocks.inputs, k)
        poison(dirty.state, names)
        step(*clean)
        step(*dirty)
        assert clean.outputs.tobytes() == dirty.outputs.tobytes()
    assert abs(clean.outputs[0]["r_fast"]).max() > 0.1


@pytest.mark.parametrize("base", ["fixed", "floating"])
def test_the_dynamics_fill_every_number_of_their_outputs(base: str) -> None:
    setup = setup_of(base, "joint-space")
    blocks = setup.blocks()
    put(blocks.inputs, 3)
    step(*blocks)
    wanted = {name: blocks.state[0][name].copy() for name in WORK}
    c, x, s = blocks.params[0], blocks.inputs[0], blocks.state[0]
    tree = [c[name] for name in ("parent", "kind", "dof", "multiplier", "offset", "R_PJ", "p_PJ", "axis")]
    poisoned = {name: np.full_like(value, math.nan) for name, value in wanted.items()}
    arguments = (*tree, x["E"], c["armature"], c["gravity"], s["q_at"], s["v_at"], *poisoned.values())
    dynamics.dynamics(*arguments)
    for name in WORK:
        assert poisoned[name].tobytes() == wanted[name].tobytes(), name


def test_a_refused_sample_leaves_the_ledger_and_the_shown_residuals_alone() -> None:
    for base in ("fixed", "floating"):
        blocks = setup_of(base, "joint-space").blocks()
        for k in range(20):
            put(blocks.inputs, k)
            step(*blocks)
        before, shown = blocks.state.copy(), blocks.outputs.copy()
        put(blocks.inputs, 20)
        blocks.inputs["tau"][0, 0] = math.inf
        step(*blocks)
        changed = {
            name
            for name in before.dtype.names or ()
            if before[name].tobytes() != blocks.state[name].tobytes()
        }
        assert changed <= {"bad", "pending", "line_held"}
        assert blocks.outputs["notice"][0] == Notice.BAD_SAMPLE
        for name in ("r_fast", "r_slow", "ratio", "tau_model"):
            assert shown[name].tobytes() == blocks.outputs[name].tobytes()


def both_ways(kernel: Any, *arguments: Any) -> tuple[list[Any], list[Any]]:
    """Return all arguments and the result after a compiled and after an interpreted call."""
    results = []
    for call in (kernel, kernel.py_func):
        copies = [a.copy() if isinstance(a, np.ndarray) else a for a in arguments]
        results.append([*copies, np.array(call(*copies), float)])
    return results[0], results[1]


def samples() -> list[tuple[Any, tuple[Any, ...]]]:
    rng = np.random.default_rng(5)

    def row(n: int = 4) -> Floats:
        return rng.standard_normal(n)

    A = rng.standard_normal((4, 4))
    M = A @ A.T + np.eye(4)
    L = np.linalg.cholesky(M)
    whole = np.arange(4)
    quat = row()
    pose = np.concatenate([row(3), quat / np.linalg.norm(quat), row(2)])
    near = pose.copy()
    ledger.turn_quaternion(0.02, -0.01, 0.03, near)
    gain = rng.uniform(0.0, 0.3, (8, 3, 2))
    bend = rng.standard_normal((4, ledger.BENDS)) * (whole % 2)[:, None]
    table = rng.uniform(0.1, 1.0, (4, band.CAUSES))
    return [
        (filters.cholesky, (M, np.full((4, 4), math.nan))),
        (filters.cholesky_solve, (L, row(), np.full(4, math.nan))),
        (filters.multiply, (A, row(), np.full(4, math.nan))),
        (ledger.friction, (row(), abs(row()), 0.5 * whole // 1, bend, row(), abs(row()) + 0.1, row())),
        (ledger.friction_slope, (row() * whole, abs(row()), 0.5 * whole // 1, bend, abs(row()) + 0.1, row())),
        (ledger.gain_step, (0.0031, 1_000_000, 20)),
        (ledger.respond_joint_space, (2.0, 0.001, gain[0], row(3))),
        (ledger.respond_first_order, (2.0, 0.001, 90.0, row(3))),
        (ledger.respond_second_order, (2.0, 0.001, 90.0, row(3))),
        (ledger.first_order, (row(), row(), row(), row(), 60.0, 0.0013, row())),
        (ledger.second_order, (row(), row(), row(), 90.0, 0.0013, row(), row())),
        (ledger.joint_space, (0, row(), row(), row(), 0.001, gain[:4], row(), row(), row())),
        (ledger.joint_space, (6, near, row(8), row(8), 0.001, gain, pose, row(8), row(8))),
        (signal.range_fault, (row(), row(), row(), row(), row() - 9, row() + 9, row() + 9, row() + 9)),
        (signal.base_fault, (row(3), quat / np.linalg.norm(quat), row(3), row(3), 9.0, 9.0)),
        (
            signal.base_motion_fault,
            (row(3), pose[3:7], row(3), row(3), 10**6, row(3), near[3:7], row(3), row(3), 9.0, 0.1, 50, 7),
        ),
        (signal.bend, (0.003, 0.002, 1_300_000, 1_000_000)),
        (signal.differenced, (2.001, 0.002, 0.001, 1_300_000, 1_000_000, 1e-5)),
        (signal.noise_score, (0.3, -0.2, 0.1, 1.7)),
        (signal.roughness, (0.3, 0.2, 1.7, 999, 1e-4)),
        (signal.beyond_lag, (0.03, 2.0, 0.005)),
        (signal.liveliness, (0.02, -0.01, 0.005, 3, 700)),
        (band.variance, (table, 0.5 * table, np.full(4, math.nan))),
        (band.standing, (table, 0.5 * table, np.full(4, math.nan))),
        (band.covariance, (abs(row()) + 1, M, abs(row()), np.full((4, 4), math.nan))),
        (band.cusum, (1.3, 0.5, abs(row(2)))),
        (
            band.causes,
            (
                *(M, row(), row(), row(), abs(row()) + 1, abs(row()), abs(row())),
                *(0.001, 90.0, 0.03, 0.1 * abs(row()), 0.001 * (whole % 2), table),
            ),
        ),
        (band.largest, (row(), whole % 2)),
    ]  # fmt: skip


@pytest.mark.parametrize("number", range(27))
def test_small_kernels_compute_the_same_when_they_are_interpreted(number: int) -> None:
    kernel, arguments = samples()[number]
    compiled, interpreted = both_ways(kernel, *arguments)
    for one, other in zip(compiled, interpreted, strict=True):
        np.testing.assert_allclose(one, other, rtol=1e-12, atol=1e-14)


def test_every_small_kernel_is_among_the_samples() -> None:
    modules = (filters, ledger, signal, band)
    public = {
        value
        for module in modules
        for name, value in vars(module).items()
        if hasattr(value, "py_func") and value.py_func.__module__ == module.__name__ and name[0] != "_"
    }
    # Parts of `joint_space`, and called by it there.
    assert public - {kernel for kernel, _ in samples()} == {ledger.advance_pose, ledger.turn_quaternion}


def test_cholesky_factors_agree_with_numpy() -> None:
    rng = np.random.default_rng(6)
    A = rng.standard_normal((7, 7))
    M, L, x, b = (
        A @ A.T + 0.1 * np.eye(7),
        np.full((7, 7), math.nan),
        np.full(7, math.nan),
        rng.standard_normal(7),
    )
    filters.cholesky(M, L)
    filters.cholesky_solve(L, b, x)
    np.testing.assert_allclose(L, np.linalg.cholesky(M), atol=1e-12)
    np.testing.assert_allclose(x, np.linalg.solve(M, b), rtol=1e-10)


def test_all_blocks_are_made_of_eight_byte_numbers_at_aligned_places() -> None:
    blocks: Blocks = made(PAIR, PAIR_JOINTS).blocks()
    for block in blocks:
        for kind, offset, *_ in (block.dtype.fields or {}).values():
            assert kind.base.itemsize == 8
            assert offset % 8 == 0
