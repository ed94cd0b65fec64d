"""How many times faster than the robot a session of seven joints at 1 kHz is replayed, on one core."""

from __future__ import annotations

import time

from monitor.session import Session, SessionWriter
from monitor.setup.build import build
from replay.run import Replay
from tests.bench.common import messages, rind_config, temporary_folder

_SECONDS = 20.0


def run() -> None:
    """Print the ratio of recorded to needed CPU time, the best and the worst of some turns."""
    config = rind_config()
    build(config).warm()
    path = temporary_folder() / "minute.mcap"
    writer = SessionWriter(
        path,
        config_toml=config.source_toml,
        model=config.model_files(),
        run="bench",
        utc_offset_ns=0,
        utc_uncertainty_ns=0,
        versions={},
    )
    writer.snapshot(b"", 10**9)
    for seq, (topic, payload, received_ns) in enumerate(messages(_SECONDS)):
        writer.tuple(topic, payload, received_ns)
        if topic == "joints":
            writer.tick(received_ns + 300_000)
        if seq % 1000 == 999:
            writer.flush()
    writer.close()
    times = []
    for _ in range(5):
        start = time.process_time()
        for _ in Replay(Session(path)):
            pass
        times.append(time.process_time() - start)
    best, worst = _SECONDS / min(times), _SECONDS / max(times)
    print(f"replay: {best:.0f} times real time at best, {worst:.0f} at worst; wanted: at least 20")
