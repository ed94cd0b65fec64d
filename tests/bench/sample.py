"""What one live sample costs beside a bare loop that only receives and decodes the same messages.

Both read the same messages from a real PUB/SUB pair over loopback TCP, as fast as they can, in turns; the CPU
time of the thread is counted, so that waiting costs nothing. The whole sample includes a tick of its own, the
feed of the recorder and the counters behind the metrics.
"""

from __future__ import annotations

import time
import uuid
from collections.abc import Callable

import msgpack
import numpy as np
import zmq

from monitor.edges.record import RecordFeed
from monitor.edges.subscribe import Subscriber
from monitor.flow.layout import loop_fields, zeros
from monitor.loop import Loop
from monitor.setup.build import build
from tests.bench.common import messages, rind_config

_SECONDS, _TURNS = 4.0, 7


class _Nothing:
    def receive(self) -> None:
        return None

    def send(self, topic: str, payload: bytes) -> bool:
        return True


def _bare(subscriber: Subscriber, messages: int) -> None:
    taken = 0
    while taken < messages:
        message = subscriber.receive()
        if message is not None:
            msgpack.unpackb(message[1])
            taken += 1


def _whole(loop: Loop, messages: int) -> None:
    cells, at = loop._cells, loop._at["messages"]
    while cells[at] < messages:
        loop._tick(time.monotonic_ns())


def _cpu_us(work: Callable[[], None], messages: int) -> float:
    start = time.thread_time_ns()
    work()
    return (time.thread_time_ns() - start) / messages / 1e3


def run() -> None:
    """Print the CPU of both and their ratio (median of paired turns), for both ways of sending numbers."""
    for raw in (False, True):
        print("numbers sent raw:" if raw else "numbers sent as arrays of doubles:")
        _compare(raw)


def _compare(raw: bool) -> None:
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    publisher = context.socket(zmq.PUB)
    publisher.set(zmq.SNDHWM, 0)
    port = publisher.bind_to_random_port("tcp://127.0.0.1")
    address = f"tcp://127.0.0.1:{port}"
    config = rind_config(
        **{
            "tcp://127.0.0.1:5555": address,
            "queue = 4000": "queue = 1000000",
            "messages_per_tick = 64": "messages_per_tick = 1",
        }
    )
    setup = build(config)
    sent = [(topic.encode(), payload) for topic, payload, _ in messages(_SECONDS, raw)]
    pairs = []
    for _ in range(_TURNS):
        subscriber, sink = Subscriber(context, config), context.socket(zmq.PULL)
        inside = f"inproc://{uuid.uuid4().hex}"
        sink.bind(inside)
        feed = RecordFeed(context, inside, config)
        pipeline, figures = setup.pipeline("bench"), zeros(loop_fields())
        loop = Loop(pipeline, config, subscriber, _Nothing(), _Nothing(), feed, figures)
        time.sleep(0.3)
        pair = []
        for work in (lambda: _bare(subscriber, len(sent)), lambda: _whole(loop, len(sent))):  # noqa: B023
            for frames in sent:
                publisher.send_multipart(frames)
            time.sleep(0.5)
            pair.append(_cpu_us(work, len(sent)))
        pairs.append(pair)
        feed.close()
        subscriber.close()
        sink.close(0)
    bare, whole = np.median(pairs, axis=0)
    ratios = [whole / bare for bare, whole in pairs]
    print(f"  bare receive and decode: {bare:.1f} µs of CPU a message")
    print(f"  whole live sample:       {whole:.1f} µs of CPU a message")
    print(f"  ratio: {np.median(ratios):.2f} ({min(ratios):.2f} to {max(ratios):.2f}); wanted: at most 3")
    publisher.close(0)
    context.destroy(0)
