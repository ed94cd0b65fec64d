"""What `limbtell init` writes: it loads, says everything, and refuses what it cannot know."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Literal

import pytest
import tomlkit
from hypothesis import given
from hypothesis import strategies as st

from monitor.errors import ConfigError, ModelError
from monitor.setup.config import Config, load
from monitor.setup.table import schema_keys
from monitor.setup.template import write_config


def link(name: str) -> str:
    inertia = '<mass value="2"/><inertia ixx="0.02" iyy="0.02" izz="0.02"/>'
    return f'<link name="{name}"><inertial>{inertia}</inertial></link>'


def joint(name: str, parent: str, child: str, limit: str, kind: str = "revolute", inner: str = "") -> str:
    ends = f'<parent link="{parent}"/><child link="{child}"/><origin xyz="0 0 0.3"/><axis xyz="0 1 0"/>'
    return f'<joint name="{name}" type="{kind}">{ends}{limit}{inner}</joint>'


STRONG = '<limit lower="-2.5" upper="2.25" velocity="1.5" effort="50"/>'
# The description names joint 2 first; the wire follows the description.
RIND = f"""<robot name="rind">
{link("base")}{link("one")}{link("two")}{link("three")}{link("four")}
{joint("turn_2", "one", "two", STRONG, inner='<dynamics damping="1.25" friction="2.75"/>')}
{joint("turn_1", "base", "one", STRONG)}
{joint("lift", "two", "three", '<limit lower="0" upper="0.4" velocity="0.5" effort="300"/>', "prismatic")}
{joint("follower", "three", "four", STRONG, inner='<mimic joint="turn_1"/>')}
</robot>
"""


@pytest.fixture
def urdf(tmp_path: Path) -> Path:
    path = tmp_path / "models" / "rind.urdf"
    path.parent.mkdir()
    path.write_text(RIND, encoding="utf-8")
    return path


def written(
    urdf: Path, base: Literal["fixed", "floating"] = "fixed", sheet: list[Any] | None = None
) -> tuple[str, Config]:
    """The text, and what reading it from a file beside the models gives."""
    folder = urdf.parent.parent
    datasheet = None
    if sheet is not None:
        datasheet = folder / "sheet.json"
        datasheet.write_text(json.dumps({"joints": sheet}), encoding="utf-8")
    text = write_config(urdf, base, datasheet, folder)
    (folder / "robot.toml").write_text(text, encoding="utf-8")
    return text, load(folder / "robot.toml")


def in_force(document: Any, path: tuple[str, ...] = ()) -> Iterator[tuple[str, ...]]:
    if isinstance(document, dict):
        for key, value in document.items():
            yield (*path, key)
            yield from in_force(value, (*path, key))
    elif isinstance(document, list):
        for value in document:
            yield from in_force(value, path)


@pytest.mark.parametrize("base", ["fixed", "floating"])
def test_every_key_of_the_schema_is_written_with_its_description(
    urdf: Path, base: Literal["fixed", "floating"]
) -> None:
    text, _ = written(urdf, base)
    # What stands behind `#` is looked for after making it count: an outside parser reads it as TOML.
    opened = re.sub(r"^# ((?:\w+ = .*|\[\[.*\]\]))$", r"\1", text, flags=re.MULTILINE)
    keys = set(in_force(tomlkit.parse(opened).unwrap()))
    prose = " ".join(line.removeprefix("# ") for line in text.split("\n"))
    for key in schema_keys(Config):
        assert key.path in keys, key.path
        if key.path[:2] != ("robot", "foot") or len(key.path) == 2:
            assert key.field.description in prose, key.path


def test_what_stands_behind_a_hash_is_accepted_when_it_is_put_in_force(urdf: Path) -> None:
    text, _ = written(urdf)
    opened = re.sub(r"^# (?!torque_constant)((?:\w+ = .*|\[\[.*\]\]))$", r"\1", text, flags=re.MULTILINE)
    path = urdf.parent.parent / "opened.toml"
    path.write_text(opened, encoding="utf-8")
    joints = load(path).robot.joint
    assert [(j.position_min, j.position_max, j.velocity_max) for j in joints[1:]] == [
        (-2.5, 2.25, 1.5),
        (0.0, 0.4, 0.5),
    ]


def test_joints_come_in_the_order_of_the_description_without_followers(urdf: Path) -> None:
    _, config = written(urdf)
    assert [joint.name for joint in config.robot.joint] == ["turn_2", "turn_1", "lift"]
    first, _, lift = config.robot.joint
    assert (first.rated_torque, first.peak_torque) == (50.0, 50.0)
    assert (first.viscous_friction, first.coulomb_friction) == (1.25, 2.75)
    assert lift.rated_torque == 300.0
    assert config.robot.name == "rind"


def test_the_description_is_found_from_where_the_configuration_lies(urdf: Path) -> None:
    _, config = written(urdf)
    assert config.robot.urdf == "models/rind.urdf"
    assert config.urdf_text == RIND


@pytest.mark.parametrize("base", ["fixed", "floating"])
def test_the_base_is_as_asked_for(urdf: Path, base: Literal["fixed", "floating"]) -> None:
    assert written(urdf, base)[1].robot.base == base


def test_a_datasheet_goes_before_the_description(urdf: Path) -> None:
    figures = {
        "rated_torque": 30.0,
        "peak_torque": 90.0,
        "armature": 0.25,
        "encoder_step": 1e-6,
        "velocity_noise_sd": 0.002,
        "torque_noise_sd": 0.5,
    }
    _, config = written(urdf, sheet=[{"name": "turn_1", **figures}, {"name": "lift", "armature": 3}])
    other, first, lift = config.robot.joint
    assert first.model_dump(include=set(figures)) == figures
    assert (lift.armature, lift.rated_torque) == (3.0, 300.0)
    assert other.armature == 0.0


@pytest.mark.parametrize(
    ("figures", "rated", "peak"),
    [
        ({"rated_torque": 30.0}, 30.0, 50.0),
        ({"rated_torque": 70.0}, 70.0, 70.0),
        ({"peak_torque": 40.0}, 40.0, 40.0),
        ({"peak_torque": 80.0}, 50.0, 80.0),
    ],
)
def test_rated_and_peak_torque_complete_each_other(
    urdf: Path, figures: dict[str, float], rated: float, peak: float
) -> None:
    first = written(urdf, sheet=[{"name": "turn_2", **figures}])[1].robot.joint[0]
    assert (first.rated_torque, first.peak_torque) == (rated, peak)


def test_limits_are_widened_for_a_coarse_encoder_and_a_noisy_velocity(urdf: Path) -> None:
    sheet = [{"name": "turn_1", "encoder_step": 0.02, "velocity_noise_sd": 0.5, "torque_noise_sd": 2.0}]
    _, config = written(urdf, sheet=sheet)
    _, plain = written(urdf)
    for key in ("brake_motion", "frozen_velocity", "command_error_ratio"):
        assert getattr(config.watch, key) > getattr(plain.watch, key), key
    # These follow from the noise by themselves.
    for index in range(2):
        assert max(limits[index] for limits in config.motion_limits) > plain.motion_limits[0][index]


def weaken(urdf: Path, limit: str) -> None:
    urdf.write_text(RIND.replace(STRONG, limit), encoding="utf-8")


@pytest.mark.parametrize(
    ("limit", "found"),
    [('<limit lower="-1" upper="1" velocity="1"/>', "nothing"), ('<limit effort="0"/>', "0")],
)
def test_a_joint_of_unknown_strength_is_refused_with_both_ways_out(
    urdf: Path, limit: str, found: str
) -> None:
    weaken(urdf, limit)
    with pytest.raises(ConfigError) as caught:
        written(urdf)
    assert caught.value.where == f"{urdf}: joint 'turn_2' <limit> effort"
    assert caught.value.found == found
    assert "effort" in caught.value.todo
    assert '--datasheet FILE.json with {"joints": [{"name": "turn_2"' in caught.value.todo


def test_a_datasheet_supplies_the_strength_the_description_lacks(urdf: Path) -> None:
    weaken(urdf, '<limit lower="-1" upper="1" velocity="1"/>')
    sheet = [{"name": "turn_2", "peak_torque": 12.0}, {"name": "turn_1", "rated_torque": 7.0}]
    joints = written(urdf, sheet=sheet)[1].robot.joint
    assert [(j.rated_torque, j.peak_torque) for j in joints[:2]] == [(12.0, 12.0), (7.0, 7.0)]


def test_a_description_that_is_no_robot_is_refused(urdf: Path) -> None:
    urdf.write_text("<robot", encoding="utf-8")
    with pytest.raises(ModelError):
        written(urdf)


@pytest.mark.parametrize(
    ("sheet", "where", "found", "expected"),
    [
        ('{"joints": [{"name": "turn_9"}]}', "joints[0].name", "'turn_9'", "turn_2, turn_1, lift"),
        ('{"joints": [{"name": "follower"}]}', "joints[0].name", "'follower'", "a moving joint"),
        ('{"joints": [{"name": "lift"}, {"name": "lift"}]}', "joints[1].name", "a second time", "once"),
        (
            '{"joints": [{"name": "lift", "rated_torqe": 1}]}',
            "joints[0] 'lift'.rated_torqe",
            "an unknown key",
            "a key",
        ),
        (
            '{"joints": [{"name": "lift", "rated_torque": "1"}]}',
            "joints[0] 'lift'.rated_torque",
            '"1"',
            "a valid number",
        ),
        ('{"joints": [{"name": "lift", "armature": -1}]}', "joints[0] 'lift'.armature", "-1", "greater"),
        (
            '{"joints": [{"name": "lift", "encoder_step": NaN}]}',
            "joints[0] 'lift'.encoder_step",
            "NaN",
            "finite",
        ),
        (
            '{"joints": [{"name": "lift", "rated_torque": 2, "peak_torque": 1}]}',
            "joints[0] 'lift'.peak_torque",
            "1.0",
            "at least the rated_torque",
        ),
        ('{"joints": [{"armature": 1}]}', "joints[0].name", "nothing", "a value: Name"),
        ('{"joints": {}}', "joints", "{}", "an array"),
        ('{"joint": []}', "joints", "nothing", "a value"),
        ("[]", "", "[]", "a JSON object"),
        ('{"joints": [}', "", "not JSON", "a JSON object"),
        ("[" * 100_000, "", "not JSON", "a JSON object"),
    ],
)
def test_a_datasheet_is_refused_by_file_and_element(
    urdf: Path, sheet: str, where: str, found: str, expected: str
) -> None:
    path = urdf.parent / "sheet.json"
    path.write_text(sheet, encoding="utf-8")
    with pytest.raises(ConfigError) as caught:
        write_config(urdf, "fixed", path, urdf.parent)
    assert caught.value.where == (f"{path}: {where}" if where else str(path))
    assert found in caught.value.found
    assert expected in caught.value.expected


def test_a_datasheet_that_cannot_be_read_is_refused(urdf: Path) -> None:
    with pytest.raises(ConfigError, match="No such file"):
        write_config(urdf, "fixed", urdf.parent / "none.json", urdf.parent)


sizes = st.floats(1e-9, 1e6)


@given(
    st.fixed_dictionaries(
        {},
        optional={
            "rated_torque": sizes,
            "armature": sizes,
            "encoder_step": sizes,
            "velocity_noise_sd": sizes,
            "torque_noise_sd": sizes,
        },
    )
)
def test_whatever_the_datasheet_says_the_file_loads(
    tmp_path_factory: pytest.TempPathFactory, figures: dict[str, float]
) -> None:
    urdf = tmp_path_factory.mktemp("robot") / "models" / "rind.urdf"
    urdf.parent.mkdir()
    urdf.write_text(RIND, encoding="utf-8")
    _, config = written(urdf, sheet=[{"name": "turn_1", **figures}])
    first = config.robot.joint[1]
    assert first.model_dump(include=set(figures)) == figures
