"""What the sensors of a robot cannot tell is said at the start. Outside judge: the package `pin`."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pinocchio as pin
import pytest
import tomlkit
from typer.testing import CliRunner

from monitor.cli import app
from monitor.setup.build import Setup, build
from monitor.setup.config import loads
from tests.flow.rig import PAIR, PAIR_JOINTS, SLED, SLED_JOINTS

JOINT = (
    '<joint name="{}" type="revolute"><parent link="{}"/><child link="{}"/>'
    '<origin xyz="0.1 0 0.3"/>{}</joint>'
)
LINK = (
    '<link name="{}"><inertial><origin xyz="0.1 0.05 0.1"/><mass value="2"/>'
    '<inertia ixx="0.02" iyy="0.03" izz="0.04" ixy="0" ixz="0" iyz="0"/></inertial></link>'
)
AXIS = '<axis xyz="{}"/><limit lower="-3" upper="3" velocity="3" effort="20"/>'


def robot(*joints: tuple[str, str, str, str], base: str = "fixed", **settings: Any) -> Setup:
    """A robot of joints (name, parent, child, axis), turned about any axis."""
    links = {"stand", *(child for _, _, child, _ in joints)}
    body = "".join(map(LINK.format, sorted(links)))
    body += "".join(JOINT.format(name, a, b, AXIS.format(axis)) for name, a, b, axis in joints)
    names = [{"name": name, "rated_torque": 20.0, **settings} for name, *_ in joints]
    return made(f'<robot name="r">{body}</robot>', names, base)


def made(urdf: str, joints: list[dict[str, Any]], base: str = "fixed", **given: Any) -> Setup:
    document = {"schema": 1, "robot": {"urdf": "r.urdf", "base": base, **given, "joint": joints}}
    return build(loads(tomlkit.dumps(document), "robot.toml", {"r.urdf": urdf}))


def forces(setup: Setup) -> list[str]:
    return [note for note in setup.notes if note.startswith("a force")]


def offsets(setup: Setup) -> list[str]:
    return [note for note in setup.notes if note.startswith("an offset")]


TWO_ARMS = (
    ("left_1", "stand", "left_a", "0 1 0"),
    ("left_2", "left_a", "left_b", "1 0 0"),
    ("right_1", "stand", "right_a", "0 1 0"),
    ("right_2", "right_a", "right_b", "0 1 0"),
)


def test_a_force_on_a_link_that_one_joint_alone_carries_is_like_a_fault_of_that_joint() -> None:
    setup = robot(*TWO_ARMS)
    # Outside judge: rank and support of pin's frame Jacobian.
    model = pin.buildModelFromXML(setup.config.urdf_text)
    data = model.createData()
    q = np.random.default_rng(3).uniform(-1.0, 1.0, model.nq)
    pin.computeJointJacobians(model, data, q)
    pin.updateFramePlacements(model, data)
    alone: dict[str, str] = {}
    for link in ("left_a", "left_b", "right_a", "right_b"):
        J = pin.getFrameJacobian(model, data, model.getFrameId(link), pin.LOCAL_WORLD_ALIGNED)
        loaded = np.flatnonzero(np.abs(J).max(axis=0) > 1e-9)
        if len(loaded) == 1:
            alone[model.names[1 + int(loaded[0])]] = link
    assert alone == {"left_1": "left_a", "right_1": "right_a"}
    notes = forces(setup)
    assert len(notes) == len(alone)
    for note, (joint, link) in zip(notes, alone.items(), strict=True):
        assert note.startswith(
            f"a force that loads only joint {joint!r}, as any on {link!r} does, cannot be told"
        )
        assert (
            "a torque sensor at the joint's link side or a force sensor at the base would settle it" in note
        )


def test_a_torque_sensor_at_its_link_side_settles_what_a_joint_alone_cannot_tell() -> None:
    assert len(forces(robot(*TWO_ARMS))) == 2
    assert forces(robot(*TWO_ARMS, link_torque_sensor=True)) == []


def test_a_robot_that_floats_feels_every_force_in_its_base() -> None:
    assert made(SLED, SLED_JOINTS, "floating").notes == ()
    assert forces(made(SLED, SLED_JOINTS)) != []


@pytest.mark.parametrize(
    ("axis", "gravity", "unseen"),
    [
        ("0 0 1", [0.0, 0.0, -9.81], True),
        ("0 1 0", [0.0, 0.0, -9.81], False),
        ("0 0 1", [0.0, 4.0, -9.0], False),
        ("0 1 0", [0.0, 9.81, 0.0], True),
    ],
)
def test_an_offset_about_the_direction_of_gravity_cannot_be_noticed(
    axis: str, gravity: list[float], unseen: bool
) -> None:
    joints = [{"name": name, "rated_torque": 20.0} for name in ("one", "two")]
    body = "".join(map(LINK.format, ("stand", "a", "b")))
    body += JOINT.format("one", "stand", "a", AXIS.format(axis)) + JOINT.format(
        "two", "a", "b", AXIS.format("1 0 0")
    )
    setup = made(f'<robot name="r">{body}</robot>', joints, gravity=gravity)
    # Outside judge: torque by pin's inverse dynamics before and after a turn of that joint.
    model = pin.buildModelFromXML(setup.config.urdf_text)
    model.gravity.linear = np.array(gravity)
    data = model.createData()
    q, v, a = np.random.default_rng(4).uniform(-1.0, 1.0, (3, 2))
    turned = q + np.array([0.7, 0.0])
    change = pin.rnea(model, data, q, v, a).copy() - pin.rnea(model, data, turned, v, a)
    assert bool(np.abs(change).max() < 1e-9) is unseen
    assert [
        note.startswith("an offset in the position of 'one' has no effect") for note in offsets(setup)
    ] == ([True] if unseen else [])


def test_a_torque_sensor_behind_the_gear_does_not_see_the_drive() -> None:
    notes = robot(*TWO_ARMS, torque_meaning="link").notes
    assert notes[-1].startswith(
        "the torque sensor behind the gear of 'left_1', 'left_2', 'right_1', 'right_2' does not see the drive"
    )
    assert not any("behind the gear" in note for note in robot(*TWO_ARMS).notes)


def test_check_prints_what_cannot_be_told(tmp_path: Path) -> None:
    (tmp_path / "r.urdf").write_text(PAIR, encoding="utf-8")
    document = {"schema": 1, "robot": {"urdf": "r.urdf", "joint": PAIR_JOINTS}}
    path = tmp_path / "robot.toml"
    path.write_text(tomlkit.dumps(document), encoding="utf-8")
    said = CliRunner().invoke(app, ["check", str(path)])
    assert said.exit_code == 0, said.output
    assert (
        "\nnote: a force that loads only joint 'upper', as any on 'beam' does, cannot be told" in said.output
    )
    assert "of the description; wide, because nothing was commissioned" in said.output
    read = json.loads(CliRunner().invoke(app, ["check", str(path), "--json"]).output)
    assert [note.split(",")[0] for note in read["notes"]] == ["a force that loads only joint 'upper'"]
    assert read["calibration"] is None
    # A floor of 1 % of rated torque, and a limit of six standard deviations.
    assert [joint["least_band"] for joint in read["joints"]] == pytest.approx([2.4, 1.2])
