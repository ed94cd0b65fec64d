"""The configuration: what it accepts, and in which words it refuses."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pinocchio as pin
import pytest
import tomlkit
from hypothesis import given
from hypothesis import strategies as st
from pydantic import ValidationError

from monitor.errors import ConfigError
from monitor.setup.config import Config, load, loads, standstill_floors
from monitor.setup.table import schema_keys

URDF = "<robot name='rind'/>"
SMALLEST = """\
schema = 1

[robot]
urdf = "rind.urdf"

[[robot.joint]]
name = "turn_1"
rated_torque = 10.0

[[robot.joint]]
name = "turn_2"
rated_torque = 20.0
"""


def read(text: str) -> Config:
    return loads(text, "robot.toml", {"rind.urdf": URDF})


def refused(text: str) -> ConfigError:
    with pytest.raises(ConfigError) as caught:
        read(text)
    return caught.value


def robot(lines: str) -> str:
    return SMALLEST.replace('urdf = "rind.urdf"\n', f'urdf = "rind.urdf"\n{lines}\n')


# --- what is read --------------------------------------------------------------------------------


def test_the_smallest_file_is_accepted_and_its_defaults_are_derived() -> None:
    config = read(SMALLEST)
    joint = config.robot.joint[1]
    assert joint.peak_torque == 20.0
    assert joint.torque_noise_sd == pytest.approx(0.1)
    # The error of rounding is uniform over one step; its standard deviation, numerically.
    error = joint.encoder_step * (np.arange(0.5, 10_000) / 10_000 - 0.5)
    assert joint.position_noise_sd == pytest.approx(error.std(), rel=1e-6)


def test_load_reads_the_description_beside_the_file(tmp_path: Path) -> None:
    (tmp_path / "models").mkdir()
    (tmp_path / "models" / "r.urdf").write_text(URDF, encoding="utf-8")
    path = tmp_path / "robot.toml"
    text = SMALLEST.replace("rind.urdf", "models/r.urdf").replace("\n", "\r\n")
    path.write_bytes(text.encode())
    config = load(path)
    assert config.path == path
    assert config.source_toml == text
    assert config.model_files() == {"models/r.urdf": URDF}
    assert config.calibration_text == ""
    assert config.record_folder == tmp_path / "sessions"


def test_a_calibration_is_read_beside_the_file_and_goes_with_it(tmp_path: Path) -> None:
    (tmp_path / "rind.urdf").write_text(URDF, encoding="utf-8")
    (tmp_path / "rind.calibration.json").write_text("{}", encoding="utf-8")
    path = tmp_path / "robot.toml"
    path.write_text(robot('calibration = "rind.calibration.json"'), encoding="utf-8")
    config = load(path)
    assert config.calibration_text == "{}"
    assert config.model_files() == {"rind.urdf": URDF, "rind.calibration.json": "{}"}
    again = loads(config.source_toml, str(path), config.model_files())
    assert again == config
    assert again.calibration_text == "{}"


def test_a_calibration_that_is_named_but_not_there_is_refused(tmp_path: Path) -> None:
    (tmp_path / "rind.urdf").write_text(URDF, encoding="utf-8")
    path = tmp_path / "robot.toml"
    path.write_text(robot('calibration = "none.json"'), encoding="utf-8")
    with pytest.raises(ConfigError, match="No such file") as caught:
        load(path)
    assert caught.value.where == f"{path}: robot.calibration"
    error = refused(robot('calibration = "none.json"'))
    assert error.where == "robot.toml: robot.calibration"
    assert (error.found, error.expected) == ("'none.json'", "one of the files at hand: ['rind.urdf']")


def test_a_session_reads_the_same_configuration_from_memory(tmp_path: Path) -> None:
    (tmp_path / "rind.urdf").write_text(URDF, encoding="utf-8")
    path = tmp_path / "robot.toml"
    path.write_text(SMALLEST, encoding="utf-8")
    config = load(path)
    assert loads(config.source_toml, str(path), config.model_files()) == config


def test_nothing_of_a_configuration_can_be_changed() -> None:
    config = read(robot("gravity = [0.0, 1.0, -9.0]"))
    with pytest.raises(ValidationError):
        config.watch.loop_hz = 500.0  # type: ignore[misc]
    with pytest.raises(ValidationError):
        config.watch = config.watch  # type: ignore[misc]
    assert hash(config.robot) == hash(read(robot("gravity = [0.0, 1.0, -9.0]")).robot)


@pytest.mark.parametrize("rpy", [(0.3, -0.7, 1.1), (math.pi, 0.0, 0.0), (0.0, math.pi / 2, 0.4)])
def test_the_mount_attitude_turns_gravity_as_a_rotation_library_does(rpy: tuple[float, float, float]) -> None:
    config = read(robot(f"mount_rpy = {list(rpy)}"))
    # Outside judge: pin.rpy.rpyToMatrix, R = Rz(yaw) Ry(pitch) Rx(roll).
    expected = pin.rpy.rpyToMatrix(*rpy).T @ [0.0, 0.0, -9.81]
    np.testing.assert_allclose(config.robot.gravity_vector, expected, atol=1e-12)


def test_gravity_is_taken_as_given_without_a_mount_attitude() -> None:
    assert read(robot("gravity = [1.0, 2.0, -9.0]")).robot.gravity_vector == (1.0, 2.0, -9.0)


@pytest.mark.parametrize(
    ("lines", "scale"),
    [
        ("", 1.0),
        ('torque_meaning = "joint"\ngear_ratio = 100.0', 1.0),
        ('torque_meaning = "link"\ngear_ratio = 100.0', 1.0),
        ('torque_meaning = "motor"\ngear_ratio = 100.0', 100.0),
        ('torque_meaning = "current"\ngear_ratio = 100.0\ntorque_constant = 0.05', 5.0),
    ],
)
def test_torque_is_scaled_to_the_joint_side_by_its_meaning(lines: str, scale: float) -> None:
    assert read(SMALLEST + lines).robot.joint[1].torque_scale == pytest.approx(scale)


def test_every_key_of_the_schema_is_described() -> None:
    for key in schema_keys(Config):
        assert key.field.description, key.path
        assert key.field.description.endswith((".", "]")), key.path


# --- what is refused, and how --------------------------------------------------------------------


@pytest.mark.parametrize(
    ("schema", "found", "todo"),
    [
        ("", "nothing", "Put `schema = 1`"),
        ("schema = 0", "0", "limbtell init"),
        ("schema = 2", "2", "update limbtell"),
        ("schema = true", "true", "Put `schema = 1`"),
        ('schema = "1"', '"1"', "Put `schema = 1`"),
    ],
)
def test_another_schema_is_refused_with_the_way_out(schema: str, found: str, todo: str) -> None:
    error = refused(SMALLEST.replace("schema = 1", schema))
    assert (error.where, error.found, error.expected) == ("robot.toml: schema", found, "1")
    assert todo in error.todo


# (what is added, the key as a person writes it, what was found, what was expected); `!` marks the line.
MISTAKES = {
    "unknown key": (
        "sgn = 1 #!",
        "robot.joint[1] 'turn_2'.sgn",
        "an unknown key",
        "a key that limbtell knows",
    ),
    "sign": ("sign = 2 #!", "robot.joint[1] 'turn_2'.sign", "2", "1 or -1"),
    "boolean sign": ("sign = true #!", "robot.joint[1] 'turn_2'.sign", "true", "integer"),
    "negative": (
        "armature = -0.1 #!",
        "robot.joint[1] 'turn_2'.armature",
        "-0.1",
        "greater than or equal to 0",
    ),
    "text for number": ('armature = "a" #!', "robot.joint[1] 'turn_2'.armature", '"a"', "a valid number"),
    "not finite": ("armature = inf #!", "robot.joint[1] 'turn_2'.armature", "Infinity", "finite"),
    "choice": (
        'torque_meaning = "side" #!',
        "robot.joint[1] 'turn_2'.torque_meaning",
        '"side"',
        "'joint', 'motor', 'current' or 'link'",
    ),
    "current without constant": (
        'torque_meaning = "current"',
        "robot.joint[1] 'turn_2'.torque_constant",
        "nothing",
        "a number",
    ),
    "peak below rated": ("peak_torque = 1.0 #!", "robot.joint[1] 'turn_2'.peak_torque", "1.0", "at least"),
    "reversed travel": (
        "position_min = 1.0 #!\nposition_max = -1.0",
        "robot.joint[1] 'turn_2'.position_min",
        "1.0",
        "less than position_max",
    ),
    "doubled joint": (
        '[[robot.joint]]\nname = "turn_1" #!\nrated_torque = 1.0',
        "robot.joint[2] 'turn_1'.name",
        "'turn_1', as in joint[0]",
        "every name once",
    ),
    "doubled foot": (
        '[[robot.foot]]\nname = "f"\nlink = "a"\n[[robot.foot]]\nname = "f" #!\nlink = "b"',
        "robot.foot[1] 'f'.name",
        "'f', as in foot[0]",
        "every name once",
    ),
    "missing link": ('[[robot.foot]] #!\nname = "f"', "robot.foot[0] 'f'.link", "nothing", "a value: Link"),
    "loop rate": ("[watch]\nloop_hz = 9000 #!", "watch.loop_hz", "9000", "less than or equal to 8000"),
    "fast below slow": ("[watch]\nslow_walk = 7.0 #!", "watch.slow_walk", "7.0", "less than fast_walk"),
    "bandwidth": (
        '[watch]\nresidual = "first-order"\nfast_bandwidth_hz = 300.0 #!',
        "watch.fast_bandwidth_hz",
        "300.0",
        "at most a fifth of input.rate_hz",
    ),
    "fires at standstill": (
        "[watch]\nposition_jump = 1e-6 #!",
        "watch.position_jump",
        "1e-06",
        "fires while the robot stands still",
    ),
    "noise as configured": (
        "[watch]\nnoise_ratio = 3.0 #!",
        "watch.noise_ratio",
        "3.0",
        "at least 3.5, or it fires while the robot stands still",
    ),
    "contradicts at standstill": (
        "[watch]\ncontradiction = 1e-5 #!",
        "watch.contradiction",
        "1e-05",
        "fires while the robot stands still",
    ),
    "credible torque": (
        "[watch]\ntorque_credible_ratio = 1.0 #!",
        "watch.torque_credible_ratio",
        "1.0",
        "more than 1",
    ),
    "credible speed": (
        "[watch]\nvelocity_limit_ratio = 0.9 #!",
        "watch.velocity_limit_ratio",
        "0.9",
        "at least 1",
    ),
    "too few per tick": (
        "[watch]\nloop_hz = 100\n[input]\nmessages_per_tick = 5 #!",
        "input.messages_per_tick",
        "5",
        "at least 10",
    ),
    "no rate at all": ("[explain]\nactuator_per_h = 0 #!", "explain.actuator_per_h", "0", "greater than 0"),
    "always": ("[explain]\ncontact_per_h = 4000 #!", "explain.contact_per_h", "4000", "less than or equal"),
    "as good as a coin": ("[explain]\ncertainty = 0.5 #!", "explain.certainty", "0.5", "greater than 0.5"),
    "more than certain": ("[explain]\ncertainty = 1.0 #!", "explain.certainty", "1.0", "less than 1"),
    "taken in untold": (
        "[explain]\nlasting_probability = 0.85 #!",
        "explain.lasting_probability",
        "0.85",
        "at least certainty, 0.9",
    ),
    "no load": ("[explain]\nlargest_load_kg = 0 #!", "explain.largest_load_kg", "0", "greater than 0"),
    "always false": ("[watch]\nfalse_alarm_s = 10 #!", "watch.false_alarm_s", "10", "or equal to 60"),
    "address": ('[input]\naddress = "here" #!', "input.address", '"here"', "tcp://HOST:PORT"),
    "port": ('[input]\naddress = "tcp://10.0.0.1:70000" #!', "input.address", "70000", "tcp://HOST:PORT"),
    "open output": ('[output]\naddress = "tcp://*:5556" #!', "output.address", "tcp://*:5556", "loopback"),
    "open metrics": ('[desk]\nmetrics_host = "0.0.0.0" #!', "desk.metrics_host", "0.0.0.0", "loopback"),
    "same address": ('[output]\naddress = "tcp://127.0.0.1:5555" #!', "output.address", "5555", "another"),
    "same port": ("[desk]\nmetrics_port = 5556 #!", "desk.metrics_port", "5556", "another port"),
    "whole number": ("[desk]\nmetrics_port = 1.5 #!", "desk.metrics_port", "1.5", "a valid integer"),
    "flush": ("[record]\nflush_s = 4000.0 #!", "record.flush_s", "4000.0", "at most max_session_s"),
    "priority": ("[realtime]\npriority = 99 #!", "realtime.priority", "99", "less than or equal to 98"),
    "processor": ("[realtime]\ncpu = [\n0,\n-1] #", "realtime.cpu[1]", "-1", "greater than or equal to 0"),
}


@pytest.mark.parametrize("name", MISTAKES)
def test_a_mistake_is_named_by_file_line_key_found_and_expected(name: str) -> None:
    lines, key, found, expected = MISTAKES[name]
    text = SMALLEST + lines + "\n"
    error = refused(text)
    marked = [number for number, line in enumerate(text.split("\n"), 1) if line.endswith("#!")]
    assert error.where.startswith("robot.toml, line ")
    if marked:
        assert error.where == f"robot.toml, line {marked[0]}: {key}"
    assert error.where.endswith(f": {key}")
    assert found in error.found
    assert expected in error.expected


ROBOT_MISTAKES = {
    "mount of a walker": (
        'base = "floating"\nmount_rpy = [0.1, 0, 0] #!',
        "robot.mount_rpy",
        "[0.1",
        "[0, 0, 0]",
    ),
    "two gravities": (
        "gravity = [0, 1, -9]\nmount_rpy = [0.1, 0, 0] #!",
        "robot.mount_rpy",
        "beside gravity",
        "one of the two",
    ),
    "short vector": ("gravity = [0, 1] #!", "robot.gravity[2]", "nothing", "Gravity vector"),
    "long vector": ("gravity = [0, 1, 2, 3] #!", "robot.gravity", "[0, 1, 2, 3]", "at most 3 items"),
    "huge gravity": ("gravity = [0, 0, -981] #!", "robot.gravity", "-981", "at most 30 m/s^2"),
    "coupling shape": ("coupling = [[1, 0]] #!", "robot.coupling", "1 rows of lengths [2]", "2 rows of 2"),
    "coupling rank": ("coupling = [[1, 2], [2, 4]] #!", "robot.coupling", "cannot be inverted", "invertible"),
    "control character": ('name = "a\\u0007" #!', "robot.name", '"a\\u0007"', "control characters"),
}


@pytest.mark.parametrize("name", ROBOT_MISTAKES)
def test_a_mistake_about_the_whole_robot_is_named_too(name: str) -> None:
    lines, key, found, expected = ROBOT_MISTAKES[name]
    text = robot(lines)
    error = refused(text)
    number = next(number for number, line in enumerate(text.split("\n"), 1) if line.endswith("#!"))
    assert error.where == f"robot.toml, line {number}: {key}"
    assert found in error.found
    assert expected in error.expected


def test_a_robot_without_joints_is_refused() -> None:
    error = refused('schema = 1\n[robot]\nurdf = "rind.urdf"\njoint = []\n')
    assert (error.where, error.found) == ("robot.toml, line 4: robot.joint", "[]")


def test_a_required_key_that_is_missing_is_asked_for_with_its_meaning() -> None:
    error = refused(SMALLEST.replace("rated_torque = 20.0\n", ""))
    assert error.where == "robot.toml, line 10: robot.joint[1] 'turn_2'.rated_torque"
    assert error.found == "nothing"
    assert "lastingly" in error.expected


@pytest.mark.parametrize(
    ("lines", "meant"),
    [
        ("[watch]\nloop_hertz = 1", "Did you mean `loop_hz`?"),
        ("[wach]\nloop_hz = 1000", "Did you mean `watch`?"),
        ("[input]\nloop_hz = 1000", "Did you mean `watch.loop_hz`?"),
        ("[alarms]\nxyz = 1", "Known here: publish."),
    ],
)
def test_an_unknown_key_brings_the_nearest_known_one(lines: str, meant: str) -> None:
    assert meant in refused(SMALLEST + lines).todo


def test_all_mistakes_are_told_at_once_in_the_order_of_the_file() -> None:
    error = refused(robot('name = 3\nbase = "loose"') + "sgn = 1\n[desk]\nmetrics_port = 0\n")
    text = str(error)
    keys = ["robot.name", "robot.base", "robot.joint[1] 'turn_2'.sgn", "desk.metrics_port"]
    places = [text.index(key) for key in keys]
    assert places == sorted(places)
    assert "Did you mean `sign`?" in text


def test_a_wrong_rated_torque_is_not_reported_again_by_what_is_derived_from_it() -> None:
    error = refused(SMALLEST.replace("20.0", '"much"'))
    assert error.where.endswith(".rated_torque")
    assert error.todo == ""


def test_lines_are_right_after_values_that_span_lines_and_look_like_headers() -> None:
    text = robot('coupling = [\n[1, 0],\n[0, 1]\n]\nserial = """\\\n[watch]\\\nloop_hz = 1"""')
    text += "[watch] # [input]\nloop_hz = 1 #!\n"
    number = text[: text.index("#!")].count("\n") + 1
    assert refused(text).where == f"robot.toml, line {number}: watch.loop_hz"


def test_text_that_is_not_toml_is_refused_with_its_place() -> None:
    error = refused("schema = 1\nrobot = [\n")
    assert error.where == "robot.toml"
    assert "line" in error.found or "end of document" in error.found


def test_a_configuration_that_cannot_be_read_is_refused(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match="No such file"):
        load(tmp_path / "none.toml")
    path = tmp_path / "robot.toml"
    path.write_bytes(b"schema = 1 # \xff")
    with pytest.raises(ConfigError, match="byte 13 is not UTF-8"):
        load(path)


def test_a_description_that_cannot_be_read_is_named_by_its_key(tmp_path: Path) -> None:
    path = tmp_path / "robot.toml"
    path.write_text(SMALLEST, encoding="utf-8")
    with pytest.raises(ConfigError, match=r"robot\.urdf: found .*rind\.urdf: No such file"):
        load(path)
    with pytest.raises(ConfigError, match=r"robot\.urdf: found 'rind\.urdf'; expected .*other\.urdf"):
        loads(SMALLEST, "session", {"other.urdf": URDF})


@pytest.mark.parametrize(
    "address", ["tcp://127.0.0.1:6000", "tcp://[::1]:6000", "tcp://lo:6000", "ipc:///tmp/a"]
)
def test_an_output_that_stays_on_this_machine_needs_no_permission(address: str) -> None:
    assert read(SMALLEST + f'[output]\naddress = "{address}"\n').output.address == address


def test_an_output_open_to_others_is_accepted_where_it_is_allowed() -> None:
    lines = '[output]\naddress = "tcp://*:5556"\nallow_remote = true\n[desk]\nmetrics_host = "0.0.0.0"\n'
    assert read(SMALLEST + lines + "allow_remote = true\n").output.allow_remote


# --- limits which cannot fire at standstill ------------------------------------------------------


def test_limits_of_motion_follow_from_the_noise_of_each_joint_unless_they_are_given() -> None:
    config = read(SMALLEST + "encoder_step = 1e-4\nposition_noise_sd = 2e-5\nvelocity_noise_sd = 0.007\n")
    (fine, _), (jump, drift) = config.motion_limits
    # 10 sds of Δq - dt (v + v_last) / 2: two positions, and at 1 kHz two velocities of 3.5e-6 rad each.
    assert jump == pytest.approx(1e-4 + 10.0 * math.sqrt(2.0 * 2e-5**2 + 2.0 * 3.5e-6**2), rel=1e-12)
    # 10 sds of two positions and of velocities over 0.1 s; a blow of 1000 rad/s² that shows 5 ms late.
    noise = math.sqrt(2.0 * 2e-5**2 + 2.0 * 0.007**2 * 0.1 * 1e-3)
    assert drift == pytest.approx(1e-4 + 10.0 * noise + 1000.0 * 0.005**2, rel=1e-12)
    assert fine == pytest.approx(5e-5 * (1.0 + 10.0 * math.sqrt(2.0 / 12.0 + 2.0 * 0.05**2)), rel=1e-12)
    given = read(SMALLEST + "[watch]\nposition_jump = 0.01\ncontradiction = 0.05\n")
    assert given.motion_limits == 2 * ((0.01, 0.05),)


def test_limits_at_their_floor_stay_silent_on_a_joint_that_stands_still() -> None:
    """Simulated readings, 400 s at 1 kHz: coarse encoder, noisy velocity, limits as low as they may be."""
    lines = "encoder_step = 1e-3\nvelocity_noise_sd = 0.02\ntorque_noise_sd = 0.4\n"
    wide = "[watch]\nfrozen_velocity = 1.0\nfrozen_s = 1.0\ncontradiction = 1.0\nposition_jump = 1.0\n"
    config = read(SMALLEST + lines + wide + "brake_motion = 1.0\ncommand_error_ratio = 1.0\n")
    joint, period = config.robot.joint[1], 1.0 / config.input.rate_hz
    least = {
        key: value for key, (value, _) in standstill_floors(config.robot, config.input, config.watch).items()
    }
    rng = np.random.default_rng(5)
    n, window = 400_000, round(config.watch.contradiction_s / period)
    # A standing joint on the edge between two encoder steps: the worst place to stand.
    q = joint.encoder_step * np.round(rng.normal(0.5, 1e-3, n))
    q += rng.normal(0.0, joint.position_noise_sd, n)
    v = rng.normal(0.0, joint.velocity_noise_sd, n)
    moved = np.concatenate([[0.0], np.cumsum(v[1:] * period)])
    assert np.abs(np.diff(q) - v[1:] * period).max() < least["position_jump"]
    assert (
        np.abs((q[window:] - q[:-window]) - (moved[window:] - moved[:-window])).max() < least["contradiction"]
    )
    assert np.abs(q - q[0]).max() < least["brake_motion"]
    run = round(0.05 / period)
    assert np.convolve(np.abs(v) > least["frozen_velocity"], np.ones(run), "valid").max() < run
    run = round(config.watch.command_error_s / period)
    tau = rng.normal(0.0, joint.torque_noise_sd, n)
    beyond = np.abs(tau) > least["command_error_ratio"] * joint.rated_torque
    assert np.convolve(beyond, np.ones(run), "valid").max() < run
    assert least["stream_stale_s"] >= 3 * period


# --- junk ----------------------------------------------------------------------------------------

JUNK = st.recursive(
    st.one_of(
        st.booleans(),
        st.integers(-(2**63), 2**63 - 1),
        st.floats(),
        st.text(st.characters(exclude_categories=["Cs"]), max_size=20),
        st.datetimes(),
    ),
    lambda inner: st.one_of(
        st.lists(inner, max_size=3),
        st.dictionaries(st.text("abz_", min_size=1, max_size=4), inner, max_size=3),
    ),
    max_leaves=6,
)
KEYS = [key.path for key in schema_keys(Config)]


def outcome(text: str) -> Config | ConfigError:
    """What reading gives; any other exception fails the test."""
    try:
        return read(text)
    except ConfigError as error:
        return error


@given(st.text(max_size=200))
def test_any_text_gives_a_configuration_or_a_config_error(text: str) -> None:
    assert isinstance(outcome(text), ConfigError)


@given(st.sampled_from(KEYS), JUNK)
def test_any_value_under_any_key_gives_a_configuration_or_a_config_error(
    path: tuple[str, ...], value: object
) -> None:
    document = tomlkit.parse(SMALLEST + '[[robot.foot]]\nname = "f"\nlink = "l"\n')
    table = document
    for part in path[:-1]:
        table = table.setdefault(part, tomlkit.table())
        if isinstance(table, tomlkit.items.AoT):
            table = table[0]
    table[path[-1]] = value
    outcome(tomlkit.dumps(document))


@given(st.data())
def test_a_damaged_file_gives_a_configuration_or_a_config_error(data: st.DataObject) -> None:
    whole = SMALLEST + "[watch]\nloop_hz = 500\n"
    start = data.draw(st.integers(0, len(whole)))
    stop = data.draw(st.integers(start, min(len(whole), start + 20)))
    outcome(whole[:start] + data.draw(st.text('=[]"\n.#1ea', max_size=4)) + whole[stop:])


@pytest.mark.parametrize(
    "text",
    [
        "x = " + "[" * 5000,
        "schema = 1\nx = " + "[" * 150 + "]" * 150,
        "schema = 1\n" + "a." * 3000 + "b = 1",
        "schema = 1\nx = " + "9" * 5000,
        SMALLEST + "[watch]\nloop_hz = " + "9" * 400,
    ],
)
def test_absurd_sizes_are_refused_like_any_mistake(text: str) -> None:
    assert isinstance(outcome(text), ConfigError)
