"""The input socket: tuples from the robot, never blocking."""

from __future__ import annotations

import zmq

from monitor.flow.pipeline import MALFORMED
from monitor.flow.wire import LONGEST
from monitor.setup.config import Config

# What the daemon itself writes into the data path; the robot has no say in these.
OWN_TOPICS = ("host", "command")
_KEPT = 1000  # bytes of an odd message that are recorded


class Subscriber:
    """Receives two-frame messages (topic, payload) from the robot's publisher.

    ZeroMQ connects in the background and again after every loss, so that the robot may start later.
    """

    def __init__(self, context: zmq.Context[zmq.Socket[bytes]], config: Config) -> None:
        self._socket = context.socket(zmq.SUB)
        self._socket.set(zmq.RCVHWM, config.input.queue)
        self._socket.set(zmq.LINGER, 0)
        self._socket.set(zmq.MAXMSGSIZE, 16 * LONGEST)  # beyond, the sender is cut off
        self._socket.set(zmq.SUBSCRIBE, b"")
        self._socket.connect(config.input.address)

    def receive(self) -> tuple[str, bytes] | None:
        """Return the next message, or None when none is waiting; odd frames come as topic `MALFORMED`."""
        try:
            frames = self._socket.recv_multipart(zmq.NOBLOCK)
        except zmq.Again:
            return None
        topic = frames[0].decode("utf-8", "replace")
        if len(frames) != 2 or topic in OWN_TOPICS or len(frames[0]) + len(frames[1]) > LONGEST:
            return MALFORMED, b"".join(frames)[:_KEPT]
        return topic, frames[1]

    def close(self) -> None:
        """Close the socket."""
        self._socket.close()
