"""Is a fault that takes three days absorbed: an arm that works for a minute an hour while one joint changes.

    python -m tests.worlds.drift [--world rigid] [--joint 1] [--change coulomb|viscous|offset] [--to 1.0]
        [--hours 72] [--default]

The change grows evenly to `--to`: added friction as a multiple of the normal one, an offset as a share of
rated torque; 0 shows what fault-free work looks like. Robot 1, sessions from 200 on: those of tuning.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from monitor.commission.drive import Samples, until
from monitor.flow import trend
from monitor.flow.layout import Notice
from monitor.setup.build import Setup
from tests.worlds import arms
from tests.worlds.score import prepared, samples_of

Floats = NDArray[np.float64]

ROBOT, FIRST, SHIFT_S = 1, 200, 60.0
_HOUR_NS = 3_600_000_000_000
_SMOOTH = 15  # samples over which the velocity is averaged before friction is made of it
_BITS = int(Notice.EVENT_OPENED | Notice.DRIFTED)


def changed(setup: Setup, samples: Samples, joint: int, change: str, share: float) -> Samples:
    """Return samples in which the drive of a joint needs so much more torque for the same motion."""
    c, mean = setup.params[0], np.ones(_SMOOTH) / _SMOOTH
    speed: Floats = np.convolve(samples.qd[:, joint], mean, "same")
    more = {
        "coulomb": c["coulomb"][joint] * np.tanh(speed / 0.01),
        "viscous": c["viscous"][joint] * speed,
        "offset": np.full(len(speed), c["rated"][joint]),
    }
    tau = samples.tau.copy()
    tau[:, joint] += share * more[change]
    return samples._replace(tau=tau)


def main(arguments: Sequence[str]) -> None:
    """Run the command of the head of this file."""
    parser = argparse.ArgumentParser(prog="python -m tests.worlds.drift")
    parser.add_argument("--world", default="rigid", choices=arms.WORLDS)
    parser.add_argument("--joint", type=int, default=1)
    parser.add_argument("--change", default="coulomb", choices=("coulomb", "viscous", "offset"))
    parser.add_argument("--to", type=float, default=1.0)
    parser.add_argument("--hours", type=int, default=72)
    parser.add_argument("--default", action="store_true")
    chosen: Any = parser.parse_args(arguments)
    setup = prepared(chosen.world, ROBOT, 0, chosen.default)
    blocks, events = setup.blocks(), 0
    blocks.inputs["judged"], blocks.inputs["drive"] = 1, 1
    s, out = blocks.state[0], blocks.outputs[0]
    for hour in range(chosen.hours):
        share = chosen.to * hour / chosen.hours
        session = samples_of(arms.fault_free(chosen.world, ROBOT, FIRST + hour, SHIFT_S))
        session = changed(setup, session, chosen.joint, chosen.change, share)
        session = session._replace(t_ns=session.t_ns + hour * _HOUR_NS)
        blocks.inputs["rebase"], k = 2, 0
        while k < len(session.t_ns):
            k = until(blocks, session, k, _BITS)
            events += bool(out["notice"] & Notice.EVENT_OPENED)
            if out["notice"] & Notice.DRIFTED:
                for place in np.flatnonzero(s["drifted"]).tolist():
                    said = trend.verdict(setup.facts, blocks, place)
                    sys.stdout.write(f"hour {hour}, changed by {share:.3g}: drift, {said.detail} at ")
                    sys.stdout.write(f"{said.joint}, {said.size}, probability {said.probability:.3f}\n")
        if hour % 6 == 5:
            largest = np.abs(np.delete(s["trend"], chosen.joint, 0)).max()
            sys.stdout.write(
                f"hour {hour}, changed by {share:.3g}: {np.round(s['trend'][chosen.joint], 2)} ± "
            )
            sys.stdout.write(
                f"{np.round(s['trend_sd'][chosen.joint], 2)} of the limits of Coulomb and viscous "
            )
            sys.stdout.write(f"friction and offset; other joints at most {largest:.2f}; events: {events}\n")
            sys.stdout.flush()


if __name__ == "__main__":
    main(sys.argv[1:])
