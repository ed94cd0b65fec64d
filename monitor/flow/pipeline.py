"""The data path: tuples and tick times in, messages out. No socket, clock, thread or file.

Live and replay hand it the same `(topic, payload, received_ns)` and the same tick times and get the same
bytes back. All it keeps between two calls is in its snapshot.
"""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from typing import Any, NamedTuple

import msgpack
import numpy as np
from numpy.typing import NDArray

from monitor.errors import WireError
from monitor.flow import trend, wire
from monitor.flow.alarms import AlarmBoard, Key, Transition
from monitor.flow.align import Aligner
from monitor.flow.coverage import ConditionKeeper
from monitor.flow.events import Events, Statement
from monitor.flow.layout import KINDS, VERDICTS, Blocks, Coverage, Facts, Notice, Reason, Signal
from monitor.flow.step import step
from monitor.flow.verdict import Verdict
from monitor.kernels.jit import resolved

SNAPSHOT_VERSION = 1
MALFORMED = "malformed"  # topic of what is no message of the robot at all
HEALTH_NS = 1_000_000_000
_PATIENCE_NS = 10_000_000_000  # a robot that has not sent anything for so long is missed
_PACE = 10.0  # a robot's clock that runs so many times faster or slower than ours counts something else
_MOST_RESTARTS = 3  # within a second; more are no restarts
_WIRE_QUIET_NS = 5_000_000_000  # refused messages are called over when none came for so long
_STALE = Key("signal", "stale")
_GAP = Key("signal", "gap")
_DROPOUTS, _DUPLICATES = Key("signal", "dropouts"), Key("signal", "duplicates")
_FEWEST = 3  # lost or doubled samples that are more than chance
_OTHER_ROBOT = Key("robot", "other-serial")
_STEP_NOTICES = ~int(Notice.TORQUE_AT_LIMIT)
_EVENT_NOTICES = int(
    Notice.EVENT_OPENED | Notice.EVENT_ENDED | Notice.WEIGHED | Notice.FAULT_CONFIRMED | Notice.FAULT_CEASED
)
_PER_JOINT = (
    # notice, state field, verdict, alarm kind, detail
    (Notice.BRAKE_MOVED, "brake_moved", "actuator", "brake", "moved-while-closed"),
    (Notice.DISOBEYED, "disobeyed", "actuator", "drive", "command-differs"),
    (Notice.LINK_TORQUE, "unsensed", "torque-sensor", "sensor", "missing"),
)
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


class Message(NamedTuple):
    """One outgoing message."""

    topic: str
    payload: bytes
    body: dict[str, Any]


class Pipeline:
    """One robot's data path.

    Parameters
    ----------
    facts : Facts
        What is known of the robot beside the blocks.
    blocks : Blocks
        As `setup.build` makes them; `state` and `outputs` may lie in shared memory.
    run : str
        Id of the daemon's start, carried by every outgoing message.
    """

    def __init__(self, facts: Facts, blocks: Blocks, run: str) -> None:
        self.facts, self.blocks, self.run = facts, blocks, run
        self._state, self._outputs = blocks.state[0], blocks.outputs[0]
        self._inputs = blocks.inputs[0]
        self._inputs_bytes = memoryview(blocks.inputs.view("u1").data)
        self._notice, self._rebase = blocks.outputs["notice"].data, blocks.inputs["rebase"]
        self._run_step = resolved(step, *blocks)
        self._received = blocks.state["received"].data
        self._joints = wire.JointsFormat(facts.joints, facts.floating, len(facts.feet), facts.link_torque)
        self._aligner = Aligner(self._state, facts.wait_ns)
        self._condition = ConditionKeeper(facts, *blocks)
        self._board = AlarmBoard()
        self._events = Events(facts, blocks, self._board)
        self._out: list[Message] = []
        self._sample_ns = 0  # when the last sample that was stepped had been received
        self._silent = False  # called: no sample for too long
        self._first_tick_ns: int | None = None
        self._refused_ns = 0  # when another robot was last heard
        # A second ago: receive time, robot clock, samples, restarts, clock faults, lost, doubled, gaps.
        self._second = (0, 0, 0, 0, 0, 0, 0, 0)
        self._gaps = 0  # many samples lost in a row
        self._health_ns = 0
        self._last_bad: dict[Key, int] = {}  # alarms of single messages: cleared by quiet
        self._flagged: dict[Key, tuple[str, int]] = {}  # alarms of a joint that stand with a flag of the step
        self._utc: tuple[int, int] | None = None  # offset to our clock and its uncertainty, ns
        self._host: dict[str, Any] = {}  # last figures of the loop itself

    def feed(self, topic: str, payload: bytes, received_ns: int) -> None:
        """Take one tuple in."""
        try:
            if topic == "joints":
                self._received[0] += 1
                sample = self._joints.decode(payload)
                if self._condition.refused:
                    self._state["refused"] += 1
                    self._refused_ns = received_ns
                    return
                if self._aligner.follows(sample, received_ns):
                    self._step(sample, received_ns)
                    return
                for one, restart in self._aligner.arrived(sample, received_ns):
                    self._step(one, received_ns, restart)
            elif topic == "robot":
                self._robot(payload, received_ns)
            elif topic == "host":
                self._host_says(payload, received_ns)
            elif topic == MALFORMED:
                raise WireError(
                    "message", f"{len(payload)} bytes", "two frames: a topic of the robot, a payload"
                )
        except WireError as error:
            self._refuse(error, received_ns)

    def tick(self, tick_ns: int) -> list[Message]:
        """Look at what waited and what is missing; return all messages since the last tick."""
        if self._aligner.early:
            for sample, restart in self._aligner.waited(tick_ns):
                self._step(sample, tick_ns, restart)
        # The samples of another robot are refused, which is no silence.
        heard_ns = max(self._sample_ns, self._refused_ns)
        silent = tick_ns - heard_ns > self.facts.stream_stale_ns and not self._condition.refused
        self._condition.tick(tick_ns, silent)
        if silent and not self._silent and self._is_overdue(tick_ns):
            self._silent = True
            self._raise(_STALE, Verdict("signal", "stale"), tick_ns)
        if self._last_bad or self._flagged:
            self._clear_passed(tick_ns)
        if tick_ns - self._health_ns >= HEALTH_NS:
            self._health_ns = tick_ns
            self._check_numbering(tick_ns)
            self._health(tick_ns)
        out, self._out = self._out, []
        return out

    def _check_numbering(self, now_ns: int) -> None:
        """Call, once a second, a clock in another unit, a `seq` that does not count, and a poor line."""
        s = self._state
        last, now = self._second, (
            self._sample_ns, int(self._inputs["t_ns"]), int(s["received"]), int(s["restarts"]),
            int(s["bad"][Signal.CLOCK]), int(s["lost"]), int(s["duplicates"]), self._gaps,
        )  # fmt: skip
        self._second = now
        ours, robots, samples, restarts, clock_faults, lost, doubled, gaps = (
            b - a for a, b in zip(last, now, strict=True)
        )
        if restarts > _MOST_RESTARTS:
            found = f"joints seq: began anew {restarts} times within a second"
            self._misnumbered(
                "numbering", f"{found}; expected a number that grows by 1 with every sample", now_ns
            )
            return
        # A clock that was set, a restart, or many samples lost in a row is told elsewhere.
        if last[0] and not restarts and not gaps:
            sent = samples - doubled + lost
            self._poor_line(_DROPOUTS, lost, sent, self.facts.dropouts_ratio, now_ns)
            self._poor_line(_DUPLICATES, doubled, sent, self.facts.duplicates_ratio, now_ns)
        steady = last[0] and samples > 10 and ours > 0 and not restarts and not clock_faults
        if steady and not ours < _PACE * robots < _PACE**2 * ours:
            found = f"joints t_ns: went on by {robots} in {ours} ns of ours"
            self._misnumbered("clock", f"{found}; expected nanoseconds of the robot's clock", now_ns)

    def _poor_line(self, key: Key, count: int, sent: int, ratio: float, now_ns: int) -> None:
        """Raise or clear the alarm of samples that were lost or doubled within the last second."""
        if count >= _FEWEST and count > ratio * sent:
            text = f"{count} of {sent} samples within a second; expected at most {100.0 * ratio:g} %"
            self._raise(key, Verdict("signal", key.detail), now_ns, text)
        else:
            self._clear(key, now_ns)

    def _misnumbered(self, detail: str, text: str, now_ns: int) -> None:
        key = Key("wire", detail)
        self._raise(key, Verdict("signal", detail), now_ns, text)
        self._last_bad[key] = now_ns

    def _is_overdue(self, tick_ns: int) -> bool:
        """Whether silence is news: at the start the robot may take its time."""
        if self._first_tick_ns is None:
            self._first_tick_ns = tick_ns
        return bool(self._sample_ns) or tick_ns - self._first_tick_ns > _PATIENCE_NS

    def _step(self, sample: wire.JointSample, now_ns: int, restart: bool = False) -> None:
        """Step one sample, and look closer only where the step took notice of something."""
        body = sample.body
        self._inputs_bytes[: len(body)] = body
        if restart:
            self._rebase[0] = 2
        self._sample_ns = now_ns
        self._run_step(*self.blocks)
        if self._notice[0] & _STEP_NOTICES:
            self._notices(self._notice[0], now_ns)
        if self._silent:
            self._silent = False
            self._clear(_STALE, now_ns)

    def _notices(self, notice: int, now_ns: int) -> None:
        s = self._state
        if notice & Notice.GAP:
            self._gaps += 1
            self._raise(_GAP, Verdict("signal", "gap"), now_ns)
            self._last_bad[_GAP] = now_ns
        if notice & Notice.BAD_SAMPLE:
            self._bad_sample(now_ns)
        for bit, field, verdict, kind, detail in _PER_JOINT:
            if notice & bit:
                for i, joint in enumerate(self.facts.joints):
                    if s[field][i]:
                        key = Key(kind, detail, joint)
                        self._raise(key, Verdict(verdict, detail, joint), now_ns)
                        self._flagged[key] = (field, i)
        if notice & Notice.LINK_TORQUE:
            self._condition.sensors_changed()
        if notice & Notice.DRIFTED:
            self._drifted(now_ns)
        if notice & _EVENT_NOTICES:
            for said in self._events.after_step(notice, self._condition.guided):
                self._say(said, now_ns)
            self._condition.loaded(self._events.since_start)

    def _drifted(self, now_ns: int) -> None:
        """Friction of some joint has left what was commissioned, slowly."""
        for place in np.flatnonzero(self._state["drifted"]).tolist():
            verdict = trend.verdict(self.facts, self.blocks, place)
            key = Key("drift", verdict.detail, verdict.joint)
            self._raise(key, verdict, now_ns)
            self._flagged[key] = ("drifted", place)

    def _bad_sample(self, now_ns: int) -> None:
        """A sample was not credible: an alarm per joint and reason, cleared by quiet."""
        i = int(self._outputs["signal_joint"])
        joint = self.facts.joints[i] if i >= 0 else None
        detail = Signal(int(self._outputs["signal"])).name.lower().replace("_", "-")
        key = Key("signal", detail, joint)
        self._raise(key, Verdict("signal", detail, joint), now_ns)
        self._last_bad[key] = now_ns

    def _say(self, said: Statement, now_ns: int) -> None:
        """Send a statement on an event, and what it means for its alarm."""
        body = self._times(now_ns) | {
            "event": said.event,
            "open": said.open,
            "lasting": said.lasting,
            "continues": said.continues,
        }
        body |= _fields(said.verdict)
        body |= {"explanations": list(said.explanations), "contact": said.touch and said.touch._asdict()}
        self._send("verdict", body)
        if said.alarm is not None:
            self._announce(said.alarm, now_ns)

    def _robot(self, payload: bytes, received_ns: int) -> None:
        condition = wire.decode_condition(payload, len(self.facts.joints))
        if self._condition.refused:
            self._refused_ns = received_ns
        change = self._condition.heard(condition, received_ns)
        if change.other_robot:
            text = f"{condition.serial!r} is not the serial {self.facts.serial!r} of the configuration"
            self._raise(_OTHER_ROBOT, Verdict("signal", "other-serial"), received_ns, text)
            return
        self._clear(_OTHER_ROBOT, received_ns)
        if change.rebooted:
            self._aligner.restart()

    def _refuse(self, error: WireError, received_ns: int) -> None:
        """Count a message that does not keep to the wire format and call it once until it was quiet."""
        self._state["wire_errors"] += 1
        key = Key("wire", error.kind)
        self._raise(key, Verdict("signal", error.kind), received_ns, text=str(error))
        self._last_bad[key] = received_ns

    def _host_says(self, payload: bytes, received_ns: int) -> None:
        """Take in what happened to the daemon: its figures, the clock's offset, failures and recoveries."""
        message = wire.decode_host(payload)
        if message.utc is not None:
            self._utc = message.utc
        if message.loop is not None:
            self._host = message.loop
        if message.failed is not None:
            key = Key("system", message.failed)
            self._raise(key, Verdict("system", message.failed), received_ns, message.text)
        if message.recovered is not None:
            self._clear(Key("system", message.recovered), received_ns)

    def _clear_passed(self, now_ns: int) -> None:
        """Clear what single messages raised after a quiet time, and what stands with a flag of the step."""
        for key, bad_ns in list(self._last_bad.items()):
            quiet_ns = _WIRE_QUIET_NS if key.kind == "wire" else self.facts.quiet_ns
            if now_ns - bad_ns > quiet_ns:
                del self._last_bad[key]
                self._clear(key, now_ns)
        for key, (field, i) in list(self._flagged.items()):
            if not self._state[field][i]:
                del self._flagged[key]
                self._clear(key, now_ns)

    def _raise(self, key: Key, verdict: Verdict, now_ns: int, text: str = "") -> None:
        if self._board.stands(key):
            return
        self._state["events"] += 1
        self._state["verdicts"][VERDICTS.index(verdict.verdict)] += 1
        transition = self._board.raised(key, verdict, int(self._state["events"]))
        if transition is not None:
            self._announce(transition, now_ns, text)

    def _clear(self, key: Key, now_ns: int) -> None:
        transition = self._board.cleared(key)
        if transition is not None:
            self._announce(transition, now_ns)

    def _announce(self, transition: Transition, now_ns: int, text: str = "") -> None:
        key, alarm = transition
        kinds, standing = list(KINDS), [one.kind for one in self._board.standing()]
        self._state["alarms_raised"][kinds.index(alarm.kind)] += self._board.stands(key)
        self._state["alarms_standing"] = [standing.count(kind) for kind in kinds]
        body = self._times(now_ns) | {"event": alarm.event} | _fields(alarm.verdict)
        body |= {"state": alarm.state, "kind": alarm.kind, "priority": KINDS[alarm.kind]}
        if text:
            body["text"] = text
        self._send("alarm", body)

    def _times(self, now_ns: int) -> dict[str, Any]:
        """Return the time by the robot's clock [s], going on by ours while it is silent, and UTC."""
        robot_ns = int(self._inputs["t_ns"]) + max(0, now_ns - self._sample_ns if self._sample_ns else 0)
        return {"t": robot_ns / 1e9, "utc": self._utc_text(now_ns), "run": self.run}

    def _utc_text(self, now_ns: int) -> str | None:
        if self._utc is None:
            return None
        moment = _EPOCH + timedelta(microseconds=(now_ns + self._utc[0]) // 1000)
        return moment.isoformat(timespec="microseconds").replace("+00:00", "Z")

    def _send(self, topic: str, body: dict[str, Any]) -> None:
        number = f"{topic}_seq"
        self._state[number] += 1
        body = {"seq": int(self._state[number])} | body
        self._out.append(Message(topic, wire.pack(body), body))

    def _health(self, now_ns: int) -> None:
        s, out = self._state, self._outputs
        self._condition.account(now_ns)
        counts = ("received", "stepped", "lost", "late", "duplicates", "refused", "wire_errors", "restarts")
        self._send(
            "health",
            self._times(now_ns)
            | {
                "coverage": _word(Coverage(int(out["coverage_whole"]))),
                "reason": _word(Reason(int(out["reason_whole"]))),
                "joints": {
                    joint: [_word(Coverage(int(c))), _word(Reason(int(r)))]
                    for joint, c, r in zip(self.facts.joints, out["coverage"], out["reason"], strict=True)
                },
                "band_ratio": dict(zip(self.facts.rows, map(float, s["ratio_peak"]), strict=True)),
                "counts": {name: int(s[name]) for name in counts} | {"bad": int(s["bad"][1:].sum())},
                "standing": [
                    [one.kind, one.verdict.detail, one.verdict.joint] for one in self._board.standing()
                ],
                "ignored": ["tau_link"] if self._joints.ignores_link_torque else [],
                "loop": self._host,
            },
        )

        s["ratio_peak"] = 0.0

    def coverage_ns(self, now_ns: int) -> NDArray[np.int64]:
        """Return the time [ns] spent until the tick of `now_ns` in each (coverage, reason)."""
        return self._condition.accounted(now_ns)

    def snapshot(self) -> bytes:
        """Return all that a pipeline elsewhere needs to go on from here."""
        packed: bytes = msgpack.packb(
            {
                "version": SNAPSHOT_VERSION,
                "state": self.blocks.state.tobytes(),
                "inputs": self.blocks.inputs.tobytes(),
                "outputs": self.blocks.outputs.tobytes(),
                "align": self._aligner.snapshot(),
                "condition": self._condition.snapshot(),
                "alarms": self._board.snapshot(),
                "events": self._events.snapshot(),
                "sample_ns": self._sample_ns,
                "silent": self._silent,
                "first_tick_ns": self._first_tick_ns,
                "refused_ns": self._refused_ns,
                "second": list(self._second),
                "gaps": self._gaps,
                "health_ns": self._health_ns,
                "last_bad": [[list(key), at] for key, at in self._last_bad.items()],
                "flagged": [[list(key), *flag] for key, flag in self._flagged.items()],
                "utc": self._utc and list(self._utc),
                "host": self._host,
                "ignores_link_torque": self._joints.ignores_link_torque,
            }
        )
        return packed

    def restore(self, snapshot: bytes) -> None:
        """Go on from a snapshot; an empty one is a fresh start.

        Raises
        ------
        ValueError
            When the snapshot is of another version or of blocks of another size.
        """
        if not snapshot:
            return
        saved = msgpack.unpackb(snapshot, strict_map_key=False)
        if saved["version"] != SNAPSHOT_VERSION:
            raise ValueError(f"snapshot of version {saved['version']}; expected {SNAPSHOT_VERSION}")
        for name in ("state", "inputs", "outputs"):
            block = getattr(self.blocks, name)
            if len(saved[name]) != block.nbytes:
                raise ValueError(f"{name} of {len(saved[name])} bytes; expected {block.nbytes}")
            block.view("u1")[:] = memoryview(saved[name])
        self._aligner.restore(saved["align"])
        self._condition.restore(saved["condition"])
        self._board.restore(saved["alarms"])
        self._events.restore(saved["events"])
        self._sample_ns, self._silent = saved["sample_ns"], saved["silent"]
        self._first_tick_ns = saved["first_tick_ns"]
        self._refused_ns, self._second = saved["refused_ns"], tuple(saved["second"])
        self._gaps = saved["gaps"]
        self._health_ns = saved["health_ns"]
        self._last_bad = {Key(*key): at for key, at in saved["last_bad"]}
        self._flagged = {Key(*key): (field, i) for key, field, i in saved["flagged"]}
        self._utc = saved["utc"] and tuple(saved["utc"])
        self._host = saved["host"]
        self._joints.ignores_link_torque = saved["ignores_link_torque"]


def _word(value: Coverage | Reason) -> str:
    return value.name.lower().replace("_", "-")


def _fields(v: Verdict) -> dict[str, Any]:
    """Return the fields that verdicts and alarms share, in their order."""
    return {
        "verdict": v.verdict,
        "detail": v.detail,
        "joint": v.joint,
        "link": v.link,
        "probability": v.probability,
        "alternatives": list(v.alternatives),
        "size": v.size and v.size._asdict(),
        "onset_t": v.onset_t,
    }
