"""The metrics for Prometheus: read from the loop's shared blocks when someone asks, never in the loop.

`METRICS` declares each metric once: name, type, meaning, how it is read, labels. The collector exports them
in this order and `table` writes them down for people. All labels are known from the start, so that a counter
is seen at 0 before it is first seen at 1. When the loop is started again its counters may begin anew, as
Prometheus expects of counters.
"""

from __future__ import annotations

import platform
import threading
import time
from collections.abc import Callable, Iterable, Iterator
from enum import IntEnum
from itertools import accumulate
from typing import Any, NamedTuple
from wsgiref.simple_server import WSGIServer

from prometheus_client import CollectorRegistry, registry, start_http_server
from prometheus_client.metrics_core import (
    CounterMetricFamily,
    GaugeMetricFamily,
    HistogramMetricFamily,
    Metric,
)
from prometheus_client.utils import floatToGoString

from monitor.errors import SystemFault
from monitor.flow import trend
from monitor.flow.layout import KINDS, LATENESS_EDGES_S, VERDICTS, Coverage, Facts, Reason, Right, Signal
from monitor.setup.build import Setup
from monitor.setup.shared import Shared

# A loop whose last tick is older than this sees nothing, whatever its blocks still say.
_STANDS_STILL_NS = 1_000_000_000
_UNSEEN = {"coverage": Coverage.BLIND, "reason": Reason.NO_STREAM}

# Values of the labels in their declared order, then the value; a histogram gives (buckets, sum).
Row = tuple[Any, ...]


class Source(NamedTuple):
    """What the metrics are read from."""

    facts: Facts
    state: Any  # np.void: records that view the shared blocks
    outputs: Any
    loop: Any
    build: Row


class Declared(NamedTuple):
    """One metric."""

    name: str
    type: str  # counter, gauge or histogram
    meaning: str
    read: Callable[[Source], Iterable[Row]]
    labels: tuple[str, ...] = ()


def _state(field: str) -> Callable[[Source], Iterable[Row]]:
    return lambda s: [(s.state[field],)]


def _loop(field: str) -> Callable[[Source], Iterable[Row]]:
    return lambda s: [(s.loop[field],)]


def _word(member: IntEnum) -> str:
    return member.name.lower().replace("_", "-")


def _measured(s: Source, unit: str) -> Iterator[Row]:
    return _rows_of(s, s.state["tau"], unit)


def _joint_rows(s: Source, field: str, unit: str) -> Iterator[Row]:
    return _rows_of(s, s.outputs[field], unit)


def _rows_of(s: Source, values: Any, unit: str) -> Iterator[Row]:
    """Joint and value of the rows of v, or of all that are judged, which belong to joints with this unit."""
    base = len(s.facts.rows) - len(s.facts.link_torque) - len(s.facts.joints)
    count = len(values)
    rows = zip(s.facts.rows[:count], s.facts.units[:count], values, strict=True)
    return ((joint, value) for joint, its_unit, value in list(rows)[base:] if its_unit == unit)


def _both_bandwidths(s: Source, field: str, unit: str) -> Iterator[Row]:
    for bandwidth in ("fast", "slow"):
        for joint, value in _joint_rows(s, f"{field}_{bandwidth}", unit):
            yield joint, bandwidth, value


def _link_torque(s: Source) -> Iterator[Row]:
    joints = (s.facts.joints[place] for place in s.facts.link_torque)
    return zip(joints, s.state["tau_link"], strict=True)


def _trends(s: Source, field: str) -> Iterator[Row]:
    """Joint, parameter and value, as shares of the limits."""
    base = len(s.facts.rows) - len(s.facts.link_torque) - len(s.facts.joints)
    for joint, values in zip(s.facts.rows[base:], s.state[field][base:], strict=True):
        for parameter, value in zip(trend.DETAILS, values, strict=True):
            yield joint, parameter, value


def _ratios(s: Source) -> Iterator[Row]:
    for unit in ("N m", "N"):
        yield from _joint_rows(s, "ratio", unit)


def _feet(s: Source, field: str) -> Iterator[Row]:
    for foot, force in zip(s.facts.feet, s.outputs[field], strict=True):
        yield from ((foot, axis, value) for axis, value in zip("xyz", force, strict=True))


def _one_of(words: type[IntEnum], value: int, *labels: str) -> Iterator[Row]:
    """A state as Prometheus keeps it: a series per possible word, 1 for the one that holds."""
    return ((*labels, _word(member), member == value) for member in words)


def _sees(s: Source) -> bool:
    return time.monotonic_ns() - int(s.loop["tick_ns"]) < _STANDS_STILL_NS


def _of_robot(s: Source, words: type[IntEnum], field: str) -> Iterator[Row]:
    return _one_of(words, s.outputs[f"{field}_whole"] if _sees(s) else _UNSEEN[field])


def _of_joints(s: Source, words: type[IntEnum], field: str) -> Iterator[Row]:
    sees = _sees(s)
    for joint, value in zip(s.facts.joints, s.outputs[field], strict=True):
        yield from _one_of(words, value if sees else _UNSEEN[field], joint)


def _coverage_seconds(s: Source) -> Iterator[Row]:
    for coverage in Coverage:
        for reason in Reason:
            # Watching has no reason, and whatever has none is watching.
            if (coverage == Coverage.WATCHING) == (reason == Reason.NONE):
                yield _word(coverage), _word(reason), s.state["coverage_ns"][coverage, reason] / 1e9


def _by_kind(s: Source, field: str) -> Iterator[Row]:
    return ((*kind, value) for kind, value in zip(KINDS.items(), s.state[field], strict=True))


def _rights(s: Source) -> Iterator[Row]:
    for right in ("priority", "cpu", "memory"):
        yield from _one_of(Right, s.loop[f"right_{right}"], right)


def _lateness(s: Source) -> Iterator[Row]:
    edges = [*map(floatToGoString, LATENESS_EDGES_S), "+Inf"]
    counts = accumulate(s.loop["lateness"].tolist())
    yield list(zip(edges, counts, strict=True)), s.loop["lateness_sum_ns"] / 1e9


def _utc_s(s: Source, field: str) -> Iterator[Row]:
    stamp_ns, offset_ns = int(s.loop[field]), int(s.loop["utc_offset_ns"])
    yield ((stamp_ns + offset_ns) / 1e9 if stamp_ns and offset_ns else 0.0,)


METRICS = (
    # what the robot does that its model does not explain
    Declared(
        "limbtell_residual_newton_meters",
        "gauge",
        "Torque the model does not explain, by rotating joint and bandwidth of the residual; where a torque "
        "sensor lies between them, link side and motor side apart.",
        lambda s: _both_bandwidths(s, "row", "N m"),
        ("joint", "bandwidth"),
    ),
    Declared(
        "limbtell_residual_newtons",
        "gauge",
        "Force the model does not explain, by prismatic joint and bandwidth of the residual.",
        lambda s: _both_bandwidths(s, "row", "N"),
        ("joint", "bandwidth"),
    ),
    Declared(
        "limbtell_band_newton_meters",
        "gauge",
        "Residual of a rotating joint from which on an event opens, as it stands now, by bandwidth.",
        lambda s: _both_bandwidths(s, "band", "N m"),
        ("joint", "bandwidth"),
    ),
    Declared(
        "limbtell_band_newtons",
        "gauge",
        "Residual of a prismatic joint from which on an event opens, as it stands now, by bandwidth.",
        lambda s: _both_bandwidths(s, "band", "N"),
        ("joint", "bandwidth"),
    ),
    Declared(
        "limbtell_explained_torque_newton_meters",
        "gauge",
        "Part of the fast residual of a rotating joint that tracked friction and lasting faults explain.",
        lambda s: _joint_rows(s, "explained", "N m"),
        ("joint",),
    ),
    Declared(
        "limbtell_explained_force_newtons",
        "gauge",
        "Part of the fast residual of a prismatic joint that tracked friction and lasting faults explain.",
        lambda s: _joint_rows(s, "explained", "N"),
        ("joint",),
    ),
    Declared(
        "limbtell_band_ratio",
        "gauge",
        "Fast residual, less what is explained, as a share of its band; above 1 an event opens.",
        _ratios,
        ("joint",),
    ),
    Declared(
        "limbtell_body_ratio",
        "gauge",
        "The same for all joints together; above 1 an event opens though no joint alone stands out.",
        lambda s: [(s.outputs["body_ratio"],)],
    ),
    Declared(
        "limbtell_drift_ratio",
        "gauge",
        "Friction and offset of a joint beyond the commissioned ones, over hours, as a share of the limit.",
        lambda s: _trends(s, "trend"),
        ("joint", "parameter"),
    ),
    Declared(
        "limbtell_drift_ratio_sd",
        "gauge",
        "Standard deviation of that share; 0 before the joint has moved.",
        lambda s: _trends(s, "trend_sd"),
        ("joint", "parameter"),
    ),
    Declared(
        "limbtell_measured_torque_newton_meters",
        "gauge",
        "Torque of a rotating joint as its drive reports it, in terms of the model.",
        lambda s: _measured(s, "N m"),
        ("joint",),
    ),
    Declared(
        "limbtell_measured_force_newtons",
        "gauge",
        "Force of a prismatic joint as its drive reports it, in terms of the model.",
        lambda s: _measured(s, "N"),
        ("joint",),
    ),
    Declared(
        "limbtell_link_torque_newton_meters",
        "gauge",
        "Torque at the link side of a joint as its sensor reads it, in terms of the model.",
        _link_torque,
        ("joint",),
    ),
    Declared(
        "limbtell_model_torque_newton_meters",
        "gauge",
        "Torque the model expects of a rotating joint.",
        lambda s: _joint_rows(s, "tau_model", "N m"),
        ("joint",),
    ),
    Declared(
        "limbtell_model_force_newtons",
        "gauge",
        "Force the model expects of a prismatic joint.",
        lambda s: _joint_rows(s, "tau_model", "N"),
        ("joint",),
    ),
    Declared(
        "limbtell_foot_force_newtons",
        "gauge",
        "Force of the ground on a foot, estimated; 0 unless planned feet carry the robot. World axes.",
        lambda s: _feet(s, "foot_force"),
        ("foot", "axis"),
    ),
    Declared(
        "limbtell_foot_force_sd_newtons",
        "gauge",
        "Standard deviation of that estimate.",
        lambda s: _feet(s, "foot_force_sd"),
        ("foot", "axis"),
    ),
    Declared(
        "limbtell_events_total",
        "counter",
        "Events that are over or became a lasting fault, by what they were held to be in the end.",
        lambda s: zip(VERDICTS, s.state["verdicts"], strict=True),
        ("verdict",),
    ),
    Declared(
        "limbtell_alarms_raised_total",
        "counter",
        "Alarms raised, or stated anew as another kind.",
        lambda s: _by_kind(s, "alarms_raised"),
        ("kind", "priority"),
    ),
    Declared(
        "limbtell_alarms_standing",
        "gauge",
        "Alarms that stand now.",
        lambda s: _by_kind(s, "alarms_standing"),
        ("kind", "priority"),
    ),
    # how far the monitor can see
    Declared(
        "limbtell_coverage",
        "gauge",
        "1 for the coverage of the whole robot, 0 for the others; blind too while the loop stands still.",
        lambda s: _of_robot(s, Coverage, "coverage"),
        ("coverage",),
    ),
    Declared(
        "limbtell_coverage_reason",
        "gauge",
        "1 for the gravest reason for the coverage of the whole robot, 0 for the others.",
        lambda s: _of_robot(s, Reason, "reason"),
        ("reason",),
    ),
    Declared(
        "limbtell_joint_coverage",
        "gauge",
        "1 for the coverage of the joint, 0 for the others; blind too while the loop stands still.",
        lambda s: _of_joints(s, Coverage, "coverage"),
        ("joint", "coverage"),
    ),
    Declared(
        "limbtell_joint_coverage_reason",
        "gauge",
        "1 for the gravest reason for the coverage of the joint, 0 for the others.",
        lambda s: _of_joints(s, Reason, "reason"),
        ("joint", "reason"),
    ),
    Declared(
        "limbtell_coverage_seconds_total",
        "counter",
        "Time spent in each coverage of the whole robot, by its gravest reason.",
        _coverage_seconds,
        ("coverage", "reason"),
    ),
    # the stream of samples
    Declared("limbtell_samples_received_total", "counter", "Joint samples received.", _state("received")),
    Declared(
        "limbtell_samples_stepped_total",
        "counter",
        "Joint samples that went through the step.",
        _state("stepped"),
    ),
    Declared("limbtell_samples_lost_total", "counter", "Joint samples waited for in vain.", _state("lost")),
    Declared(
        "limbtell_samples_late_total",
        "counter",
        "Joint samples dropped because they came after they were given up.",
        _state("late"),
    ),
    Declared(
        "limbtell_samples_duplicate_total",
        "counter",
        "Joint samples dropped because they had come before.",
        _state("duplicates"),
    ),
    Declared(
        "limbtell_samples_refused_total",
        "counter",
        "Joint samples dropped because they are another robot's.",
        _state("refused"),
    ),
    Declared(
        "limbtell_samples_bad_total",
        "counter",
        "Joint samples that were not credible, by the first reason found.",
        lambda s: [(_word(signal), s.state["bad"][signal]) for signal in Signal if signal != Signal.OK],
        ("reason",),
    ),
    Declared(
        "limbtell_samples_torque_at_limit_total",
        "counter",
        "Joint samples in which the drive of the joint was at its torque limit.",
        lambda s: zip(s.facts.joints, s.state["at_limit"], strict=True),
        ("joint",),
    ),
    Declared(
        "limbtell_wire_errors_total",
        "counter",
        "Messages that did not keep to the wire format.",
        _state("wire_errors"),
    ),
    Declared(
        "limbtell_robot_restarts_total",
        "counter",
        "Times the robot or its publisher began to count samples anew.",
        _state("restarts"),
    ),
    Declared(
        "limbtell_rebases_total",
        "counter",
        "Times the torque balance began anew, after a gap, bad samples or a change of condition.",
        _state("rebased"),
    ),
    Declared(
        "limbtell_last_sample_robot_time_seconds",
        "gauge",
        "Time of the last credible joint sample by the clock of the robot.",
        lambda s: [(s.state["raw_t_ns"] / 1e9,)],
    ),
    # the loop
    Declared("limbtell_ticks_total", "counter", "Ticks of the loop.", _loop("ticks")),
    Declared(
        "limbtell_tick_overruns_total",
        "counter",
        "Deadlines that passed while a tick was still busy.",
        _loop("overruns"),
    ),
    Declared(
        "limbtell_full_ticks_total",
        "counter",
        "Ticks that took in as many messages as one may.",
        _loop("full_ticks"),
    ),
    Declared("limbtell_tick_lateness_seconds", "histogram", "How late ticks began.", _lateness),
    Declared(
        "limbtell_tick_busy_seconds_total",
        "counter",
        "Time spent in ticks.",
        lambda s: [(s.loop["busy_ns"] / 1e9,)],
    ),
    Declared(
        "limbtell_input_messages_total", "counter", "Messages taken from the input socket.", _loop("messages")
    ),
    Declared(
        "limbtell_published_total", "counter", "Alarms, verdicts and health sent out.", _loop("published")
    ),
    Declared(
        "limbtell_publish_dropped_total",
        "counter",
        "Outgoing messages dropped because they could not be sent at once.",
        _loop("publish_dropped"),
    ),
    Declared(
        "limbtell_record_dropped_total",
        "counter",
        "Tuples and ticks the recorder did not get.",
        _loop("record_dropped"),
    ),
    Declared(
        "limbtell_late_compilations_total",
        "counter",
        "Kernels compiled after the start, which is a fault.",
        _loop("late_compilations"),
    ),
    Declared(
        "limbtell_right",
        "gauge",
        "1 for the answer of the machine to the realtime right the loop asked for, 0 for the others.",
        _rights,
        ("right", "answer"),
    ),
    Declared(
        "limbtell_heartbeat_timestamp_seconds",
        "gauge",
        "UTC of the last tick, as Unix time; 0 before the first.",
        lambda s: _utc_s(s, "tick_ns"),
    ),
    Declared(
        "limbtell_loop_start_timestamp_seconds",
        "gauge",
        "UTC of the start of the loop, as Unix time; 0 before it.",
        lambda s: _utc_s(s, "started_ns"),
    ),
    Declared(
        "limbtell_utc_uncertainty_seconds",
        "gauge",
        "How far UTC may be off from the reading of the system clock.",
        lambda s: [(s.loop["utc_uncertainty_ns"] / 1e9,)],
    ),
    Declared(
        "limbtell_build_info",
        "gauge",
        "Always 1; the labels say what runs: version of limbtell and Python, robot, id of the start.",
        lambda s: [(*s.build, 1)],
        ("version", "python", "robot", "run"),
    ),
)

_FAMILIES: dict[str, Callable[..., Any]] = {
    "counter": CounterMetricFamily,
    "gauge": GaugeMetricFamily,
    "histogram": HistogramMetricFamily,
}


class Collector(registry.Collector):
    """Reads all metrics when it is asked.

    Parameters
    ----------
    setup : Setup
        The robot and its configuration.
    shared : Shared
        The loop's blocks, mapped.
    run : str
        Id of the daemon's start.
    version : str
        Version of limbtell.
    """

    def __init__(self, setup: Setup, shared: Shared, run: str, version: str) -> None:
        facts = setup.facts
        build = (version, platform.python_version(), facts.robot, run)
        self._source = Source(facts, shared.state[0], shared.outputs[0], shared.loop[0], build)

    def collect(self) -> Iterator[Metric]:
        """Yield every metric of `METRICS` as it is now."""
        for declared in METRICS:
            family = _FAMILIES[declared.type](declared.name, declared.meaning, labels=declared.labels)
            n = len(declared.labels)
            for row in declared.read(self._source):
                if declared.type == "histogram":
                    family.add_metric(row[:n], *row[n:])
                else:
                    family.add_metric(row[:n], float(row[n]))
            yield family


class Server:
    """The metrics on HTTP, answered by threads of this process."""

    def __init__(self, server: WSGIServer, thread: threading.Thread) -> None:
        self._server, self._thread = server, thread
        self.port = server.server_port

    def close(self) -> None:
        """Stop answering and free the port."""
        self._server.shutdown()
        self._thread.join()
        self._server.server_close()


def serve(collector: Collector, host: str, port: int) -> Server:
    """Serve the metrics at http://host:port/metrics; port 0 takes any that is free.

    Raises
    ------
    SystemFault
        The port is in use or the address is not one of this machine.
    """
    # Described by what it collects, so that a scrape may ask for some metrics by name.
    ours = CollectorRegistry(auto_describe=True)
    ours.register(collector)
    try:
        return Server(*start_http_server(port, host, ours))
    except (OSError, UnicodeError) as error:
        raise SystemFault(
            f"metrics at {host}:{port}",
            getattr(error, "strerror", None) or str(error),
            "a port that is free at an address of this machine",
            "Stop the program that uses it, or change `desk.metrics_port` or `desk.metrics_host` "
            "in the configuration.",
        ) from error


def table() -> str:
    """Return all metrics as a Markdown table: name, type, labels, meaning."""
    lines = ["| metric | type | labels | meaning |", "|---|---|---|---|"]
    for m in METRICS:
        lines.append(f"| `{m.name}` | {m.type} | {', '.join(m.labels)} | {m.meaning} |")
    return "\n".join(lines) + "\n"
