"""What a user gets: the installed wheel, used from a folder that is not the checkout."""

from __future__ import annotations

import json
import subprocess
import sys
from importlib.resources import files
from pathlib import Path

import pytest

pytestmark = pytest.mark.installed


def limbtell(*arguments: str, folder: Path) -> subprocess.CompletedProcess[str]:
    """Run the console command of this environment."""
    command = [str(Path(sys.executable).with_name("limbtell")), *arguments]
    return subprocess.run(command, cwd=folder, capture_output=True, text=True, check=False, timeout=300)


def test_all_commands_are_there(tmp_path: Path) -> None:
    said = limbtell("--help", folder=tmp_path)
    assert said.returncode == 0, said.stderr
    for name in ("init", "check", "watch", "convert", "demo", "review"):
        assert name in said.stdout
    assert "not a safety function" in " ".join(said.stdout.split())


def test_a_configuration_is_written_and_checked(tmp_path: Path) -> None:
    data = files("replay") / "data"
    for name in ("rind.urdf", "rind-datasheet.json"):
        (tmp_path / name).write_text((data / name).read_text(encoding="utf-8"), encoding="utf-8")
    init = ("init", "rind.urdf", "-o", "rind.toml", "--datasheet", "rind-datasheet.json")
    said = limbtell(*init, folder=tmp_path)
    assert said.returncode == 0, said.stderr
    said = limbtell("check", "rind.toml", "--json", folder=tmp_path)
    assert said.returncode == 0, said.stderr
    assert len(json.loads(said.stdout)["joints"]) == 7
    again = limbtell(*init, folder=tmp_path)
    assert again.returncode == 2
    assert "rind.toml" in again.stderr
    assert "Traceback" not in again.stderr


def test_a_robot_is_used_from_a_program(tmp_path: Path) -> None:
    program = (
        "from importlib.resources import files; import numpy as np; from monitor import Robot\n"
        "robot = Robot.from_urdf(str(files('replay') / 'data' / 'rind.urdf'))\n"
        "M, C, g = robot.dynamics(np.zeros(7), np.zeros(7))\n"
        "assert M.shape == (7, 7) and np.all(np.linalg.eigvalsh(M) > 0) and not C.any()\n"
    )
    subprocess.run([sys.executable, "-P", "-c", program], cwd=tmp_path, check=True, timeout=300)


def test_a_recording_is_converted_and_reviewed(tmp_path: Path) -> None:
    test_a_configuration_is_written_and_checked(tmp_path)
    joints = json.loads(limbtell("check", "rind.toml", "--json", folder=tmp_path).stdout)["joints"]
    head = ["t", *(f"{column}.{joint['joint']}" for column in ("q", "qd", "tau") for joint in joints)]
    rows = [[k / 1000, *[0.1] * 7, *[0.0] * 7, *[0.0] * 7] for k in range(200)]
    lines = [",".join(map(str, row)) for row in (head, *rows)]
    (tmp_path / "rest.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    said = limbtell("convert", "rest.csv", "--config", "rind.toml", "-o", "rest.mcap", folder=tmp_path)
    assert said.returncode == 0, said.stderr
    said = limbtell("review", "rest.mcap", "--out", "review", folder=tmp_path)
    assert said.returncode == 0, said.stderr
    summary = json.loads((tmp_path / "review" / "summary.json").read_text(encoding="utf-8"))
    assert "not a safety function" in summary["caution"]
    assert (tmp_path / "review" / "alarms.jsonl").exists()
