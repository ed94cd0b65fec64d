"""The calibration file: what is written is read again, and whatever is wrong with one is said."""

from __future__ import annotations

import json
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
import tomlkit
from hypothesis import given
from hypothesis import strategies as st

from monitor.errors import ConfigError
from monitor.kernels.band import CAUSES, CRAWLS, CREEPS, FLOOR, STANDS, STANDS_SQUARED, VELOCITY
from monitor.kernels.ledger import BENDS
from monitor.robot.pseudo_inertia import flaw
from monitor.setup.build import Setup, build
from monitor.setup.calibration import (
    Band,
    Calibration,
    Model,
    calibration_text,
    default_band,
    read_calibration,
    taken_apart,
)
from monitor.setup.config import Config, loads
from tests.flow.rig import PAIR, PAIR_JOINTS, SLED, SLED_JOINTS

WHERE = "rind.calibration.json"


def config(
    urdf: str = PAIR,
    joints: list[dict[str, Any]] = PAIR_JOINTS,
    calibration: str | None = None,
    **robot: object,
) -> Config:
    named = {} if calibration is None else {"calibration": WHERE}
    document = {"schema": 1, "robot": {"urdf": "r.urdf", **named, **robot, "joint": joints}}
    files = {"r.urdf": urdf} if calibration is None else {"r.urdf": urdf, WHERE: calibration}
    return loads(tomlkit.dumps(document), "robot.toml", files)


def drawn(setup: Setup, seed: int = 1) -> Calibration:
    """A calibration with a different number in every place."""
    rng = np.random.default_rng(seed)
    n, base = setup.sizes.n, setup.sizes.base
    E = setup.model.E * rng.uniform(0.9, 1.1, (len(setup.model.E), 1, 1))
    friction = rng.uniform(0.1, 1.0, (4, n))
    friction[:, :base] = 0.0
    half = 0.2 * rng.normal(size=(n, n))
    rho = half @ half.T + np.eye(n)
    rho /= np.sqrt(np.outer(np.diag(rho), np.diag(rho)))
    rho = 0.5 * (rho + rho.T)
    np.fill_diagonal(rho, 1.0)
    band = Band(
        fast=rng.uniform(0.1, 1.0, (n, CAUSES)),
        slow=rng.uniform(0.1, 1.0, (n, CAUSES)),
        rho=rho,
        slow_share=rng.uniform(0.1, 0.9, n),
        track_sd=rng.uniform(0.1, 1.0, (n, 3)),
        row_limit=7.25,
        slow_limit=8.5,
        body_limit=61.5,
        cusum_sd=rng.uniform(0.1, 1.0, n),
        cusum_limit=13.75,
        slow_body_limit=55.25,
        foot_limit=41.5,
    )
    bend = rng.normal(0.0, 0.3, (n, BENDS))
    return Calibration(Model(E, *friction, bend), band, {"sessions": ["ab12"], "date": "2031-05-04"})


def text_of(document: Any) -> str:
    return json.dumps(document)


@pytest.fixture(scope="module")
def plain() -> Setup:
    return build(config())


@pytest.fixture(scope="module")
def document(plain: Setup) -> dict[str, Any]:
    read: dict[str, Any] = json.loads(calibration_text(drawn(plain), plain.tree, plain.config))
    return read


@pytest.mark.parametrize("walks", [False, True])
def test_what_is_written_is_read_again_to_the_last_bit(walks: bool) -> None:
    setup = build(config(SLED, SLED_JOINTS, base="floating") if walks else config())
    wanted = drawn(setup)
    found = read_calibration(
        calibration_text(wanted, setup.tree, setup.config), WHERE, setup.tree, setup.config
    )
    for one, other in zip(wanted.model, found.model, strict=True):
        np.testing.assert_array_equal(one, other)
    for name, value in vars(wanted.band).items():
        np.testing.assert_array_equal(value, getattr(found.band, name), err_msg=name)
    assert found.provenance == {"sessions": ("ab12",), "date": "2031-05-04"}


def test_a_configuration_that_names_a_calibration_is_built_with_it(plain: Setup) -> None:
    calibration = drawn(plain)
    text = calibration_text(calibration, plain.tree, plain.config)
    setup = build(config(calibration=text))
    np.testing.assert_array_equal(setup.blocks().inputs["E"][0], calibration.model.E)
    for name, value in (
        ("armature", calibration.model.armature),
        ("viscous", calibration.model.viscous),
        ("coulomb", calibration.model.coulomb),
        ("friction_offset", calibration.model.offset),
        ("bend", calibration.model.bend),
        ("cause_fast", calibration.band.fast),
        ("cause_slow", calibration.band.slow),
        ("rho", calibration.band.rho),
        ("row_limit", calibration.band.row_limit),
        ("body_limit", calibration.band.body_limit),
        ("cusum_limit", calibration.band.cusum_limit),
    ):
        np.testing.assert_array_equal(setup.params[0][name], value, err_msg=name)
    other = drawn(plain, 2)
    np.testing.assert_array_equal(build(config(calibration=text), other).model.E, other.model.E)


def test_an_error_of_the_calibration_names_its_file(plain: Setup) -> None:
    with pytest.raises(ConfigError) as caught:
        build(config(calibration="{}"))
    assert caught.value.where == f"{WHERE}: schema"


def _set(*path: Any, to: Any) -> Callable[[Any], None]:
    def change(document: Any) -> None:
        for part in path[:-1]:
            document = document[part]
        document[path[-1]] = to

    return change


def _drop(*path: Any) -> Callable[[Any], None]:
    def change(document: Any) -> None:
        for part in path[:-1]:
            document = document[part]
        del document[path[-1]]

    return change


# What is changed in a good file, then the place, what was found and what was expected.
MISTAKES: dict[str, tuple[Callable[[Any], None], str, str, str]] = {
    "no schema": (_drop("schema"), "schema", "null", "1"),
    "newer": (_set("schema", to=2), "schema", "2", "1"),
    "schema true": (_set("schema", to=True), "schema", "true", "1"),
    "other joints": (_set("joints", to=["lower", "upper"]), "joints", '["lower", "upper"]', '"upper"'),
    "joints of text": (_set("joints", to="upper"), "joints", '"upper"', "an array"),
    "unknown key": (_set("extra", to=1), "extra", "an unknown key", "a key"),
    "unknown cause": (_set("band", "medium", to=1), "band.medium", "an unknown key", "a key"),
    "no model": (_drop("model"), "model", "nothing", "Inertia and friction"),
    "no rho": (_drop("band", "rho"), "band.rho", "nothing", "Correlation"),
    "model of text": (_set("model", to="good"), "model", '"good"', "a table"),
    "text for number": (_set("model", "viscous", 1, to="1"), "model.viscous[1]", '"1"', "a valid number"),
    "null": (_set("model", "viscous", 1, to=None), "model.viscous[1]", "null", "a valid number"),
    "not a number": (_set("model", "offset", 0, to=float("nan")), "model.offset[0]", "NaN", "finite"),
    "infinite": (_set("band", "row_limit", to=float("inf")), "band.row_limit", "Infinity", "finite"),
    "huge": (_set("model", "offset", 0, to=10**400), "model.offset[0]", "1000", "number"),
    "short row": (_set("model", "armature", to=[0.1]), "model.armature", "shape (1,)", "shape (2,)"),
    "short bend": (_set("model", "bend", to=[[0.1], [0.2]]), "model.bend", "shape (2, 1)", "shape (2, 2)"),
    "ragged": (_set("band", "fast", 0, to=[1.0]), "band.fast", "different lengths", f"shape (2, {CAUSES})"),
    "flat E": (_set("model", "E", 0, to=[[1.0]]), "model.E", "different lengths", "shape (2, 4, 4)"),
    "negative friction": (_set("model", "coulomb", 0, to=-0.1), "model.coulomb", "-0.1", "no negative"),
    "negative rotor": (_set("model", "armature", 1, to=-2.0), "model.armature", "-2", "no negative"),
    "negative mass": (_set("model", "E", 0, 3, 3, to=-1.0), "model.E[0]", "mass -1 kg", "a real body"),
    "impossible body": (_set("model", "E", 1, 0, 0, to=-0.5), "model.E[1]", "moments", "a real body"),
    "lopsided E": (_set("model", "E", 1, 0, 1, to=0.5), "model.E[1]", "not symmetric", "symmetric"),
    "negative weight": (_set("band", "slow", 0, 3, to=-1e-9), "band.slow", "-1e-09", "no negative"),
    "no floor": (_set("band", "fast", 1, FLOOR, to=0), "band.fast: floor", "0", "above 0"),
    "no slow floor": (_set("band", "slow", 1, FLOOR, to=0), "band.slow: floor", "0", "above 0"),
    "no lasting error": (_set("band", "cusum_sd", 1, to=0), "band.cusum_sd", "0", "above 0"),
    "all slow": (_set("band", "slow_share", 1, to=1.0), "band.slow_share", "1.0", "less than 1"),
    "no limit": (_set("band", "body_limit", to=0), "band.body_limit", "0", "greater than 0"),
    "lopsided rho": (_set("band", "rho", 0, 1, to=0.9), "band.rho", "asymmetry", "correlation matrix"),
    "diagonal of rho": (_set("band", "rho", 0, 0, to=1.5), "band.rho", "1.5", "correlation matrix"),
    "rho of one": (_set("band", "rho", to=[[1, 1], [1, 1]]), "band.rho", "eigenvalue", "positive definite"),
    "another description": (
        _set("made_for", "robot.urdf (SHA-256)", to="00"),
        "made_for: robot.urdf (SHA-256)", '"00"', "as it is",
    ),
    "another sign": (
        _set("made_for", "robot.joint 'upper'.sign", to=-1),
        "made_for: robot.joint 'upper'.sign", "-1", "1, as",
    ),
    "another rate": (_set("made_for", "input.rate_hz", to=500), "made_for: input.rate_hz", "500", "1000.0"),
    "made for nothing": (_set("made_for", to={}), "made_for: robot.urdf (SHA-256)", "null", "as it is now"),
    "made for more": (_set("made_for", "robot.moon", to=1), "made_for: robot.moon", "1", "null"),
}  # fmt: skip


@pytest.mark.parametrize("name", MISTAKES)
def test_a_mistake_is_named_by_place_found_and_expected(
    plain: Setup, document: dict[str, Any], name: str
) -> None:
    change, where, found, expected = MISTAKES[name]
    copy = json.loads(json.dumps(document))
    change(copy)
    with pytest.raises(ConfigError) as caught:
        read_calibration(text_of(copy), WHERE, plain.tree, plain.config)
    assert caught.value.where == f"{WHERE}: {where}"
    assert found in caught.value.found
    assert expected in caught.value.expected


@pytest.mark.parametrize("text", ["", "{", "[]", "3", "[" * 100_000, '{"schema": 1, "model": ' * 2000])
def test_what_is_no_calibration_at_all_is_refused(plain: Setup, text: str) -> None:
    with pytest.raises(ConfigError) as caught:
        read_calibration(text, WHERE, plain.tree, plain.config)
    assert caught.value.where == WHERE


@pytest.mark.parametrize(
    ("key", "value"),
    [("sign", -1), ("zero_offset", 0.1), ("friction_velocity", 0.01), ("torque_delay_s", 0.002)],
)
def test_a_changed_configuration_is_not_watched_with_the_old_calibration(
    plain: Setup, key: str, value: float
) -> None:
    text = calibration_text(drawn(plain), plain.tree, plain.config)
    changed = [PAIR_JOINTS[0], PAIR_JOINTS[1] | {key: value}]
    with pytest.raises(ConfigError) as caught:
        build(config(joints=changed, calibration=text))
    assert caught.value.where == f"{WHERE}: made_for: robot.joint 'lower'.{key}"
    assert caught.value.expected == f"{value}, as it is now"


def test_what_does_not_touch_the_model_may_change(plain: Setup) -> None:
    text = calibration_text(drawn(plain), plain.tree, plain.config)
    joints = [PAIR_JOINTS[0] | {"rated_torque": 50.0}, PAIR_JOINTS[1] | {"coulomb_friction": 9.0}]
    setup = build(config(joints=joints, calibration=text, name="another name"))
    np.testing.assert_array_equal(setup.model.coulomb, drawn(plain).model.coulomb)


def test_a_body_that_is_none_in_the_description_stays_as_it_is_there() -> None:
    """A floating base has five axes without mass; a point of mass is no real body either."""
    setup = build(config(SLED, SLED_JOINTS, base="floating"))
    assert [bool(flaw(E)) for E in setup.model.E[:5]] == 5 * [True]
    document = json.loads(calibration_text(drawn(setup), setup.tree, setup.config))
    document["model"]["E"][2][3][3] = 0.5
    with pytest.raises(ConfigError) as caught:
        read_calibration(text_of(document), WHERE, setup.tree, setup.config)
    assert caught.value.where == f"{WHERE}: model.E[2]"


PARTS = [
    ("schema",), ("robot",), ("joints",), ("made_for",), ("provenance",), ("model",), ("band",),
    ("model", "E"), ("model", "E", 1), ("model", "E", 1, 2), ("model", "viscous"), ("band", "fast"),
    ("band", "fast", 0), ("band", "rho"), ("band", "row_limit"), ("band", "cusum_sd", 0),
]  # fmt: skip
JUNK = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=5),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=3), inner, max_size=3),
    max_leaves=8,
)


@given(st.sampled_from(PARTS), JUNK)
def test_any_value_in_any_place_gives_a_calibration_or_a_config_error(
    plain: Setup, document: dict[str, Any], path: tuple[Any, ...], value: Any
) -> None:
    copy = json.loads(json.dumps(document))
    _set(*path, to=value)(copy)
    try:
        found = read_calibration(text_of(copy), WHERE, plain.tree, plain.config)
    except ConfigError:
        return
    assert np.isfinite(found.band.row_limit)


def test_a_band_taken_apart_has_friction_at_the_motor_and_the_sensor_at_both_sides() -> None:
    rated, coulomb, viscous = np.array([40.0, 20.0]), np.array([2.0, 1.0]), np.array([1.5, 0.6])
    whole, noise = default_band(rated, coulomb, viscous), np.array([0.3])
    band = taken_apart(whole, [1], noise)
    friction = [STANDS, STANDS_SQUARED, VELOCITY, CREEPS, CRAWLS]
    assert band.fast.shape == band.slow.shape == (3, CAUSES)
    np.testing.assert_array_equal(band.fast[0], whole.fast[0])
    assert not band.fast[1, friction].any()
    np.testing.assert_array_equal(band.fast[2, friction], whole.fast[1, friction])
    np.testing.assert_array_equal(band.track_sd, [whole.track_sd[0], np.zeros(3), whole.track_sd[1]])
    # What is left of the two rows while the joint moves without load, by hand: [[l + s, -s], [-s, l + s]].
    sd = np.sqrt(band.fast[1:, FLOOR])
    side, sensor = whole.fast[1, FLOOR], 0.09
    both = side + sensor
    np.testing.assert_allclose(band.rho[1:, 1:] * np.outer(sd, sd), [[both, -sensor], [-sensor, both]])
    assert taken_apart(whole, [], np.zeros(0)) is whole
