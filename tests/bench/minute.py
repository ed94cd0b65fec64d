"""Sixty seconds of the real daemon at 1 kHz beside its simulated robot: losses and lateness."""

from __future__ import annotations

import multiprocessing
import signal
import subprocess
import sys
from collections.abc import Iterator
from urllib.request import urlopen

import msgpack
import zmq
from prometheus_client.parser import text_string_to_metric_families

from replay.demo import free_ports
from replay.simulate import Schedule, publish
from tests.bench.common import rind_config

_SECONDS = 60.0


def run() -> None:
    """Print counters of the last second and percentiles of the lateness from the served metrics."""
    robot_port, out_port, metrics_port = free_ports(3)
    config = rind_config(
        **{
            "tcp://127.0.0.1:5555": f"tcp://127.0.0.1:{robot_port}",
            "tcp://127.0.0.1:5556": f"tcp://127.0.0.1:{out_port}",
            "metrics_port = 9637": f"metrics_port = {metrics_port}",
        }
    )
    daemon = subprocess.Popen(
        [sys.executable, "-P", "-m", "monitor", "watch", str(config.path)], stdout=subprocess.PIPE, text=True
    )
    assert daemon.stdout is not None
    for line in daemon.stdout:
        if line.strip() == "ready":
            break
    address = f"tcp://127.0.0.1:{robot_port}"
    robot = multiprocessing.get_context("spawn").Process(
        target=publish, args=(address, _SECONDS, 1, Schedule())
    )
    robot.start()
    health = _last_health(f"tcp://127.0.0.1:{out_port}", robot)
    with urlopen(f"http://127.0.0.1:{metrics_port}/metrics") as answer:
        text = answer.read().decode()
    daemon.send_signal(signal.SIGTERM)
    daemon.wait()
    print(f"samples: {health['counts']}")
    print(f"loop: {health['loop']}")
    buckets = dict(_buckets(text))
    total = max(buckets.values())
    for share in (0.5, 0.9, 0.99, 0.999):
        edge = min(edge for edge, count in buckets.items() if count >= share * total)
        print(f"{share:6.1%} of {total:.0f} ticks began at most {edge * 1e6:.0f} µs late")


def _last_health(address: str, robot: multiprocessing.context.SpawnProcess) -> dict:  # type: ignore[type-arg]
    with zmq.Context() as context, context.socket(zmq.SUB) as subscriber:
        subscriber.connect(address)
        subscriber.subscribe(b"health")
        health = {}
        while robot.is_alive():
            if subscriber.poll(100):
                health = msgpack.unpackb(subscriber.recv_multipart()[1])
    return health


def _buckets(text: str) -> Iterator[tuple[float, float]]:
    for family in text_string_to_metric_families(text):
        for sample in family.samples:
            if sample.name == "limbtell_tick_lateness_seconds_bucket":
                yield float(sample.labels["le"]), sample.value
