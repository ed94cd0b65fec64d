"""The robot as other programs use it: arguments, fresh results, refusals, lazy import."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from monitor import Robot
from monitor.errors import ModelError
from monitor.robot.tree import Base, build_tree
from monitor.robot.urdf import parse_urdf
from tests.reference.random_trees import random_state, random_urdf

SEED, JOINTS = 3, 7


def _robot(base: Base = "floating") -> Robot:
    return Robot(build_tree(parse_urdf(random_urdf(SEED, JOINTS)), base))


@pytest.fixture
def file(tmp_path: Path) -> Path:
    path = tmp_path / "rind.urdf"
    path.write_text(random_urdf(SEED, JOINTS))
    return path


def test_importing_the_package_alone_loads_no_compiler() -> None:
    program = (
        "import monitor, sys; assert 'numba' not in sys.modules; monitor.Robot; assert 'numba' in sys.modules"
    )
    subprocess.run([sys.executable, "-c", program], check=True)


def test_the_package_offers_nothing_else() -> None:
    with pytest.raises(ImportError, match="Walker"):
        from monitor import Walker  # noqa: F401


def test_a_robot_is_read_from_a_file_with_base_gravity_and_rotors(file: Path) -> None:
    plain = Robot.from_urdf(file)
    assert plain.tree.base == "fixed"
    assert (plain.n, plain.nq) == (len(plain.joints), len(plain.joints))
    robot = Robot.from_urdf(str(file), "floating", (0.0, 0.0, 0.0), {plain.joints[0]: 0.5})
    assert robot.joints == plain.joints
    assert (robot.n, robot.nq) == (plain.n + 6, plain.n + 7)
    assert robot.tree.armature[6] == 0.5
    q, v = random_state(1, "floating", len(robot.joints))
    assert not robot.dynamics(q, v).g.any()


def test_a_missing_file_is_a_model_error(tmp_path: Path) -> None:
    with pytest.raises(ModelError, match=r"nowhere\.urdf"):
        Robot.from_urdf(tmp_path / "nowhere.urdf")


@pytest.mark.parametrize("base", ["fixed", "floating"])
def test_every_result_is_fresh_and_equal_for_equal_arguments(base: Base) -> None:
    robot = _robot(base)
    q, v = random_state(1, base, len(robot.joints))
    first = robot.dynamics(q, v)
    kept = [array.copy() for array in first]
    robot.dynamics(*random_state(2, base, len(robot.joints)))
    again = robot.dynamics(list(q), list(v))
    for array, copy, other in zip(first, kept, again, strict=True):
        assert array.tobytes() == copy.tobytes() == other.tobytes()
        assert not np.shares_memory(array, other)


def test_arguments_are_left_as_they_were() -> None:
    robot = _robot()
    q, v = random_state(1, "floating", len(robot.joints))
    q[3:7] *= 1.0005
    before = q.tobytes(), v.tobytes()
    robot.dynamics(q, v)
    assert (q.tobytes(), v.tobytes()) == before


def test_a_quaternion_a_little_off_unit_length_is_normalised() -> None:
    robot = _robot()
    q, v = random_state(1, "floating", len(robot.joints))
    exact = robot.dynamics(q, v)
    q[3:7] *= 1.0005
    for ours, theirs in zip(robot.dynamics(q, v), exact, strict=True):
        assert np.allclose(ours, theirs, rtol=1e-12, atol=1e-12)


def test_a_quaternion_far_from_unit_length_is_refused() -> None:
    robot = _robot()
    q, v = random_state(1, "floating", len(robot.joints))
    q[3:7] *= 1.01
    with pytest.raises(ValueError, match=r"quaternion q\[3:7\] has length 1.01; expected 1"):
        robot.dynamics(q, v)


def test_wrong_shapes_and_numbers_are_refused() -> None:
    robot = _robot("fixed")
    q, v = random_state(1, "fixed", len(robot.joints))
    n = robot.n
    with pytest.raises(ValueError, match=rf"q has shape \({n + 1},\); expected \({n},\)"):
        robot.dynamics([*q, 0.0], v)
    with pytest.raises(ValueError, match=rf"v has shape \({n}, 1\); expected \({n},\)"):
        robot.momentum(q, v[:, None])
    v[0] = np.nan
    with pytest.raises(ValueError, match=r"v is \[.*nan.*expected finite numbers"):
        robot.dynamics(q, v)
    with pytest.raises(ValueError, match=r"gravity has shape \(2,\); expected \(3,\)"):
        Robot(robot.tree, (0.0, 9.81))


def test_a_jacobian_of_an_unknown_link_is_refused() -> None:
    robot = _robot("fixed")
    with pytest.raises(ValueError, match="unknown link 'spoon'; expected one of link_"):
        robot.jacobian("spoon", (0.0, 0.0, 0.0), np.zeros(robot.nq))


def test_a_link_fixed_to_the_world_does_not_move() -> None:
    robot = _robot("fixed")
    root = robot.tree.links[0]
    assert root.axis == -1
    assert not robot.jacobian(root.name, (1.0, 2.0, 3.0), np.ones(robot.nq)).any()
