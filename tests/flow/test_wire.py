"""Any bytes give a message or a WireError, and a message carries exactly the numbers that were sent."""

from __future__ import annotations

import json
import math
import struct
from typing import Any

import msgpack
import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from monitor.errors import WireError
from monitor.flow.pipeline import MALFORMED
from monitor.flow.wire import (
    MODES,
    SUPPORTS,
    Condition,
    JointSample,
    JointsFormat,
    Payload,
    decode_condition,
    decode_host,
    pack,
    unpack,
)
from monitor.setup.build import Setup
from tests.flow.fuzz import SCALARS, TREES, fuzz
from tests.flow.rig import Rig

NAMES = ("hip", "knee", "toe")
FIXED, FLOATING = JointsFormat(NAMES, floating=False), JointsFormat(NAMES, floating=True, feet=2)
BASE = {"p": [1.0, 2.0, 3.0], "quat": [1.0, 0.0, 0.0, 0.0], "v": [4.0, 5.0, 6.0], "w": [7.0, 8.0, 9.0]}
GOOD: dict[str, Any] = {
    "v": 1, "seq": 7, "t_ns": 99, "q": [0.1, 0.2, 0.3], "qd": [1.0, 2.0, 3.0], "tau": [4.0, 5.0, 6.0],
}  # fmt: skip
CONDITION: dict[str, Any] = {
    "serial": "R-1", "boot": "b", "mode": "work", "drive": [1, 1, 0], "brake": [0, 0, 1], "stop": None,
    "tool": "fork",
    "payload": {"m": 1.5, "c": [0.0, 0.1, 0.2], "I": [[0.01, 0, 0], [0, 0.01, 0], [0, 0, 0.01]]},
    "support": "ground", "program": "turn", "revision": "3",
}  # fmt: skip

any_double = st.floats()  # NaN and infinities are for the signal checks, not for the wire
rows = st.lists(any_double, min_size=3, max_size=3)
as_sent = st.sampled_from(["list", "bin"])


def fields(sample: JointSample) -> dict[str, Any]:
    """Return what the body of a sample holds, by its documented layout: 64-bit numbers, little-endian."""
    numbers = struct.unpack_from("<qq25d", sample.body)
    feet = struct.unpack(f"<{len(sample.body[27 * 8 :]) // 8}q", sample.body[27 * 8 :])
    names = {"q": 3, "qd": 3, "tau": 3, "p": 3, "quat": 4, "v": 3, "w": 3, "tau_cmd": 3}
    found: dict[str, Any] = {"t_ns": numbers[0], "seq": numbers[1]}
    at = 2
    for name, size in names.items():
        found[name] = numbers[at : at + size]
        at += size
    return found | {"feet": feet}


def bits(values: Any) -> bytes:
    return struct.pack(f"<{len(values)}d", *values)


def coded(values: list[float], how: str) -> Any:
    return list(values) if how == "list" else bits(values)


@fuzz
@given(
    seq=st.integers(0, 2**62 - 1),
    t_ns=st.integers(0, 2**62 - 1),
    values=st.tuples(rows, rows, rows, rows),
    how=st.tuples(as_sent, as_sent, as_sent, as_sent),
    order=st.permutations(range(3)),
    named=st.booleans(),
    commanded=st.booleans(),
    floating=st.booleans(),
)
def test_a_message_carries_exactly_the_numbers_that_were_sent_whatever_their_order_and_coding(
    seq: int, t_ns: int, values: Any, how: Any, order: list[int], named: bool, commanded: bool, floating: bool
) -> None:
    message: dict[str, Any] = {"v": 1, "seq": seq, "t_ns": t_ns}
    order = order if named else [0, 1, 2]
    for name, row, coding in zip(("q", "qd", "tau", "tau_cmd"), values, how, strict=True):
        if name != "tau_cmd" or commanded:
            message[name] = coded([row[i] for i in order], coding)
    if named:
        message["names"] = [NAMES[i] for i in order]
    if floating:
        message["base"] = BASE
    sample = (FLOATING if floating else FIXED).decode(msgpack.packb(message))
    found = fields(sample)
    assert (found["seq"], found["t_ns"]) == (sample.seq, sample.t_ns) == (seq, t_ns)
    for name, row in zip(("q", "qd", "tau"), values, strict=False):
        assert bits(found[name]) == bits(row)
    assert (
        all(map(math.isnan, found["tau_cmd"])) if not commanded else bits(found["tau_cmd"]) == bits(values[3])
    )
    for name in ("p", "quat", "v", "w"):
        assert list(found[name]) == (BASE[name] if floating else [0.0] * len(BASE[name]))


@pytest.mark.parametrize("how", ["list", "bin"])
def test_whole_numbers_and_raw_doubles_are_the_same_as_doubles(how: str) -> None:
    whole = GOOD | {"q": [1, 2, -3] if how == "list" else bits([1, 2, -3])}
    assert fields(FIXED.decode(msgpack.packb(whole)))["q"] == (1.0, 2.0, -3.0)


def refused(message: Any, decoder: JointsFormat = FIXED) -> WireError:
    payload = message if isinstance(message, bytes) else msgpack.packb(message)
    with pytest.raises(WireError) as caught:
        decoder.decode(payload)
    assert all((caught.value.where, caught.value.found, caught.value.expected))
    return caught.value


@pytest.mark.parametrize(
    ("change", "kind", "where"),
    [
        ({"v": 2}, "version", "v"),
        ({"v": None}, "version", "v"),
        ({"seq": -1}, "malformed", "seq"),
        ({"seq": 2**62}, "malformed", "seq"),
        ({"seq": 7.0}, "malformed", "seq"),
        ({"seq": True}, "malformed", "seq"),
        ({"t_ns": "99"}, "malformed", "t_ns"),
        ({"t_ns": 2**64 - 1}, "malformed", "t_ns"),
        ({"q": [0.1, 0.2]}, "malformed", "q"),
        ({"q": [0.1, 0.2, 0.3, 0.4]}, "malformed", "q"),
        ({"q": [0.1, 0.2, "0.3"]}, "malformed", "q"),
        ({"q": [0.1, 0.2, True]}, "malformed", "q"),
        ({"q": [0.1, 0.2, [0.3]]}, "malformed", "q"),
        ({"q": [0.1, 0.2, None]}, "malformed", "q"),
        ({"q": {"0": 0.1}}, "malformed", "q"),
        ({"qd": bits([1.0, 2.0])}, "malformed", "qd"),
        ({"qd": bits([1.0, 2.0, 3.0]) + b"\x00"}, "malformed", "qd"),
        ({"qd": "123456781234567812345678"}, "malformed", "qd"),
        ({"tau": None}, "malformed", "tau"),
        ({"tau_cmd": [1.0]}, "malformed", "tau_cmd"),
        ({"tau_link": [1.0]}, "malformed", "tau_link"),
        ({"names": ["hip", "knee"]}, "names", "names"),
        ({"names": ["hip", "knee", "heel"]}, "names", "names"),
        ({"names": ["hip", "knee", "knee"]}, "names", "names"),
        ({"names": ["hip", "knee", "toe", "toe"]}, "names", "names"),
        ({"names": "hip"}, "names", "names"),
        ({"names": ["hip", "knee", 3]}, "names", "names"),
        ({"names": [["hip"], "knee", "toe"]}, "names", "names"),
    ],
)
def test_a_message_that_is_not_as_agreed_is_refused_and_named(
    change: dict[str, Any], kind: str, where: str
) -> None:
    error = refused(GOOD | change)
    assert error.kind == kind
    assert error.where == f"joints {where}"


@pytest.mark.parametrize("name", ["v", "seq", "t_ns", "q", "qd", "tau"])
def test_a_message_without_one_of_its_fields_is_refused(name: str) -> None:
    refused({key: value for key, value in GOOD.items() if key != name})


@pytest.mark.parametrize(
    "base",
    [
        ..., None, [1.0], {}, BASE | {"p": [1.0, 2.0]}, BASE | {"quat": [1.0, 0.0, 0.0]}, BASE | {"w": None},
        BASE | {"v": [1.0, 2.0, "3"]}, BASE | {"v": [1.0, 2.0, True]}, BASE | {"p": bits([1.0, 2.0])},
    ],
)  # fmt: skip
def test_a_floating_robot_without_its_base_is_refused(base: Any) -> None:
    message = GOOD | ({} if base is ... else {"base": base})
    assert refused(message, FLOATING).where.startswith("joints base")


@pytest.mark.parametrize(
    "payload",
    [
        b"", b"\xc1", b"\x93\x01\x02\x03", b"\xc0", b"\x07", msgpack.packb("joints"),
        msgpack.packb(GOOD)[:-1],
        msgpack.packb(GOOD) + b"\x00", b"\x91" * 100_000, b"\x81" + b"\xd4\x05\x00" * 2, b"\x81\x01\x02",
        b"\xdf\xff\xff\xff\xff", b"\xdd\xff\xff\xff\xff", b"\xc6\xff\xff\xff\xff",
        b"\xc9\xff\xff\xff\xff\x01",
        b"\x81\xa1\xff\x01", b"\x81\xa1a\xd4\x05", bytes(2_000_000),
        msgpack.packb({"v": 1, "x": bytes(1 << 20)}),
    ],
)  # fmt: skip
def test_what_is_no_map_or_longer_than_a_mebibyte_is_refused(payload: bytes) -> None:
    refused(payload)
    for decode in (lambda data: decode_condition(data, 3), decode_host, lambda data: unpack(data, "x")):
        with pytest.raises(WireError):
            decode(payload)


def sent_or_refused(payload: bytes) -> None:
    """A decoded sample has to be what an independent reading of the same bytes says."""
    for decoder in (FIXED, FLOATING):
        try:
            sample = decoder.decode(payload)
        except WireError:
            continue
        sent = msgpack.unpackb(payload)
        found = fields(sample)
        order = [list(sent.get("names") or NAMES).index(name) for name in NAMES]
        assert (sent["v"], sent["seq"], sent["t_ns"]) == (1, sample.seq, sample.t_ns)
        for name in ("q", "qd", "tau", "tau_cmd"):
            row = sent.get(name)
            if row is not None:
                row = list(struct.unpack("<3d", row)) if isinstance(row, bytes) else row
                assert bits(found[name]) == bits([float(row[i]) for i in order])
        said = sent.get("feet") if decoder.feet else None
        assert list(found["feet"]) == ([-1] * decoder.feet if said is None else said)[: decoder.feet]


@fuzz
@given(st.binary(max_size=200))
@example(msgpack.packb(GOOD))
def test_any_bytes_are_a_sample_or_a_wire_error(payload: bytes) -> None:
    sent_or_refused(payload)


@fuzz
@given(st.data())
def test_a_good_message_with_bytes_changed_cut_or_added_is_a_sample_or_a_wire_error(
    data: st.DataObject,
) -> None:
    message = GOOD | {"base": BASE, "tau_cmd": bits([1, 2, 3]), "names": list(NAMES), "feet": [0, 1]}
    payload = bytearray(msgpack.packb(message))
    for _ in range(data.draw(st.integers(1, 4))):
        at = data.draw(st.integers(0, max(0, len(payload) - 1)))
        new = data.draw(st.binary(max_size=3))
        payload[at : at + data.draw(st.integers(0, 3))] = new
    sent_or_refused(bytes(payload))


FIELD_NAMES = [*GOOD, "names", "base", "tau_cmd", "tau_link", "feet"]


@fuzz
@given(st.dictionaries(st.sampled_from(FIELD_NAMES), TREES | rows, max_size=4), st.booleans())
@example({"q": [1, 2, 2**64 - 1]}, True)
@example({"names": [None, None, None]}, True)
@example({"base": {"p": {}, "quat": [], "v": 1, "w": None}}, True)
def test_a_message_with_any_structure_in_its_fields_is_a_sample_or_a_wire_error(
    changes: dict[str, Any], based: bool
) -> None:
    sent_or_refused(msgpack.packb(GOOD | ({"base": BASE} if based else {}) | changes))


def test_a_number_that_no_double_can_hold_exactly_is_the_nearest_double() -> None:
    # 2^64 - 1 is what msgpack can say at most; Python's conversion to double is the judge.
    found = fields(FIXED.decode(msgpack.packb(GOOD | {"q": [2**64 - 1, 2**53 + 1, -(2**63)]})))
    assert found["q"] == (float(2**64 - 1), float(2**53 + 1), float(-(2**63)))


def test_many_orders_of_names_are_told_apart_and_memory_stays_bounded() -> None:
    names = tuple("abcdefgh")
    decoder = JointsFormat(names, floating=False)
    rng = np.random.default_rng(1)
    for _ in range(2500):
        order = rng.permutation(8)
        message = {"v": 1, "seq": 1, "t_ns": 1, "names": [names[i] for i in order]}
        message |= {name: [float(i) for i in order] for name in ("q", "qd", "tau")}
        body = decoder.decode(msgpack.packb(message)).body
        assert struct.unpack_from("<8d", body, 16) == tuple(map(float, range(8)))
    assert len(decoder._orders) <= 1001


# --- topic robot ----------------------------------------------------------------------------------


def test_a_condition_says_what_was_sent() -> None:
    assert decode_condition(msgpack.packb(CONDITION), 3) == Condition(
        "R-1", "b", "work", (1, 1, 0), (0, 0, 1), None, "fork",
        Payload(1.5, (0.0, 0.1, 0.2), ((0.01, 0.0, 0.0), (0.0, 0.01, 0.0), (0.0, 0.0, 0.01))), True,
        "ground", "turn", "3",
    )  # fmt: skip


def test_what_a_condition_leaves_out_is_unknown_and_a_payload_of_null_is_none() -> None:
    nothing = decode_condition(msgpack.packb({}), 3)
    assert set(nothing) == {None, False}
    assert not nothing.payload_known
    empty = decode_condition(msgpack.packb({"payload": None}), 3)
    assert empty.payload_known
    assert empty.payload is None


@pytest.mark.parametrize(
    "change",
    [
        {"mode": "sleeping"}, {"support": "water"}, {"serial": 5}, {"boot": ["b"]}, {"drive": [1, 1]},
        {"drive": [1, 1, 2]}, {"drive": [1, 1, "1"]}, {"drive": [1, 1, [1]]}, {"drive": 7},
        {"brake": [0.5, 0, 0]},
        {"brake": [math.nan, 0, 0]}, {"payload": 3.0}, {"payload": {}}, {"payload": {"m": "1"}},
        {"payload": {"m": -1.0}}, {"payload": {"m": math.nan}}, {"payload": {"m": math.inf}},
        {"payload": {"m": True}}, {"payload": {"m": 1.0, "c": [0, 0]}}, {"payload": {"m": 1.0, "c": None}},
        {"payload": {"m": 1.0, "I": [[0, 0, 0]]}}, {"payload": {"m": 1.0, "I": [[0, 0]] * 3}},
        {"payload": {"m": 2**64 - 1}}, {"payload": {"m": 1e300, "c": [1e300, 0.0, 0.0]}},
    ],
)  # fmt: skip
def test_a_condition_that_cannot_be_is_refused(change: dict[str, Any]) -> None:
    with pytest.raises(WireError) as caught:
        decode_condition(msgpack.packb(CONDITION | change), 3)
    assert caught.value.where.startswith(f"robot {next(iter(change))}")


@fuzz
@given(st.dictionaries(st.sampled_from([*CONDITION, "other"]), TREES, max_size=4))
def test_any_structure_is_a_condition_or_a_wire_error(changes: dict[str, Any]) -> None:
    try:
        condition = decode_condition(msgpack.packb(CONDITION | changes), 3)
    except WireError:
        return
    assert condition.mode in (None, *MODES)
    assert condition.support in (None, *SUPPORTS)
    for flags in (condition.drive, condition.brake):
        assert flags is None or (len(flags) == 3 and set(flags) <= {0, 1})


# --- topic host ------------------------------------------------------------------------------------


@fuzz
@given(
    st.dictionaries(
        st.sampled_from(["utc_offset_ns", "utc_uncertainty_ns", "loop", "failed", "text", "recovered"]), TREES
    )
)
def test_any_structure_is_word_of_the_host_or_a_wire_error(message: dict[str, Any]) -> None:
    try:
        host = decode_host(msgpack.packb(message))
    except WireError:
        return
    assert host.utc is None or all(type(x) is int for x in host.utc)
    assert host.failed is None or isinstance(host.failed, str)


# --- the whole path ----------------------------------------------------------------------------------


payloads = st.binary(max_size=60) | TREES.map(msgpack.packb) | st.builds(
    lambda fields, more: msgpack.packb(fields | more),
    st.fixed_dictionaries(
        {
            "v": st.just(1),
            "seq": st.integers(0, 2**62 - 1) | st.integers(0, 20),
            "t_ns": st.integers(0, 2**62 - 1) | st.integers(0, 20_000_000),
            "q": st.lists(any_double, min_size=2, max_size=2),
            "qd": st.lists(any_double, min_size=2, max_size=2),
            "tau": st.lists(any_double, min_size=2, max_size=2),
        }
    ),
    st.dictionaries(st.sampled_from(["boot", "payload", "mode", "drive", "brake", "serial"]), SCALARS),
) | st.builds(
    lambda m, c, boot: msgpack.packb({"payload": {"m": m, "c": [c, c, c]}, "boot": boot}),
    st.floats(), st.floats(), st.text(max_size=1),
)  # fmt: skip
topics = st.sampled_from(["joints", "robot", "host", MALFORMED, "", "camera"])


def is_sample(payload: bytes) -> bool:
    try:
        JointsFormat(("upper", "lower"), floating=False).decode(payload)
    except WireError:
        return False
    return True


@fuzz
@given(st.lists(st.tuples(topics, payloads, st.integers(0, 5_000_000)), max_size=12))
def test_the_data_path_takes_any_topics_and_bytes_and_every_message_is_accounted_for(
    pair_setup: Setup, sent: Any
) -> None:
    rig = Rig(pair_setup)
    for topic, payload, later in sent:
        rig.elapse(later, payload, topic)
    s = rig.state
    joints = [payload for topic, payload, _ in sent if topic == "joints"]
    assert s["received"] == len(joints)
    left = s["bad"].sum() + s["duplicates"] + s["late"] + s["refused"] + len(rig.pipeline._aligner.early)
    assert left == sum(map(is_sample, joints))
    assert s["wire_errors"] >= len(joints) - left
    for message in rig.messages:
        assert msgpack.unpackb(message.payload) == message.body
        json.dumps(message.body, allow_nan=False)
    assert np.isfinite(rig.outputs["r_fast"]).all()
    assert all(s[name] >= 0 for name in ("lost", "stepped", "rebased"))
    again = Rig(pair_setup).pipeline
    again.restore(rig.pipeline.snapshot())
    assert again.snapshot() == rig.pipeline.snapshot()


def test_a_bad_message_is_counted_called_once_and_called_over_after_quiet(pair: Rig) -> None:
    for k in range(50):
        pair.sample([0.0, 0.0], [0.0, 0.0], [0.0, 0.0])
        if k < 20:
            pair.elapse(1000, b"\xc1")
            pair.elapse(1000, pack(GOOD | {"v": 9}))
    assert pair.state["wire_errors"] == 40
    assert pair.standing() == {("wire", "malformed", None), ("wire", "version", None)}
    assert [body["priority"] for body in pair.alarms("wire")] == ["medium", "medium"]
    assert all("found" in body["text"] and body["verdict"] == "signal" for body in pair.alarms("wire"))
    pair.elapse(5_100_000_000)
    assert not {key for key in pair.standing() if key[0] == "wire"}


def test_joints_of_another_robot_are_refused_with_an_alarm_and_never_stepped(pair: Rig) -> None:
    for _ in range(5):
        pair.sample([0.0, 0.0], [0.0, 0.0], [0.0, 0.0])
    stepped = int(pair.state["stepped"])
    pair.sample([1.0, 1.0], [0.0, 0.0], [0.0, 0.0], names=["upper", "elbow"])
    assert pair.state["stepped"] == stepped
    (alarm,) = pair.alarms("wire")
    assert (alarm["detail"], "elbow" in alarm["text"]) == ("names", True)


@pytest.mark.parametrize("depth", [10, 400, 900, 1000, 1020, 1023, 1100])
@pytest.mark.parametrize("field", ["v", "seq", "t_ns", "q", "names", "tau_cmd", "tau_link"])
def test_a_message_nested_as_deep_as_it_goes_is_a_wire_error(field: str, depth: int) -> None:
    packed = msgpack.packb({name: value for name, value in GOOD.items() if name != field})
    nested = bytes([packed[0] + 1]) + packed[1:] + msgpack.packb(field) + b"\x91" * depth + b"\x90"
    with pytest.raises(WireError) as caught:
        FIXED.decode(nested)
    assert len(str(caught.value)) < 500


@pytest.mark.parametrize("field", ["mode", "support", "serial", "payload", "drive"])
def test_a_condition_that_is_endless_is_told_in_a_few_words(field: str) -> None:
    for value in ("x" * 900_000, [[1] * 1000] * 50):
        said = ""
        try:
            decode_condition(msgpack.packb({field: value}), 3)
        except WireError as error:
            said = str(error)
        assert len(said) < 500


def test_feet_count_only_where_the_configuration_has_any() -> None:
    assert FIXED.decode(msgpack.packb(GOOD | {"feet": [1, 1, 1]})).seq == 7
    for feet in ([1], [1, 2], "11"):
        with pytest.raises(WireError, match="joints feet"):
            FLOATING.decode(msgpack.packb(GOOD | {"base": BASE, "feet": feet}))


def test_link_torques_of_joints_with_a_sensor_come_last_in_the_configured_order() -> None:
    decoder = JointsFormat(NAMES, floating=False, link_torque=(0, 2))
    sent = GOOD | {"names": ["toe", "hip", "knee"], "tau_link": [1.0, 2.0, 3.0]}
    assert struct.unpack("<2d", decoder.decode(msgpack.packb(sent)).body[-16:]) == (2.0, 1.0)
    without = decoder.decode(msgpack.packb(GOOD)).body
    assert np.isnan(struct.unpack("<2d", without[-16:])).all()
    assert len(without) == len(FIXED.decode(msgpack.packb(GOOD)).body) + 16
    assert not decoder.ignores_link_torque


@pytest.mark.parametrize(
    ("said", "held"), [({"feet": [0, 1]}, (0, 1)), ({"feet": None}, (-1, -1)), ({}, (-1, -1))]
)
def test_planned_feet_come_with_the_sample_and_are_unknown_where_not_sent(
    said: dict[str, Any], held: tuple[int, int]
) -> None:
    assert fields(FLOATING.decode(msgpack.packb(GOOD | {"base": BASE} | said)))["feet"] == held
