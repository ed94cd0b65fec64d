"""The publisher on the robot's side, against public readers: pyzmq receives, msgpack-python decodes."""

from __future__ import annotations

import importlib.util
import itertools
import math
import random
import struct
import subprocess
from collections.abc import Callable
from pathlib import Path
from types import ModuleType
from typing import Any

import msgpack
import pytest
import zmq

from tests.publisher.build import (
    PUBLISHER,
    Message,
    compile_example,
    doubles,
    finish,
    only,
    receive,
    receive_until_exit,
    require,
    start_example,
    subscriber,
)

pytestmark = pytest.mark.compiler
Compiled = Callable[[str], Path]
Start = Callable[..., "subprocess.Popen[str]"]

# Bit patterns of IEEE 754 binary64 that a conversion through text or arithmetic would lose.
SPECIAL = [
    0x8000000000000000,  # minus zero
    0x0000000000000001,  # least subnormal
    0x7FEFFFFFFFFFFFFF,  # largest finite
    0x3FF0000000000001,  # next after one
    0x7FF0000000000000,  # infinity
    0xFFF8DEADBEEF1234,  # NaN with a payload
]


def random_words(n: int) -> list[int]:
    """Random 64-bit patterns, the special ones first."""
    draw = random.Random(n)
    return [*SPECIAL, *(draw.getrandbits(64) for _ in range(n))][:n]


def packed(words: list[int]) -> bytes:
    """What the wire must carry: the patterns, least byte first."""
    return struct.pack(f"<{len(words)}Q", *words)


def say(process: subprocess.Popen[str], *words: object) -> None:
    """Write one line to a driver."""
    assert process.stdin is not None
    print(*words, file=process.stdin, flush=True)


def sample_line(t_ns: int, words: list[int], flags: str = "0 0 0 0", feet: tuple[int, ...] = ()) -> str:
    """A `sample` line of the echo driver."""
    return f"sample {t_ns} {flags} " + " ".join([*(f"{word:x}" for word in words), *map(str, feet)])


def echo(
    compiled: Compiled, start: Start, endpoint: str, lines: list[str], *sizes: int, lockstep: bool = False
) -> list[Message]:
    """Messages that the echo driver sends for `lines`; in lockstep each sample is awaited before the next.

    The driver's first condition tells that the subscription stands; no line is written before it.
    """
    with subscriber(endpoint) as socket:
        process = start(compiled("echo"), endpoint, *sizes)
        first = receive(socket)
        assert first[0] == "robot"
        assert first[1]["program"] == "ready"
        messages: list[Message] = []
        for number, line in enumerate(lines, 1):
            say(process, line)
            while lockstep and len(only("joints", messages)) < number:
                messages.append(receive(socket))
        assert process.stdin is not None
        process.stdin.close()
        messages += receive_until_exit(socket, process)
        assert process.wait() == 0
        return messages


@pytest.mark.parametrize("joints", [1, 7, 40])
@pytest.mark.parametrize("name_length", [0, 3, 40])
def test_every_field_of_a_sample_arrives_right_to_the_bit(
    compiled: Compiled, start: Start, endpoint: str, joints: int, name_length: int
) -> None:
    words = random_words(5 * joints + 13)
    feet = (1, 0, 0, 1)
    line = sample_line(2**63 - 1, words, "1 1 1 1", feet)
    (sample,) = only("joints", echo(compiled, start, endpoint, [line], joints, len(feet), name_length))
    rows = [words[i * joints : (i + 1) * joints] for i in range(5)]
    for key, row in zip(["q", "qd", "tau", "tau_cmd", "tau_link"], rows, strict=True):
        assert sample.pop(key) == packed(row)
    base = [value for key in ("p", "quat", "v", "w") for value in sample["base"].pop(key)]
    assert struct.pack("<13d", *base) == packed(words[5 * joints :])
    assert sample.pop("base") == {}
    names = [f"{joint}{'_' * name_length}" for joint in range(joints)]
    assert sample.pop("names", None) == (names if name_length else None)
    assert sample == {"v": 1, "seq": 0, "t_ns": 2**63 - 1, "drops": 0, "feet": list(feet)}


def test_what_is_not_given_is_not_sent(compiled: Compiled, start: Start, endpoint: str) -> None:
    words = random_words(3 * 2)
    lines = [sample_line(-(2**63), words)]
    (sample,) = only("joints", echo(compiled, start, endpoint, lines, 2, 4, 0))
    assert set(sample) == {"v", "seq", "t_ns", "q", "qd", "tau", "drops"}
    assert sample["t_ns"] == -(2**63)


def test_an_earlier_sample_leaves_nothing_in_a_later_one(
    compiled: Compiled, start: Start, endpoint: str
) -> None:
    full = sample_line(1, random_words(5 * 2 + 13), "1 1 1 1", (1, 1))
    bare = sample_line(2, random_words(3 * 2))
    more_than_the_ring_holds = 70
    lines = [full, *[bare] * more_than_the_ring_holds]
    samples = only("joints", echo(compiled, start, endpoint, lines, 2, 2, 0, lockstep=True))
    assert [sample["seq"] for sample in samples] == list(range(71))
    assert all(set(sample) == {"v", "seq", "t_ns", "q", "qd", "tau", "drops"} for sample in samples[1:])


def test_a_message_beyond_64_kib_decodes(compiled: Compiled, start: Start, endpoint: str) -> None:
    joints = 9000
    words = random_words(3 * joints)
    (sample,) = only("joints", echo(compiled, start, endpoint, [sample_line(0, words)], joints, 0, 1))
    assert sample["q"] + sample["qd"] + sample["tau"] == packed(words)
    assert len(sample["names"]) == joints


def test_the_condition_carries_every_key_of_the_wire(compiled: Compiled, start: Start, endpoint: str) -> None:
    condition = only("robot", echo(compiled, start, endpoint, ["condition full"], 2, 0, 0))[-1]
    boot = condition.pop("boot")
    assert len(boot) == 16
    assert int(boot, 16) >= 0
    assert condition == {
        "serial": "terrace-02",
        "mode": "guided",
        "drive": [1, 0],
        "brake": [0, 1],
        "stop": "gate open",
        "tool": "wheel-gripper",
        "payload": {
            "m": 2.5,
            "c": [0.01, -0.02, 0.125],
            "I": [[1.0, 2.0, 3.0], [4.0, 5.0, 6.0], [7.0, 8.0, 9.0]],
        },
        "support": "hoisted",
        "program": "turn-wheels",
        "revision": "9c1",
    }


def test_none_is_told_apart_from_unknown(compiled: Compiled, start: Start, endpoint: str) -> None:
    condition = only("robot", echo(compiled, start, endpoint, ["condition nothing-held"], 2, 0, 0))[-1]
    del condition["boot"]
    assert condition == {"stop": None, "tool": None, "payload": None}


def test_each_power_up_has_another_boot_id(compiled: Compiled, start: Start, endpoint: str) -> None:
    boots = [only("robot", echo(compiled, start, endpoint, ["condition a"], 1, 0, 0))[-1] for _ in range(2)]
    assert boots[0]["boot"] != boots[1]["boot"]


def test_a_condition_never_arrives_after_a_sample_published_later(
    compiled: Compiled, start: Start, endpoint: str
) -> None:
    sample = sample_line(0, random_words(3))
    lines = [line for k in range(30) for line in (f"condition {k}", sample)]
    program = -1
    samples = 0
    for topic, fields in echo(compiled, start, endpoint, lines, 1, 0, 0):
        if topic == "robot":
            program = int(fields["program"])
        else:
            assert program >= fields["seq"]
            samples += 1
    assert samples == 30


@pytest.mark.parametrize("rate_hz", [125, 250, 500, 1000])
def test_the_example_loses_nothing_at_control_rates(compiled: Compiled, endpoint: str, rate_hz: int) -> None:
    with subscriber(endpoint) as socket:
        process = start_example(compiled("example"), endpoint, rate_hz, 2, 7)
        samples = only("joints", receive_until_exit(socket, process))
        report = finish(process)
    assert report["published"] == 2 * rate_hz
    assert report["dropped"] == 0
    assert [sample["seq"] for sample in samples] == list(range(samples[0]["seq"], 2 * rate_hz))
    assert len(samples) > rate_hz  # only what went before the subscription stood may be missing
    t_ns = [sample["t_ns"] for sample in samples]
    assert t_ns == sorted(set(t_ns))
    assert (t_ns[-1] - t_ns[0]) / (len(t_ns) - 1) == pytest.approx(1e9 / rate_hz, rel=0.05)


def test_the_example_moves_as_the_closed_form_says(compiled: Compiled, endpoint: str) -> None:
    with subscriber(endpoint) as socket:
        process = start_example(compiled("example"), endpoint, 250, 1, 3)
        samples = only("joints", receive_until_exit(socket, process))
        finish(process)
    omega = math.pi
    for sample in samples:
        for q, qd, tau in zip(*(doubles(sample[key]) for key in ("q", "qd", "tau")), strict=True):
            # sin² + cos² = 1, and torque in phase with position
            assert (q / 0.3) ** 2 + (qd / (0.3 * omega)) ** 2 == pytest.approx(1, abs=1e-12)
            assert tau == pytest.approx(2.0 * q / 0.3, abs=1e-12)


def test_the_condition_comes_at_least_once_a_second_and_on_change(compiled: Compiled, endpoint: str) -> None:
    with subscriber(endpoint) as socket:
        process = start_example(compiled("example"), endpoint, 250, 3, 7)
        messages = receive_until_exit(socket, process)
        finish(process)
    t_ns = since_ns = 0  # robot clock of the last sample, and of the last condition
    for topic, fields in messages:
        if topic == "robot":
            since_ns = t_ns
        else:
            t_ns = fields["t_ns"]
            since_ns = since_ns or t_ns
            assert t_ns - since_ns < 1_000_000_000
    programs = [fields["program"] for fields in only("robot", messages)]
    assert [program for program, _ in itertools.groupby(programs)][:2] == ["turn-wheels", "brush-wheels"]
    assert len(programs) >= 6  # in 3 s, twice a second


def losses(compiled: Compiled, start: Start, endpoint: str, mode: str) -> tuple[list[dict[str, Any]], int]:
    """Samples received from the losses driver, and its count of drops."""
    with subscriber(endpoint) as socket:
        process = start(compiled("losses"), endpoint, mode)
        assert receive(socket)[1]["program"] == "ready"
        say(process)
        samples = only("joints", receive_until_exit(socket, process))
        assert process.stdout is not None
        return samples, int(process.stdout.read())


def test_samples_that_find_the_ring_full_are_counted_and_seen_as_a_gap(
    compiled: Compiled, start: Start, endpoint: str
) -> None:
    samples, dropped = losses(compiled, start, endpoint, "stall")
    assert dropped == 5
    assert [(sample["seq"], sample["drops"]) for sample in samples] == [
        *((seq, 0) for seq in range(9)),
        (14, 5),
    ]


def test_samples_that_zeromq_refuses_are_counted_and_seen_as_gaps(
    compiled: Compiled, start: Start, endpoint: str
) -> None:
    samples, dropped = losses(compiled, start, endpoint, "refuse")
    assert dropped == 10
    kept = [seq for seq in range(30) if seq % 3 != 2]
    assert [(sample["seq"], sample["drops"]) for sample in samples] == [(seq, seq // 3) for seq in kept]


def test_a_signal_during_sending_loses_nothing(compiled: Compiled, start: Start, endpoint: str) -> None:
    samples, dropped = losses(compiled, start, endpoint, "interrupt")
    assert dropped == 0
    assert [sample["seq"] for sample in samples] == list(range(30))


def test_a_burst_overflows_the_ring_and_says_so(compiled: Compiled, endpoint: str) -> None:
    with subscriber(endpoint) as socket:
        process = start_example(compiled("example"), endpoint, 1000, 200, 7, burst=True)
        samples = only("joints", receive_until_exit(socket, process))
        report = finish(process)
    assert report["dropped"] > 0
    assert report["published"] + report["dropped"] == 200_000
    for earlier, later in itertools.pairwise(samples):
        # Beyond the ring, ZeroMQ itself may drop for a slow subscriber: a gap without a rise.
        assert 0 <= later["drops"] - earlier["drops"] <= later["seq"] - earlier["seq"] - 1
    assert 0 < samples[-1]["drops"] <= report["dropped"]


def test_publish_allocates_nothing(compiled: Compiled, endpoint: str) -> None:
    done = subprocess.run(
        [compiled("realtime"), endpoint, "allocations"], capture_output=True, text=True, check=True
    )
    by_publish, by_one_new, accepted, dropped = map(int, done.stdout.split())
    assert by_one_new == 1  # the counter works
    assert by_publish == 0
    assert accepted > 0
    assert dropped > 0
    assert accepted + dropped == 100_000


def test_publish_makes_no_system_call(compiled: Compiled, endpoint: str) -> None:
    program = compiled("realtime")
    control = subprocess.run([program, endpoint, "forbidden-syscall"], capture_output=True, check=False)
    require(control.returncode != 77, "this kernel does not let a process restrict its system calls")
    assert control.returncode < 0  # killed: the trap works
    done = subprocess.run([program, endpoint, "syscalls"], capture_output=True, text=True, check=True)
    assert done.stdout == "returned\n"


def test_impossible_sizes_and_endpoints_are_refused_by_name(compiled: Compiled, endpoint: str) -> None:
    done = subprocess.run([compiled("refusals"), endpoint], capture_output=True, text=True, check=True)
    expected = [
        "no joints",
        "ring_capacity 0",
        "3 names; expected none or 2",
        "cannot bind to nonsense",
        "drive or brake",
    ]
    for line, words in zip(done.stdout.splitlines(), expected, strict=True):
        assert words in line


def test_an_endpoint_in_use_ends_the_example_with_its_name(compiled: Compiled) -> None:
    with zmq.Context() as context, context.socket(zmq.PUB) as taken:
        port = taken.bind_to_random_port("tcp://127.0.0.1")
        command: list[str | Path] = [compiled("example"), f"tcp://127.0.0.1:{port}", "100", "1", "1"]
        done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 1
    assert f"cannot bind to tcp://127.0.0.1:{port}" in done.stderr


RACE = """
#include <thread>
int shared = 0;
int main() {
    std::thread other([] { for (int k = 0; k < 1000; ++k) ++shared; });
    for (int k = 0; k < 1000; ++k) ++shared;
    other.join();
}
"""


def test_the_thread_sanitizer_finds_no_race(compiled: Compiled, tmp_path: Path, endpoint: str) -> None:
    compiled("example")  # skips where nothing can be compiled
    source = tmp_path / "race.cpp"
    source.write_text(RACE)
    command: list[str | Path] = [
        "g++",
        "-std=c++17",
        "-fsanitize=thread",
        "-pthread",
        source,
        "-o",
        tmp_path / "race",
    ]
    built = subprocess.run(command, capture_output=True, check=False)
    require(built.returncode == 0, "this g++ has no thread sanitizer")
    race = subprocess.run([tmp_path / "race"], capture_output=True, text=True, check=False)
    require("data race" in race.stderr, "the thread sanitizer does not run here")
    program = compile_example(tmp_path, "-fsanitize=thread", "-g")
    # libzmq is not instrumented, so its own synchronisation is invisible; our header's accesses stay watched.
    (tmp_path / "suppressions").write_text("called_from_lib:libzmq.so\n")
    env = {"TSAN_OPTIONS": f"suppressions={tmp_path}/suppressions exitcode=66"}
    for burst in (False, True):
        with subscriber(endpoint) as socket:
            process = start_example(program, endpoint, 1000, 1.5, 7, burst=burst, env=env)
            samples = only("joints", receive_until_exit(socket, process))
            report = finish(process)  # fails on any finding, by exit code
        assert samples
        assert report["published"] > 0


def publisher_module() -> ModuleType:
    """The Python example as a module."""
    spec = importlib.util.spec_from_file_location("publisher_example", PUBLISHER / "publisher.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def plain(sample: dict[str, Any]) -> dict[str, Any]:
    """A sample with its arrays as lists, whichever of the two forms they came in."""
    return {key: doubles(value) if isinstance(value, bytes) else value for key, value in sample.items()}


def test_the_python_publisher_sends_the_same_sample(compiled: Compiled, start: Start, endpoint: str) -> None:
    rows = [[0.1, -2.5], [1e-9, 3.0], [7.25, -0.0]]
    words = [struct.unpack("<Q", struct.pack("<d", value))[0] for row in rows for value in row]
    (sample,) = only("joints", echo(compiled, start, endpoint, [sample_line(5, words)], 2, 0, 0))
    with zmq.Context() as context, context.socket(zmq.PAIR) as ours, context.socket(zmq.PAIR) as other:
        ours.bind("inproc://pair")
        other.connect("inproc://pair")
        q, qd, tau = rows
        publisher_module().publish(ours, b"joints", v=1, seq=0, t_ns=5, q=q, qd=qd, tau=tau)
        topic, payload = other.recv_multipart()
    assert topic == b"joints"
    assert plain(msgpack.unpackb(payload)) | {"drops": 0} == plain(sample)
