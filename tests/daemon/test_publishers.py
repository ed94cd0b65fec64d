"""The publishers that ship for the robot's side, in C++ and Python, against the real daemon."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

from tests.daemon.conftest import Start
from tests.daemon.running import listening
from tests.publisher.build import PUBLISHER, compile_example, finish, require_compiler, start_example

JOINTS = 3
SECONDS = 1.2
COUNTS = ("received", "stepped", "lost", "late", "duplicates", "refused", "wire_errors", "restarts", "bad")
NOTHING = dict.fromkeys(COUNTS, 0)


def write_example_arm(folder: Path, rate_hz: float) -> Path:
    """Write an arm that can move as the examples do: 0.3 rad at half a turn of phase a second, 2 N m."""
    links = "".join(
        f'<link name="l{i}"><inertial><origin xyz="0 0 0.1"/><mass value="0.5"/>'
        '<inertia ixx="0.002" iyy="0.002" izz="0.002" ixy="0" ixz="0" iyz="0"/></inertial></link>'
        for i in range(JOINTS + 1)
    )
    joints = "".join(
        f'<joint name="j{i}" type="revolute"><parent link="l{i}"/><child link="l{i + 1}"/>'
        '<origin xyz="0 0 0.2"/><axis xyz="0 1 0"/>'
        '<limit lower="-0.5" upper="0.5" velocity="1.5" effort="20"/></joint>'
        for i in range(JOINTS)
    )
    (folder / "arm.urdf").write_text(f'<robot name="example">{links}{joints}</robot>')
    joint = "rated_torque = 10.0\npeak_torque = 20.0\n"
    tables = "".join(f'[[robot.joint]]\nname = "j{i}"\n{joint}' for i in range(JOINTS))
    path = folder / "arm.toml"
    path.write_text(
        f'schema = 1\n[robot]\nurdf = "arm.urdf"\nserial = "rind-07"\n{tables}'
        # The same number of periods at each rate, so that the same compiled code serves all of them. The
        # examples tell when they measured; where other tests run beside, that is no even clock.
        f"[input]\nrate_hz = {rate_hz}\n"
        f"[watch]\ngap_limit_s = {20 / rate_hz}\nstream_stale_s = 0.3\nclock_jump_periods = 500.0\n"
        "start_settle_s = 1e3\n"  # no arm moves like that: what is made of it is not asked here
    )
    return path


@pytest.fixture(scope="module")
def example(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("example")
    require_compiler(folder)
    return compile_example(folder)


@pytest.mark.compiler
@pytest.mark.parametrize("rate_hz", [125.0, 250.0, 500.0, 1000.0])
def test_every_sample_of_the_cpp_publisher_is_stepped(
    start: Start, example: Path, tmp_path: Path, rate_hz: float
) -> None:
    daemon = start(config=write_example_arm(tmp_path, rate_hz))
    with listening(daemon) as listener:
        report = finish(start_example(example, daemon.input, rate_hz, SECONDS, JOINTS))
        listener.alarm("signal", "stale")  # the example has ended
        counts = listener.health()["counts"]
        assert report["published"] + report["dropped"] == round(rate_hz * SECONDS)
        assert counts == NOTHING | {
            "received": report["published"],
            "stepped": report["published"],
            "lost": report["dropped"],
        }
        assert daemon.stop() == 0


def test_every_sample_of_the_python_publisher_is_stepped(start: Start, tmp_path: Path) -> None:
    daemon = start(config=write_example_arm(tmp_path, 200.0))
    with listening(daemon) as listener:
        command = [sys.executable, PUBLISHER / "publisher.py", daemon.input, "200", str(SECONDS), str(JOINTS)]
        subprocess.run(command, check=True, timeout=60)
        listener.alarm("signal", "stale")
        counts = listener.health()["counts"]
        sent = round(200 * SECONDS)
        assert counts == NOTHING | {"received": sent, "stepped": sent}
        assert daemon.stop() == 0
