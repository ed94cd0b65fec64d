"""What keeps the daemon from starting is said in one line, with exit code 2, and leaves nothing behind."""

from __future__ import annotations

import socket
from pathlib import Path

import pytest
import zmq

from replay.demo import free_ports
from tests.daemon.conftest import Start
from tests.daemon.running import Daemon, configure
from tests.replay.rind import write_rind


def check_refused(daemon: Daemon, *words: str) -> None:
    assert daemon.wait() == 2
    (line,) = daemon.complaints.splitlines()
    for word in words:
        assert word in line
    daemon.check_nothing_is_left()


def test_an_output_address_in_use_is_named_with_its_key(start: Start) -> None:
    (port,) = free_ports(1)
    address = f"tcp://127.0.0.1:{port}"
    with zmq.Context() as context, context.socket(zmq.PUB) as other:
        other.bind(address)
        check_refused(start({"output.address": address}), address, "output.address", "in use")


def test_a_metrics_port_in_use_is_named_with_its_key(start: Start) -> None:
    with socket.socket() as other:
        other.bind(("127.0.0.1", 0))
        other.listen()
        port = other.getsockname()[1]
        check_refused(start({"desk.metrics_port": port}), f"127.0.0.1:{port}", "desk.metrics_port", "in use")


@pytest.mark.parametrize(
    ("key", "value", "word"),
    [
        ("watch.loop_hz", 5, "watch.loop_hz"),
        ("input.adress", "x", "input.adress"),
        ("robot.urdf", "no.urdf", "no.urdf"),
    ],
)
def test_a_mistake_in_the_configuration_is_named_by_its_key(
    start: Start, key: str, value: object, word: str
) -> None:
    check_refused(start({key: value}), "rind.toml", word)


def test_a_joint_that_the_robot_has_not_is_named(start: Start, tmp_path: Path) -> None:
    config = write_rind(tmp_path)
    config.write_text(config.read_text().replace('name = "elbow"', 'name = "knee"'))
    check_refused(start(config=config), "rind.toml", "robot.joint[3].name", "'knee'")


def test_a_robot_description_that_is_refused_is_named(start: Start, tmp_path: Path) -> None:
    config = configure(write_rind(tmp_path), {"robot.urdf": "broken.urdf"})
    (tmp_path / "broken.urdf").write_text("<robot")
    check_refused(start(config=config), "broken.urdf")
