"""Reading URDF: what is kept, what is mended with a warning, what is refused and in which words."""

from __future__ import annotations

import math
import warnings
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.errors import ModelError
from monitor.robot.urdf import Description, ModelWarning, Origin, Shape, parse_urdf, read_urdf

INERTIAL = (
    '<inertial><origin xyz="0 0 .1"/><mass value="2"/>'
    '<inertia ixx=".02" iyy=".03" izz=".04" ixy="0" ixz="0" iyz="0"/></inertial>'
)


def _link(name: str, inside: str = INERTIAL) -> str:
    return f'<link name="{name}">{inside}</link>'


def _joint(name: str, parent: str, child: str, inside: str = "", kind: str = "revolute") -> str:
    ends = f'<parent link="{parent}"/><child link="{child}"/>'
    return f'<joint name="{name}" type="{kind}">{ends}{inside}</joint>'


def _robot(*elements: str) -> str:
    return f'<robot name="rind">{"".join(elements)}</robot>'


def _arm(joint: str = "", link: str = INERTIAL, kind: str = "revolute") -> str:
    """Return a foot, one joint and one link, with something of interest inside the joint or the link."""
    return _robot(_link("foot", ""), _joint("turn_1", "foot", "beam", joint, kind), _link("beam", link))


def _inertial(mass: str, *entries: str) -> str:
    names = ("ixx", "iyy", "izz")
    numbers = " ".join(f'{name}="{entry}"' for name, entry in zip(names, entries, strict=True))
    return f'<inertial><mass value="{mass}"/><inertia {numbers}/></inertial>'


def _parse(text: str) -> Description:
    return parse_urdf(text.encode(), "rind.urdf")


def test_everything_said_of_a_joint_is_kept() -> None:
    joint = _parse(
        _arm(
            '<origin xyz="1 2 3" rpy=".1 .2 .3"/><axis xyz="0 0 -1"/>'
            '<limit lower="-1" upper="2" velocity="3" effort="4"/><dynamics damping=".5" friction=".6"/>'
        )
    ).joints[0]
    assert (joint.name, joint.kind, joint.parent, joint.child) == ("turn_1", "revolute", "foot", "beam")
    assert joint.origin == Origin((1.0, 2.0, 3.0), (0.1, 0.2, 0.3))
    assert joint.axis == (0.0, 0.0, -1.0)
    assert (joint.lower, joint.upper, joint.velocity, joint.effort) == (-1.0, 2.0, 3.0, 4.0)
    assert (joint.damping, joint.friction) == (0.5, 0.6)
    assert joint.mimic is None


def test_what_a_joint_leaves_out_takes_the_defaults_of_the_format() -> None:
    joint = _parse(_arm()).joints[0]
    assert joint.origin == Origin()
    assert joint.axis == (1.0, 0.0, 0.0)
    assert (joint.lower, joint.upper) == (-math.inf, math.inf)
    assert (joint.velocity, joint.effort) == (math.inf, math.inf)
    assert (joint.damping, joint.friction) == (0.0, 0.0)


def test_a_continuous_joint_has_no_position_limits() -> None:
    joint = _parse(_arm('<limit lower="-1" upper="1" velocity="3" effort="4"/>', kind="continuous")).joints[0]
    assert (joint.lower, joint.upper, joint.velocity) == (-math.inf, math.inf, 3.0)


def test_mass_and_inertia_are_kept_with_their_frame() -> None:
    inertial = _parse(_arm()).links[1].inertial
    assert inertial is not None
    assert inertial.origin == Origin((0.0, 0.0, 0.1))
    assert inertial.mass == 2.0
    assert inertial.matrix == [[0.02, 0.0, 0.0], [0.0, 0.03, 0.0], [0.0, 0.0, 0.04]]


@pytest.mark.parametrize("inside", ["", _inertial("0", "0", "0", "0")])
def test_a_link_without_mass_is_a_mere_frame(inside: str) -> None:
    assert _parse(_arm(link=inside)).links[1].inertial is None


def test_collision_shapes_are_kept_and_meshes_are_noted_by_file_name() -> None:
    shapes = "".join(
        f'<collision><origin xyz="0 0 {k}"/><geometry>{body}</geometry></collision>'
        for k, body in enumerate(
            [
                '<box size="1 2 3"/>',
                '<cylinder radius=".1" length=".5"/>',
                '<sphere radius=".2"/>',
                '<mesh filename="beam.stl"/>',
            ]
        )
    )
    visual = '<visual><geometry><sphere radius="9"/></geometry></visual>'
    assert _parse(_arm(link=INERTIAL + shapes + visual)).links[1].shapes == (
        Shape("box", (1.0, 2.0, 3.0), Origin((0.0, 0.0, 0.0))),
        Shape("cylinder", (0.1, 0.5), Origin((0.0, 0.0, 1.0))),
        Shape("sphere", (0.2,), Origin((0.0, 0.0, 2.0))),
        Shape("mesh", (), Origin((0.0, 0.0, 3.0)), "beam.stl"),
    )


def test_visual_shapes_stand_in_where_a_link_has_no_collision_shape() -> None:
    visual = '<visual><geometry><sphere radius=".2"/></geometry></visual>'
    assert _parse(_arm(link=INERTIAL + visual)).links[1].shapes == (Shape("sphere", (0.2,), Origin()),)


def test_a_follower_of_a_follower_follows_the_independent_joint() -> None:
    text = _robot(
        *(_link(name) for name in ("a", "b", "c", "d")),
        _joint("last", "c", "d", '<mimic joint="middle" multiplier="3" offset="-1"/>'),
        _joint("middle", "b", "c", '<mimic joint="first" multiplier="-2" offset=".5"/>'),
        _joint("first", "a", "b"),
    )
    last, middle, first = _parse(text).joints
    assert first.mimic is None
    assert middle.mimic is not None
    assert (middle.mimic.joint, middle.mimic.multiplier, middle.mimic.offset) == ("first", -2.0, 0.5)
    assert last.mimic is not None
    # 3 (-2 q + .5) - 1
    assert (last.mimic.joint, last.mimic.multiplier, last.mimic.offset) == ("first", -6.0, 0.5)


def test_elements_of_other_programs_are_passed_over() -> None:
    text = _robot(
        _link("foot", ""), _link("beam"), _joint("turn_1", "foot", "beam"), '<transmission name="x"/>'
    )
    assert len(_parse(text).joints) == 1


def test_an_axis_of_another_length_is_normalised_with_a_warning() -> None:
    with pytest.warns(ModelWarning, match=r"rind.urdf: joint 'turn_1' <axis>: axis \(0, 3, 4\) has length 5"):
        joint = _parse(_arm('<axis xyz="0 3 4"/>')).joints[0]
    assert joint.axis == pytest.approx((0.0, 0.6, 0.8))


def test_an_unknown_shape_is_left_out_with_a_warning() -> None:
    shape = "<collision><geometry><blob/></geometry></collision>"
    with pytest.warns(ModelWarning, match="link 'beam' <collision> <blob>: not a box"):
        assert _parse(_arm(link=INERTIAL + shape)).links[1].shapes == ()


FOOT = _link("foot", "")

# What is wrong: the text, the place named, what was found, what was expected.
REFUSED = {
    "malformed XML": (
        "<robot><link></robot>",
        "rind.urdf",
        "malformed XML (mismatched tag: line 1",
        "well-formed XML",
    ),
    "nothing at all": ("", "rind.urdf", "malformed XML (no element found", "well-formed XML"),
    "an entity": (
        '<!DOCTYPE robot [<!ENTITY a "aaaa"><!ENTITY b "&a;&a;">]><robot name="&b;"/>',
        "rind.urdf",
        "a document type or entity",
        "XML without them",
    ),
    "a file fetched from outside": (
        '<!DOCTYPE robot SYSTEM "file:///etc/hostname"><robot/>',
        "rind.urdf",
        "a document type or entity",
        "XML without them",
    ),
    "unknown encoding": (
        '<?xml version="1.0" encoding="nonsense"?><robot/>',
        "rind.urdf",
        "unknown encoding",
        "XML",
    ),
    "not a robot": ("<sdf/>", "rind.urdf", "root element <sdf>", "<robot>"),
    "an unexpanded macro": (
        '<robot xmlns:xacro="urn:xacro"><xacro:arm/></robot>',
        "rind.urdf",
        "unexpanded macro element",
        "plain URDF",
    ),
    "no links": (_robot(), "rind.urdf", "no <link>", "at least one link"),
    "a nameless link": (_robot("<link/>"), "rind.urdf: <link>", "no name", "attribute name"),
    "a doubled link": (_robot(FOOT, FOOT), "rind.urdf: link 'foot'", "the name 2 times", "every name once"),
    "a doubled joint": (
        _robot(FOOT, _link("a"), _link("b"), _joint("j", "foot", "a"), _joint("j", "a", "b")),
        "rind.urdf: joint 'j'",
        "the name 2 times",
        "every name once",
    ),
    "an unknown parent": (
        _robot(FOOT, _joint("j", "food", "foot")),
        "rind.urdf: joint 'j' <parent>",
        "unknown link 'food'",
        "the name of a link",
    ),
    "an unknown child": (
        _robot(FOOT, _joint("j", "foot", "bean")),
        "rind.urdf: joint 'j' <child>",
        "unknown link 'bean'",
        "the name of a link",
    ),
    "no child": (
        _robot(FOOT, '<joint name="j" type="fixed"><parent link="foot"/></joint>'),
        "rind.urdf: joint 'j'",
        "no <child>",
        "one <child>",
    ),
    "two parents": (
        _robot(
            FOOT, _link("a"), _link("b"),
            _joint("i", "foot", "a"), _joint("j", "foot", "b"), _joint("k", "b", "a"),
        ),
        "rind.urdf: link 'a'",
        "two parents (joints 'i' and 'k')",
        "one parent",
    ),
    "a loop of all links": (
        _robot(_link("a"), _link("b"), _joint("i", "a", "b"), _joint("j", "b", "a")),
        "rind.urdf: link 'a'",
        "a loop of joints through it",
        "a tree",
    ),
    "a loop beside the root": (
        _robot(
            FOOT, _link("c"), _link("a"), _link("b"),
            _joint("i", "a", "b"), _joint("j", "b", "a"), _joint("k", "a", "c"),
        ),
        "rind.urdf: link 'a'",
        "a loop of joints through it",
        "a tree",
    ),
    "a joint from a link to itself": (
        _robot(FOOT, _joint("j", "foot", "foot")),
        "rind.urdf: link 'foot'",
        "a loop of joints through it",
        "a tree",
    ),
    "two roots": (
        _robot(FOOT, _link("beam"), _link("lid")),
        "rind.urdf",
        "3 root links (foot, beam, lid)",
        "one root link",
    ),
    "an unknown kind of joint": (
        _arm(kind="hinge"),
        "rind.urdf: joint 'turn_1'",
        "type 'hinge'",
        "type fixed, revolute, continuous or prismatic",
    ),
    "a planar joint": (
        _arm(kind="planar"),
        "rind.urdf: joint 'turn_1'",
        "type 'planar'",
        "two prismatic joints and a continuous one",
    ),
    "a floating joint": (
        _arm(kind="floating"),
        "rind.urdf: joint 'turn_1'",
        "type 'floating'",
        "set the base to floating",
    ),
    "a zero axis": (
        _arm('<axis xyz="0 0 0"/>'),
        "rind.urdf: joint 'turn_1' <axis>",
        "zero axis (0, 0, 0)",
        "a vector of length 1",
    ),
    "two numbers for an axis": (
        _arm('<axis xyz="0 1"/>'),
        "rind.urdf: joint 'turn_1' <axis>",
        "xyz '0 1' with 2 numbers",
        "three numbers",
    ),
    "a word for a number": (
        _arm('<origin xyz="0 up 1"/>'),
        "rind.urdf: joint 'turn_1' <origin>",
        "xyz 'up'",
        "a finite number",
    ),
    "a number with a separator": (
        _arm(link=_inertial("1_000", "1", "1", "1")),
        "rind.urdf: link 'beam' <inertial> <mass>",
        "value '1_000'",
        "a finite number",
    ),
    "not a number": (
        _arm('<limit lower="nan" upper="1" velocity="1" effort="1"/>'),
        "rind.urdf: joint 'turn_1' <limit>",
        "lower 'nan'",
        "a finite number",
    ),
    "an infinite number": (
        _arm('<dynamics damping="inf"/>'),
        "rind.urdf: joint 'turn_1' <dynamics>",
        "damping 'inf'",
        "a finite number",
    ),
    "an absurd number": (
        _arm(link=_inertial("1e300", "1", "1", "1")),
        "rind.urdf: link 'beam' <inertial> <mass>",
        "value '1e300'",
        "a finite number",
    ),
    "limits reversed": (
        _arm('<limit lower="2" upper="-1" velocity="1" effort="1"/>'),
        "rind.urdf: joint 'turn_1' <limit>",
        "lower 2 above upper -1",
        "lower at most upper",
    ),
    "a negative effort": (
        _arm('<limit effort="-4" velocity="1"/>'),
        "rind.urdf: joint 'turn_1' <limit>",
        "effort -4",
        "effort not negative",
    ),
    "negative friction": (
        _arm('<dynamics friction="-4"/>'),
        "rind.urdf: joint 'turn_1' <dynamics>",
        "friction -4",
        "friction not negative",
    ),
    "an unknown leader": (
        _arm('<mimic joint="turn_9"/>'),
        "rind.urdf: joint 'turn_1' <mimic>",
        "unknown joint 'turn_9'",
        "the name of a moving joint",
    ),
    "a fixed leader": (
        _robot(
            FOOT, _link("a"), _link("b"),
            _joint("i", "foot", "a", kind="fixed"), _joint("j", "a", "b", '<mimic joint="i"/>'),
        ),
        "rind.urdf: joint 'j' <mimic>",
        "fixed joint 'i'",
        "the name of a moving joint",
    ),
    "a fixed follower": (
        _arm('<mimic joint="turn_9"/>', kind="fixed"),
        "rind.urdf: joint 'turn_1' <mimic>",
        "a fixed joint that follows another",
        "a moving joint",
    ),
    "followers in a circle": (
        _robot(
            FOOT, _link("a"), _link("b"),
            _joint("i", "foot", "a", '<mimic joint="j"/>'), _joint("j", "a", "b", '<mimic joint="i"/>'),
        ),
        "rind.urdf: joint 'i' <mimic>",
        "a circle of followers (i -> j -> i)",
        "an independent leader",
    ),
    "no mass": (
        _arm(link="<inertial/>"),
        "rind.urdf: link 'beam' <inertial>",
        "no <mass>",
        "one <mass>",
    ),
    "inertia without mass": (
        _arm(link=_inertial("0", "1", "1", "1")),
        "rind.urdf: link 'beam' <inertial>",
        "mass 0 kg is not positive",
        "positive mass and principal moments",
    ),
    "negative mass": (
        _arm(link=_inertial("-2", "1", "1", "1")),
        "rind.urdf: link 'beam' <inertial>",
        "mass -2 kg is not positive",
        "positive mass and principal moments",
    ),
    "mass without inertia": (
        _arm(link=_inertial("2", "0", "0", "0")),
        "rind.urdf: link 'beam' <inertial>",
        "inertia is not positive definite (principal moments 0, 0, 0 kg m²)",
        "positive mass and principal moments",
    ),
    "an impossible inertia": (
        _arm(link=_inertial("2", ".1", ".2", ".4")),
        "rind.urdf: link 'beam' <inertial>",
        "violates the triangle inequality by 0.1 kg m² (principal moments 0.1, 0.2, 0.4 kg m²)",
        "each moment less than the sum of the other two",
    ),
    "a flat box": (
        _arm(link=INERTIAL + '<collision><geometry><box size="1 0 1"/></geometry></collision>'),
        "rind.urdf: link 'beam' <collision> <box>",
        "size 1 0 1",
        "positive lengths",
    ),
    "a shape without a size": (
        _arm(link=INERTIAL + "<collision><geometry><sphere/></geometry></collision>"),
        "rind.urdf: link 'beam' <collision> <sphere>",
        "no radius",
        "attribute radius",
    ),
}  # fmt: skip


@pytest.mark.parametrize(("text", "where", "found", "expected"), REFUSED.values(), ids=REFUSED)
def test_a_faulty_description_is_refused_by_place_finding_and_expectation(
    text: str, where: str, found: str, expected: str
) -> None:
    with pytest.raises(ModelError) as caught:
        _parse(text)
    error = caught.value
    assert error.where == where
    assert found in error.found
    assert expected in str(error)
    assert error.todo


def test_a_missing_file_is_refused_by_its_path(tmp_path: Path) -> None:
    path = tmp_path / "rind.urdf"
    with pytest.raises(ModelError, match="cannot be read") as caught:
        read_urdf(path)
    assert caught.value.where == str(path)


def test_a_file_is_named_in_what_is_wrong_with_it(tmp_path: Path) -> None:
    path = tmp_path / "cellar.urdf"
    path.write_text(_arm('<axis xyz="0 0 0"/>'))
    with pytest.raises(ModelError) as caught:
        read_urdf(path)
    assert caught.value.where == "cellar.urdf: joint 'turn_1' <axis>"


@given(st.binary(max_size=200))
def test_any_bytes_give_a_description_or_a_model_error(text: bytes) -> None:
    with pytest.raises(ModelError):
        parse_urdf(text)


@given(st.data())
def test_a_description_with_one_piece_replaced_gives_a_description_or_a_model_error(
    data: st.DataObject,
) -> None:
    text = _arm('<axis xyz="0 0 1"/><limit lower="-1" upper="1" velocity="1" effort="1"/>')
    start = data.draw(st.integers(0, len(text) - 1))
    piece = data.draw(st.text(max_size=8))
    broken = text[:start] + piece + text[start + data.draw(st.integers(0, 8)) :]
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", ModelWarning)
            description = parse_urdf(broken.encode("utf-8", "surrogatepass"))
    except ModelError:
        return
    assert description.links


def test_a_speed_limit_of_zero_is_a_placeholder_and_noted() -> None:
    with pytest.warns(ModelWarning, match="velocity 0 is taken as not given"):
        joint = _parse(_arm('<limit lower="-1" upper="1" velocity="0" effort="4"/>')).joints[0]
    assert joint.velocity == math.inf
