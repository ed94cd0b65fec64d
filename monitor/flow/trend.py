"""When has friction left what was commissioned: the trend of hours against its limits.

What is tracked from second to second adapts to a fault that comes slowly, and no event opens. The trend is
taken over a memory that only passes while a joint is seen to move, so that neither rest nor a restart of the
robot makes it forget; and always against the commissioned model, so that a monitor that starts anew finds the
same again as soon as it has seen enough.
"""

from __future__ import annotations

import math

from monitor.explain import actuator
from monitor.flow.layout import Block, Blocks, Facts, Notice
from monitor.flow.verdict import Size, Verdict, joint_of
from monitor.kernels import band, tracking
from monitor.kernels.jit import kernel

DETAILS = actuator.DETAILS[actuator.COULOMB :]
_DRIFTED = int(Notice.DRIFTED)
_STANDING = 0.1  # what a joint hides while it stands is not told from an offset
_CALM = 0.8  # share of the limit below which a drift is over


@kernel
def follow(params: Block, state: Block, outputs: Block, row: int, variance: float, dt_s: float) -> None:
    """Take one evidence step of a row in; at the row's turn compare its trend with the limits.

    variance is the residual's, times the steps that count as one.
    """
    c, s = params[0], state[0]
    if s["cause"][row, band.STANDS] > _STANDING:
        return
    tracking.gather(
        row, s["left"][row] + s["tracked"][row], variance, s["feature"], c["trend_limit"], c["trend_keep"],
        s["trend_info"], s["trend_sum"],
    )  # fmt: skip
    n = s["trend"].shape[0]
    if s["ring_head"] % n == row:
        tracking.trend(
            row, s["trend_info"], s["trend_sum"], c["trend_limit"], c["cusum_sd"][row],
            s["trend"], s["trend_sd"],
        )  # fmt: skip
        for a in range(3):
            _compare(params, state, outputs, row, a, n * dt_s)


@kernel
def _compare(params: Block, state: Block, outputs: Block, row: int, a: int, dt_s: float) -> None:
    c, s = params[0], state[0]
    size = abs(s["trend"][row, a])
    if size - 1.0 > c["trend_sure"] * s["trend_sd"][row, a]:
        s["trend_beyond_s"][row, a] += dt_s
    else:
        s["trend_beyond_s"][row, a] = 0.0
    if s["trend_beyond_s"][row, a] > c["trend_s"] and s["drifted"][3 * row + a] == 0:
        s["drifted"][3 * row + a] = 1
        outputs[0]["notice"] |= _DRIFTED
    elif size < _CALM:
        s["drifted"][3 * row + a] = 0


def verdict(facts: Facts, blocks: Blocks, place: int) -> Verdict:
    """Return what is said of the drift at a place of `state.drifted`."""
    row, a = divmod(place, 3)
    s, limit = blocks.state[0], float(blocks.params[0]["trend_limit"][row, a])
    share, sd = float(s["trend"][row, a]), float(s["trend_sd"][row, a])
    probability = 0.5 * math.erfc((1.0 - abs(share)) / (math.sqrt(2.0) * sd))
    size = Size(share * limit, actuator.units(facts.units[row])[actuator.COULOMB + a], sd * limit)
    return Verdict("actuator", DETAILS[a], joint_of(facts, blocks, row), probability=probability, size=size)
