"""Publishes joint measurements and the robot's condition to limbtell: the Python twin of the C++ header.

python publisher.py ENDPOINT RATE_HZ SECONDS JOINTS

`publish` allocates and may be held up by the interpreter: good for slow robots and trials, while a hard
control loop takes the C++ header. Needs pyzmq and msgpack.
"""

from __future__ import annotations

import math
import secrets
import sys
import time
from typing import Any

import msgpack
import zmq


def publish(socket: zmq.Socket[bytes], topic: bytes, **fields: Any) -> None:
    """Send one message: the topic, then a msgpack map of `fields` (numpy arrays go as lists of doubles)."""
    payload = msgpack.packb(fields, default=lambda array: array.tolist())
    socket.send_multipart([topic, payload], zmq.NOBLOCK)


def main(endpoint: str, rate_hz: float, seconds: float, joints: int) -> None:
    """Publish sinusoidal joint motion [rad, rad/s, Nm] at a fixed rate, and the condition twice a second."""
    condition: dict[str, Any] = {"serial": "rind-07", "boot": secrets.token_hex(8), "mode": "work"}
    condition |= {"drive": [1] * joints, "brake": [0] * joints, "stop": None}
    condition |= {"tool": "wheel-gripper", "payload": None, "program": "turn-wheels", "revision": "4"}
    with zmq.Context() as context, context.socket(zmq.PUB) as socket:
        socket.bind(endpoint)
        time.sleep(0.5)  # who subscribes later misses what went before
        start_ns = time.monotonic_ns()
        for seq in range(int(rate_hz * seconds)):
            deadline_ns = start_ns + int(seq * 1e9 / rate_hz)  # absolute: a late cycle shifts no other
            time.sleep(max(0, deadline_ns - time.monotonic_ns()) * 1e-9)
            t_ns = time.monotonic_ns()
            phases = [math.pi * (t_ns - start_ns) * 1e-9 + joint for joint in range(joints)]
            q = [0.3 * math.sin(phase) for phase in phases]
            qd = [0.3 * math.pi * math.cos(phase) for phase in phases]
            tau = [2.0 * math.sin(phase) for phase in phases]
            publish(socket, b"joints", v=1, seq=seq, t_ns=t_ns, q=q, qd=qd, tau=tau)
            if seq % max(1, int(rate_hz / 2)) == 0:
                publish(socket, b"robot", **condition)


if __name__ == "__main__":
    main(sys.argv[1], float(sys.argv[2]), float(sys.argv[3]), int(sys.argv[4]))
