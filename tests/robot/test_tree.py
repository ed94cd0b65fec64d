"""From a description to arrays: order, merging, followers, and motions that move no mass."""

from __future__ import annotations

import numpy as np
import pytest

from monitor.errors import ModelError
from monitor.kernels.dynamics import PRISMATIC, REVOLUTE
from monitor.robot.pseudo_inertia import moved, parameters, pseudo_inertia, rotation, transform
from monitor.robot.tree import Base, Tree, build_tree
from monitor.robot.urdf import parse_urdf

INERTIAL = '<inertial><mass value="2"/><inertia ixx=".02" iyy=".03" izz=".04"/></inertial>'


def _link(name: str, inside: str = INERTIAL) -> str:
    return f'<link name="{name}">{inside}</link>'


def _joint(name: str, parent: str, child: str, inside: str = "", kind: str = "revolute") -> str:
    ends = f'<parent link="{parent}"/><child link="{child}"/>'
    return f'<joint name="{name}" type="{kind}">{ends}{inside}</joint>'


def _build(*elements: str, base: Base = "fixed", armature: dict[str, float] | None = None) -> Tree:
    text = f'<robot name="rind">{"".join(elements)}</robot>'
    return build_tree(parse_urdf(text, "rind.urdf"), base, armature)


def _branched(base: Base = "fixed") -> Tree:
    """A trunk with two branches; the left one is named in the document after the right one."""
    return _build(
        *(_link(name) for name in ("tip", "trunk", "right", "left", "foot")),
        _joint("z_right", "trunk", "right", kind="prismatic"),
        _joint("b_tip", "right", "tip", kind="continuous"),
        _joint("a_left", "trunk", "left"),
        _joint("m_trunk", "foot", "trunk"),
        base=base,
    )


def test_axes_stand_depth_first_with_children_in_the_order_of_the_document() -> None:
    tree = _branched()
    assert tree.name == "rind"
    assert tree.joints == ("m_trunk", "z_right", "b_tip", "a_left")
    assert tree.joint_kinds == ("revolute", "prismatic", "continuous", "revolute")
    assert tree.arrays.parent.tolist() == [-1, 0, 1, 0]
    assert tree.arrays.kind.tolist() == [REVOLUTE, PRISMATIC, REVOLUTE, REVOLUTE]
    assert [(link.name, link.axis) for link in tree.links] == [
        ("foot", -1), ("trunk", 0), ("right", 1), ("tip", 2), ("left", 3),
    ]  # fmt: skip
    assert (tree.n, tree.nq) == (4, 4)


def test_a_floating_base_comes_as_six_axes_before_the_joints() -> None:
    tree = _branched("floating")
    assert (tree.n, tree.nq) == (10, 11)
    assert tree.joints == ("m_trunk", "z_right", "b_tip", "a_left")
    assert tree.arrays.parent.tolist() == [-1, 0, 1, 2, 3, 4, 5, 6, 7, 6]
    assert tree.arrays.kind.tolist() == [2, 2, 2, 3, 3, 3, 0, 1, 0, 0]
    assert tree.arrays.dof.tolist() == list(range(10))
    assert np.array_equal(tree.arrays.axis[:6], np.tile(np.eye(3), (2, 1)))
    assert not tree.arrays.E[:5].any()
    assert tree.arrays.E[5, 3, 3] == 2.0
    assert tree.links[0].axis == 5


def test_links_fixed_to_one_another_are_merged_where_they_stand() -> None:
    first, second = '<origin xyz="1 2 3" rpy=".4 .5 .6"/>', '<origin xyz="-1 .5 2" rpy="1 0 2"/>'
    tree = _build(
        *(_link(name) for name in ("foot", "beam", "lid", "end")),
        _joint("turn", "foot", "beam"),
        _joint("glue", "beam", "lid", first, "fixed"),
        _joint("next", "lid", "end", second),
    )
    single = pseudo_inertia(2.0, (0.0, 0.0, 0.0), np.diag([0.02, 0.03, 0.04]))
    T = transform(rotation((0.4, 0.5, 0.6)), (1.0, 2.0, 3.0))
    assert np.allclose(tree.arrays.E[0], single + moved(single, T))
    lid = tree.links[2]
    assert (lid.name, lid.axis) == ("lid", 0)
    assert np.allclose(transform(lid.R, lid.p), T)
    assert np.allclose(
        transform(tree.arrays.R_PJ[1], tree.arrays.p_PJ[1]), T @ transform(rotation((1, 0, 2)), (-1, 0.5, 2))
    )


def test_links_fixed_to_the_world_keep_their_place_and_stay_out_of_the_dynamics() -> None:
    tree = _build(
        _link("floor"), _link("post"), _link("beam"),
        _joint("bolt", "floor", "post", '<origin xyz="0 0 1.5"/>', "fixed"), _joint("turn", "post", "beam"),
    )  # fmt: skip
    assert [(link.name, link.axis) for link in tree.links] == [("floor", -1), ("post", -1), ("beam", 0)]
    assert tree.links[1].p.tolist() == [0.0, 0.0, 1.5]
    assert tree.arrays.p_PJ[0].tolist() == [0.0, 0.0, 1.5]
    assert parameters(tree.arrays.E[0])[0] == 2.0


def test_a_follower_moves_with_the_dof_of_its_leader_even_if_that_comes_later() -> None:
    tree = _build(
        *(_link(name) for name in ("foot", "beam", "tip")),
        _joint("follower", "foot", "beam", '<mimic joint="leader" multiplier="-2" offset=".5"/>'),
        _joint("leader", "beam", "tip"),
    )
    assert tree.joints == ("leader",)
    assert tree.arrays.dof.tolist() == [0, 0]
    assert tree.arrays.multiplier.tolist() == [-2.0, 1.0]
    assert tree.arrays.offset.tolist() == [0.5, 0.0]


def test_friction_of_a_follower_is_felt_by_its_leader_through_the_gear() -> None:
    friction = '<dynamics damping="3" friction="5"/>'
    tree = _build(
        *(_link(name) for name in ("foot", "beam", "tip")),
        _joint("leader", "foot", "beam", '<dynamics damping="1" friction="2"/>'),
        _joint("follower", "beam", "tip", '<mimic joint="leader" multiplier="-2"/>' + friction),
    )
    # Power: 3 (2 v)² + v² and 5 |2 v| + 2 |v|.
    assert tree.damping.tolist() == [13.0]
    assert tree.friction.tolist() == [12.0]


def test_limits_stand_in_the_order_of_the_joints_and_are_infinite_where_not_given() -> None:
    limit = '<limit lower="-1" upper="2" velocity="3" effort="4"/>'
    tree = _build(
        *(_link(name) for name in ("foot", "beam", "tip")),
        _joint("second", "beam", "tip"),
        _joint("first", "foot", "beam", limit),
    )
    assert tree.joints == ("first", "second")
    assert [values.tolist() for values in tree.limits] == [
        [-1.0, -np.inf], [2.0, np.inf], [3.0, np.inf], [4.0, np.inf],
    ]  # fmt: skip


def test_shapes_are_placed_in_the_frame_of_the_axis_that_carries_them() -> None:
    ball = '<collision><origin xyz="0 0 .1"/><geometry><sphere radius=".2"/></geometry></collision>'
    tree = _build(
        *(_link(name) for name in ("foot", "beam")),
        _link("lid", ball),
        _joint("turn", "foot", "beam"),
        _joint("glue", "beam", "lid", '<origin xyz="0 0 1" rpy="1.5707963267948966 0 0"/>', "fixed"),
    )
    (placed,) = tree.links[2].shapes
    assert placed.shape.kind == "sphere"
    assert np.allclose(placed.p, [0.0, -0.1, 1.0])
    assert (tree.links[2].mass, tree.links[2].inertia) == (0.0, "massless")
    assert (tree.links[1].mass, tree.links[1].inertia) == (2.0, "realizable")


def test_massless_links_between_massive_ones_are_accepted() -> None:
    tree = _build(
        _link("foot", ""), _link("yoke", ""), _link("cross", ""), _link("beam"),
        _joint("x", "foot", "yoke", '<axis xyz="1 0 0"/>'),
        _joint("y", "yoke", "cross", '<axis xyz="0 1 0"/>'),
        _joint("z", "cross", "beam", '<axis xyz="0 0 1"/>'),
    )  # fmt: skip
    assert tree.arrays.E[:, 3, 3].tolist() == [0.0, 0.0, 2.0]


def test_a_chain_longer_than_the_recursion_limit_is_walked() -> None:
    count = 1500
    links = [_link(f"l{k}") for k in range(count + 1)]
    joints = [_joint(f"j{k}", f"l{k}", f"l{k + 1}", kind="fixed") for k in range(1, count)]
    tree = _build(*links, *joints, _joint("j0", "l0", "l1"))
    assert parameters(tree.arrays.E[0])[0] == pytest.approx(2.0 * count)


IDLE_TIP = (
    _link("foot"),
    _link("beam"),
    _link("tip", ""),
    _joint("turn", "foot", "beam"),
    _joint("end", "beam", "tip"),
)


def test_a_joint_with_nothing_to_move_is_refused_by_name() -> None:
    with pytest.raises(ModelError) as caught:
        _build(*IDLE_TIP)
    assert caught.value.where == "rind.urdf: joint 'end'"
    assert "moves no mass and no rotor inertia" in caught.value.found
    assert "positive definite mass matrix" in caught.value.expected
    assert "armature" in caught.value.todo


def test_a_rotor_inertia_rescues_a_joint_with_nothing_to_move() -> None:
    assert _build(*IDLE_TIP, armature={"end": 0.01}).armature.tolist() == [0.0, 0.01]


def test_two_joints_about_one_axis_without_mass_between_are_refused_by_name() -> None:
    with pytest.raises(ModelError) as caught:
        _build(
            _link("foot"), _link("ring", ""), _link("beam"),
            _joint("coarse", "foot", "ring"), _joint("fine", "ring", "beam"),
        )  # fmt: skip
    assert caught.value.where == "rind.urdf: joint 'coarse', joint 'fine'"


def test_a_tree_without_any_inertia_is_refused() -> None:
    with pytest.raises(ModelError, match="joint 'turn': found a motion that moves no mass"):
        _build(_link("foot", ""), _link("beam", ""), _joint("turn", "foot", "beam"))


def test_a_floating_base_without_mass_is_refused() -> None:
    with pytest.raises(ModelError, match="floating base: found a motion that moves no mass"):
        _build(_link("trunk", ""), base="floating")


def test_a_fixed_robot_without_moving_joints_is_refused() -> None:
    with pytest.raises(ModelError, match=r"rind\.urdf: found no moving joint; expected at least one"):
        _build(_link("foot"), _link("beam"), _joint("glue", "foot", "beam", kind="fixed"))


def test_a_single_floating_body_is_a_robot() -> None:
    tree = _build(_link("trunk"), base="floating")
    assert (tree.joints, tree.n, tree.nq) == ((), 6, 7)


@pytest.mark.parametrize(
    ("armature", "words"),
    [
        ({"elbow": 1.0}, "armature names 'elbow'; expected one of turn"),
        ({"turn": -1.0}, "armature of 'turn' is -1.0; expected a finite number, not negative"),
        ({"turn": float("nan")}, "armature of 'turn' is nan"),
    ],
)
def test_a_wrong_rotor_inertia_is_refused(armature: dict[str, float], words: str) -> None:
    with pytest.raises(ValueError, match=words):
        _build(_link("foot"), _link("beam"), _joint("turn", "foot", "beam"), armature=armature)


def test_an_unknown_base_is_refused() -> None:
    with pytest.raises(ValueError, match="base is 'flying'; expected 'fixed' or 'floating'"):
        _build(_link("trunk"), base="flying")  # type: ignore[arg-type]
