"""The output socket: alarms, verdicts and health, never blocking."""

from __future__ import annotations

import zmq

from monitor.errors import SystemFault
from monitor.setup.config import Config


def bind(socket: zmq.Socket[bytes], address: str, key: str) -> None:
    """Bind a socket, or say which address is taken and by which setting to change it."""
    try:
        socket.bind(address)
    except zmq.ZMQError as error:
        raise SystemFault(
            address,
            error.strerror or str(error),
            "an address that is free",
            f"Stop the program that uses it, or change `{key}` in the configuration.",
        ) from error


class Publisher:
    """Sends two-frame messages (topic, msgpack map) to whoever subscribes.

    A subscriber that does not read loses messages at its queue's limit; the running number of each topic
    shows it the gap.
    """

    def __init__(self, context: zmq.Context[zmq.Socket[bytes]], config: Config) -> None:
        self._socket = context.socket(zmq.PUB)
        self._socket.set(zmq.SNDHWM, config.output.queue)
        self._socket.set(zmq.LINGER, 200)
        bind(self._socket, config.output.address, "output.address")

    def send(self, topic: str, payload: bytes) -> bool:
        """Send one message; False when it had to be dropped."""
        try:
            self._socket.send_multipart((topic.encode(), payload), zmq.NOBLOCK)
        except zmq.Again:
            return False
        return True

    def close(self) -> None:
        """Close the socket; what was sent has a moment to leave."""
        self._socket.close()
