"""The byte formats of the wire, in and out: msgpack maps under a topic.

Any bytes give a message or a `WireError`, nothing else. A joint sample is decoded straight into the bytes of
the `inputs` block, so that handing it to the step is one copy.
"""

from __future__ import annotations

import math
import reprlib
import struct
from collections.abc import Mapping, Sequence
from typing import Any, NamedTuple

import msgpack
from msgpack import unpackb

from monitor.errors import WireError

VERSION = 1
_LATEST = 2**62  # of seq and t_ns [ns]: sums with them stay below 2^63
LONGEST = 1 << 20  # msgpack itself takes no length on trust that is longer than the message
_LEAST_KEYS = 6  # v, seq, t_ns, q, qd, tau
_LARGEST = 1e6  # kg, m, kg m²: no robot carries more, and sums of squares stay finite
_NUMBERS = frozenset((float, int))
_NO_BASE = bytes(8 * 13)
_SHORT = reprlib.Repr()  # an error says what was found in a few words, however much it was
_SHORT.maxlevel, _SHORT.maxlist, _SHORT.maxstring, _SHORT.maxother = 2, 8, 60, 60
MODES = ("work", "guided", "calibrating", "stopped")
SUPPORTS = ("ground", "hoisted", "carried", "docked")


class JointSample(NamedTuple):
    """One message of topic `joints`, ready for the `inputs` block."""

    seq: int
    t_ns: int  # robot clock
    body: bytes  # t_ns, seq, q, qd, tau, base state, tau_cmd, tau_link, feet: as in `inputs`


class Payload(NamedTuple):
    """An announced payload in axes of the tool frame: kg, m, kg m² about its centre of mass."""

    mass: float
    com: tuple[float, float, float]
    inertia: tuple[tuple[float, float, float], ...]


class Condition(NamedTuple):
    """One message of topic `robot`: what the robot says of itself. None where it does not say."""

    serial: str | None
    boot: str | None
    mode: str | None
    drive: tuple[int, ...] | None
    brake: tuple[int, ...] | None
    stop: str | None
    tool: str | None
    payload: Payload | None
    payload_known: bool
    support: str | None
    program: str | None
    revision: str | None


class Host(NamedTuple):
    """One message of topic `host`: what happened to the daemon. None where it does not say."""

    utc: tuple[int, int] | None  # offset of UTC to our clock and its uncertainty, ns
    loop: dict[str, int] | None  # figures of the loop
    failed: str | None  # what failed, and in words why
    text: str
    recovered: str | None


class JointsFormat:
    """Decodes topic `joints` for one robot.

    Parameters
    ----------
    names : sequence of str
        Joints in the configured order on the wire.
    floating : bool
        Whether each sample has to carry the state of the base.
    feet : int
        Number of configured feet.
    link_torque : sequence of int
        Places of the joints with a torque sensor at the link side.
    """

    def __init__(
        self, names: Sequence[str], floating: bool, feet: int = 0, link_torque: Sequence[int] = ()
    ) -> None:
        self.names = tuple(names)
        self.floating = floating
        self.feet = feet
        self._link_torque = tuple(link_torque)
        self.ignores_link_torque = False  # `tau_link` came, and no sensor is configured
        self._links = struct.Struct(f"<{len(self._link_torque)}d")
        self._no_links = self._links.pack(*[math.nan] * len(self._link_torque))
        m = len(self.names)
        self._bytes = 8 * m
        self._row = struct.Struct(f"<{m}d")
        self._rows = struct.Struct(f"<qq{3 * m}d")
        self._head = struct.Struct("<qq")
        self._no_command = self._row.pack(*[math.nan] * m)
        self._feet = struct.Struct(f"<{feet}q")
        self._no_feet = self._feet.pack(*[-1] * feet)
        self._nothing_more = _NO_BASE + self._no_command + self._no_links + self._no_feet
        # Orders of names seen so far; the configured one needs no re-ordering. Bounded: names are checked.
        self._orders: dict[tuple[Any, ...], tuple[int, ...] | None] = {self.names: None}

    def decode(self, payload: bytes) -> JointSample:
        """Return the sample in `payload` or raise WireError."""
        message = unpack(payload, "joints")
        if message.get("v") != VERSION:
            raise WireError("joints v", _SHORT.repr(message.get("v")), f"version {VERSION}", kind="version")
        seq, t_ns = message.get("seq"), message.get("t_ns")
        if type(seq) is not int or not 0 <= seq < _LATEST:
            raise WireError("joints seq", _SHORT.repr(seq), "an integer from 0 to 2^62")
        if type(t_ns) is not int or not 0 <= t_ns < _LATEST:
            raise WireError("joints t_ns", _SHORT.repr(t_ns), "nanoseconds from 0 to 2^62")
        q: Any = message.get("q")
        qd: Any = message.get("qd")
        tau: Any = message.get("tau")
        plain = len(message) == _LEAST_KEYS and not self.floating
        order = None if plain or message.get("names") is None else self._order(message["names"])
        if order is None and type(q) is type(qd) is type(tau) is list:
            body = self._pack_lists(t_ns, seq, q, qd, tau)
        elif plain and self._are_raw(q, qd, tau):
            body = b"".join((self._head.pack(t_ns, seq), q, qd, tau))
        else:
            body = b"".join(
                (
                    self._head.pack(t_ns, seq),
                    self._array("q", q, order),
                    self._array("qd", qd, order),
                    self._array("tau", tau, order),
                )
            )
        return JointSample(seq, t_ns, body + (self._nothing_more if plain else self._more(message, order)))

    def _more(self, message: dict[str, Any], order: tuple[int, ...] | None) -> bytes:
        """Return what follows tau as `inputs` holds it; check what else there is."""
        base = _base(message.get("base")) if self.floating else _NO_BASE
        tau_cmd = message.get("tau_cmd")
        commanded = self._no_command if tau_cmd is None else self._array("tau_cmd", tau_cmd, order)
        links = self._no_links
        if message.get("tau_link") is not None:
            read = self._row.unpack(self._array("tau_link", message["tau_link"], order))
            links = self._links.pack(*(read[i] for i in self._link_torque))
            self.ignores_link_torque = not self._link_torque
        feet = self._no_feet
        if self.feet and message.get("feet") is not None:
            feet = self._feet.pack(*_flags("joints feet", message["feet"], self.feet))
        return base + commanded + links + feet

    def _are_raw(self, q: Any, qd: Any, tau: Any) -> bool:
        """Whether these are raw doubles of the right length; the slow road names what is wrong."""
        return type(q) is type(qd) is type(tau) is bytes and len(q) == len(qd) == len(tau) == self._bytes

    def _pack_lists(self, t_ns: int, seq: int, q: list[Any], qd: list[Any], tau: list[Any]) -> bytes:
        """Pack the common case, three arrays of doubles, at once; the slow road names what is wrong."""
        m = len(self.names)
        if len(q) == len(qd) == len(tau) == m and _NUMBERS.issuperset(map(type, q + qd + tau)):
            try:
                return self._rows.pack(t_ns, seq, *q, *qd, *tau)
            except (struct.error, OverflowError):
                pass
        rows = (self._array("q", q, None), self._array("qd", qd, None), self._array("tau", tau, None))
        return b"".join((self._head.pack(t_ns, seq), *rows))

    def _array(self, name: str, value: Any, order: tuple[int, ...] | None) -> bytes:
        """Return the little-endian doubles of one array, in the configured order."""
        m = len(self.names)
        if type(value) is bytes:
            if len(value) != self._bytes:
                raise WireError(f"joints {name}", f"{len(value)} bytes", f"{m} doubles, {self._bytes} bytes")
            if order is None:
                return value
            value = list(self._row.unpack(value))
        if type(value) is not list or len(value) != m:
            found = f"{len(value)} values" if type(value) is list else _SHORT.repr(value)
            raise WireError(f"joints {name}", found, f"{m} values, one for each joint")
        if not _NUMBERS.issuperset(map(type, value)):
            raise WireError(f"joints {name}", _SHORT.repr(value), "numbers only")
        try:
            return self._row.pack(*(value if order is None else [value[i] for i in order]))
        except (struct.error, OverflowError):
            raise WireError(f"joints {name}", _SHORT.repr(value), "numbers a double can hold") from None

    def _order(self, names: Any) -> tuple[int, ...] | None:
        """Return where each configured joint stands in the sender's order, None when it is the same."""
        if type(names) is not list or any(type(name) is not str for name in names):
            raise WireError("joints names", _SHORT.repr(names), "a list of joint names", kind="names")
        key = tuple(names)
        if key not in self._orders:
            if sorted(key) != sorted(self.names):
                unknown = sorted(set(key) - set(self.names))
                missing = sorted(set(self.names) - set(key))
                found = f"unknown {_SHORT.repr(unknown)}, missing {_SHORT.repr(missing)}"
                raise WireError(
                    "joints names", found, f"the joints {_SHORT.repr(list(self.names))}", kind="names"
                )
            if len(self._orders) > 1000:
                self._orders = {self.names: None}
            self._orders[key] = tuple(key.index(name) for name in self.names)
        return self._orders[key]


def unpack(payload: bytes, topic: str) -> dict[str, Any]:
    """Return the msgpack map in `payload`, sizes capped, or raise WireError."""
    if len(payload) > LONGEST:
        raise WireError(topic, f"{len(payload)} bytes", f"at most {LONGEST} bytes")
    try:
        message = unpackb(payload)  # map keys have to be text or bytes: the library's default
    except (ValueError, TypeError, RecursionError, msgpack.UnpackException) as error:
        raise WireError(topic, f"{len(payload)} bytes ({type(error).__name__})", "a msgpack map") from None
    if type(message) is not dict:
        raise WireError(topic, f"a {type(message).__name__}", "a msgpack map")
    return message


def _base(value: Any) -> bytes:
    """Return the base state as `inputs` holds it: p, quat, v, w."""
    if type(value) is not dict:
        raise WireError("joints base", _SHORT.repr(value), "a map with p, quat, v, w (floating base)")
    numbers: list[float] = []
    for name, size in (("p", 3), ("quat", 4), ("v", 3), ("w", 3)):
        part = value.get(name)
        if type(part) is bytes and len(part) == 8 * size:
            part = list(struct.unpack(f"<{size}d", part))
        if type(part) is not list or len(part) != size or not _NUMBERS.issuperset(map(type, part)):
            raise WireError(f"joints base {name}", _SHORT.repr(part), f"{size} numbers")
        numbers += part
    try:
        return struct.pack("<13d", *numbers)
    except (struct.error, OverflowError):
        raise WireError("joints base", _SHORT.repr(numbers), "numbers a double can hold") from None


def decode_condition(payload: bytes, joints: int) -> Condition:
    """Return the message of topic `robot` of a robot with so many joints, or raise WireError."""
    message = unpack(payload, "robot")
    texts: dict[str, Any] = {}
    for name in ("serial", "boot", "mode", "stop", "tool", "support", "program", "revision"):
        value = message.get(name)
        if value is not None and type(value) is not str:
            raise WireError(f"robot {name}", _SHORT.repr(value), "text or null")
        texts[name] = value
    for name, allowed in (("mode", MODES), ("support", SUPPORTS)):
        if texts[name] is not None and texts[name] not in allowed:
            raise WireError(f"robot {name}", _SHORT.repr(texts[name]), " or ".join(allowed))
    flags: dict[str, Any] = {}
    for name in ("drive", "brake"):
        value = message.get(name)
        flags[name] = None if value is None else _flags(f"robot {name}", value, joints)
    payload_known = "payload" in message
    carried = _payload(message["payload"]) if message.get("payload") is not None else None
    return Condition(**texts, **flags, payload=carried, payload_known=payload_known)


def _flags(where: str, value: Any, size: int) -> tuple[int, ...]:
    # 0 and 1, or false and true: `in` compares by value.
    if type(value) is not list or len(value) != size or any(x not in (0, 1) for x in value):
        raise WireError(where, _SHORT.repr(value), f"{size} values 0 or 1")
    return tuple(int(x) for x in value)


def _payload(value: Any) -> Payload:
    if type(value) is not dict:
        raise WireError("robot payload", _SHORT.repr(value), "a map with m, c, I")
    mass = _number("robot payload m", value.get("m"))
    com = _numbers("robot payload c", value.get("c", [0.0, 0.0, 0.0]), 3)
    rows = value.get("I", [[0.0] * 3] * 3)
    if type(rows) is not list or len(rows) != 3:
        raise WireError("robot payload I", _SHORT.repr(rows), "three rows of three numbers")
    inertia = tuple(_numbers("robot payload I", row, 3) for row in rows)
    if mass < 0.0:
        raise WireError("robot payload m", repr(mass), "a mass of at least 0 kg")
    return Payload(mass, com, inertia)


def _number(where: str, value: Any) -> float:
    # Also false for NaN.
    if type(value) not in _NUMBERS or not abs(value) <= _LARGEST:
        raise WireError(where, _SHORT.repr(value), f"a number up to {_LARGEST:g}")
    return float(value)


def _numbers(where: str, value: Any, size: int) -> tuple[float, float, float]:
    if type(value) is not list or len(value) != size:
        raise WireError(where, _SHORT.repr(value), f"{size} numbers")
    x, y, z = (_number(where, part) for part in value)
    return x, y, z


def decode_host(payload: bytes) -> Host:
    """Return the message of topic `host`, or raise WireError."""
    message = unpack(payload, "host")
    utc: Any = message.get("utc_offset_ns"), message.get("utc_uncertainty_ns")
    if utc == (None, None):
        utc = None
    elif not all(map(_is_int64, utc)):
        raise WireError("host utc_offset_ns, utc_uncertainty_ns", _SHORT.repr(utc), "two integers of 64 bits")
    loop = message.get("loop")
    if loop is not None and not (type(loop) is dict and all(_is_int64(figure) for figure in loop.values())):
        raise WireError("host loop", _SHORT.repr(loop), "figures by name")
    texts = {name: message.get(name) for name in ("failed", "text", "recovered")}
    for name, value in texts.items():
        if value is not None and type(value) is not str:
            raise WireError(f"host {name}", _SHORT.repr(value), "text or null")
    return Host(utc, loop, texts["failed"], texts["text"] or "", texts["recovered"])


def _is_int64(value: Any) -> bool:
    return type(value) is int and -(2**63) < value < 2**63


def pack(message: Mapping[str, Any]) -> bytes:
    """Return the bytes of an outgoing message."""
    packed: bytes = msgpack.packb(message)
    return packed
