"""The demo robot for benchmarks: its configuration and a minute of its messages."""

from __future__ import annotations

import atexit
import shutil
import tempfile
from collections.abc import Iterator
from pathlib import Path

import msgpack

from monitor.setup.config import Config, load
from monitor.setup.template import write_config
from replay.simulate import DATASHEET, TANH_V0, URDF, Rind, Schedule


def temporary_folder() -> Path:
    """Return a folder that is removed when the benchmark ends."""
    folder = Path(tempfile.mkdtemp(prefix="limbtell-bench-"))
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    return folder


def rind_config(**changes: str) -> Config:
    """Return the configuration `limbtell init` writes for *Rind*, lines changed as `key = "value"` texts."""
    folder = temporary_folder()
    text = write_config(URDF, "fixed", DATASHEET, folder)
    text = text.replace("friction_velocity = 0.004", f"friction_velocity = {TANH_V0}")
    for old, new in changes.items():
        assert old in text, old
        text = text.replace(old, new)
    path = folder / "rind.toml"
    path.write_text(text, encoding="utf-8")
    return load(path)


def messages(seconds: float, raw: bool = False) -> Iterator[tuple[str, bytes, int]]:
    """Yield the tuples of an undisturbed robot, received 0.2 ms after each sample.

    Numbers go as arrays of doubles, or raw as little-endian bytes.
    """
    robot = Rind(1, Schedule())
    for seq in range(round(1000 * seconds)):
        sample = robot.step()
        received_ns = 10**9 + seq * 10**6 + 200_000
        if seq % 500 == 0:
            yield "robot", msgpack.packb(robot.condition()), received_ns
        arrays = {name: getattr(sample, name) for name in ("q", "qd", "tau")}
        numbers = {name: x.tobytes() if raw else x.tolist() for name, x in arrays.items()}
        yield "joints", msgpack.packb({"v": 1, "seq": seq, "t_ns": sample.t_ns} | numbers), received_ns
