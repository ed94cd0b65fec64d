"""The metrics, judged by the parsers of `prometheus_client`, by `promtool` and by a real Prometheus.

What the values should be is taken from the messages the data path sends out, not from the blocks.
"""

from __future__ import annotations

import json
import shutil
import socket
import subprocess
import time
from collections import Counter
from collections.abc import Iterable, Iterator, Mapping
from contextlib import closing
from pathlib import Path
from typing import Any, NamedTuple
from urllib.parse import urlencode
from urllib.request import ProxyHandler, Request, build_opener

import msgpack
import numpy as np
import pytest
from prometheus_client import CollectorRegistry, generate_latest
from prometheus_client.metrics_core import Metric
from prometheus_client.openmetrics.parser import text_string_to_metric_families as parse_openmetrics
from prometheus_client.parser import text_string_to_metric_families as parse

from monitor.edges.metrics import METRICS, Collector, serve, table
from monitor.errors import SystemFault
from monitor.flow.layout import KINDS, LATENESS_EDGES_S, VERDICTS, Coverage, Reason, Right, Signal
from monitor.flow.pipeline import Message, Pipeline
from monitor.setup.build import Setup, build
from monitor.setup.config import loads
from monitor.setup.shared import Shared, attach
from replay.simulate import Push, Rind, Schedule
from tests.publisher.build import require

Series = tuple[str, frozenset[tuple[str, str]]]

MINUTE_NS = 60_000_000_000
UTC_OFFSET_NS = 1_772_000_000_123_456_789
PUSHED = Schedule(pushes=(Push(1.2, 0.4, "fork", (0.0, 120.0, 0.0)),))

# A floating base with a rail and a hinge: rows of both units behind the six of the base.
BODY = (
    "<link name='{0}'><inertial><mass value='1'/>"
    "<inertia ixx='0.1' iyy='0.1' izz='0.1' ixy='0' ixz='0' iyz='0'/></inertial></link>"
)
JOINT = (
    "<joint name='{0}' type='{1}'><parent link='{2}'/><child link='{3}'/><axis xyz='0 0 1'/>"
    "<limit lower='-1' upper='1' effort='10' velocity='1'/></joint>"
)
HOIST_URDF = (
    "<robot name='hoist'>"
    + "".join(BODY.format(name) for name in ("body", "sledge", "flap"))
    + JOINT.format("rail", "prismatic", "body", "sledge")
    + JOINT.format("hinge", "revolute", "sledge", "flap")
    + "</robot>"
)
HOIST_TOML = """\
schema = 1
[robot]
urdf = "hoist.urdf"
base = "floating"
[[robot.joint]]
name = "hinge"
rated_torque = 10.0
[[robot.joint]]
name = "rail"
rated_torque = 20.0
"""


class Desk(NamedTuple):
    """A data path on mapped blocks and, on a mapping of its own, the collector."""

    pipeline: Pipeline
    shared: Shared  # as the loop has it
    collector: Collector


@pytest.fixture
def rind(rind_setup: Setup, tmp_path: Path) -> Desk:
    shared = attach(tmp_path / "blocks", rind_setup.sizes)
    blocks = rind_setup.blocks()._replace(state=shared.state, outputs=shared.outputs)
    mapped = attach(tmp_path / "blocks", rind_setup.sizes)
    return Desk(rind_setup.pipeline("4f2a", blocks), shared, Collector(rind_setup, mapped, "4f2a", "0.1.0"))


def sample(robot: Rind, seq: int) -> bytes:
    now = robot.step()
    numbers = {name: getattr(now, name).tolist() for name in ("q", "qd", "tau")}
    if seq == 700:
        numbers["q"] = [float("nan")] * 7
    packed: bytes = msgpack.packb({"v": 1, "seq": seq, "t_ns": now.t_ns} | numbers)
    return packed


def drive(pipeline: Pipeline, seconds: float) -> Iterator[list[Message]]:
    """A pushed robot on a poor line, tick by tick: lost, late, doubled, cut and incredible samples."""
    robot = Rind(1, PUSHED)
    held = b""
    for k in range(round(1000 * seconds)):
        payload, now_ns = sample(robot, k), 10**9 + k * 10**6
        if k % 500 == 0:
            pipeline.feed("robot", msgpack.packb(robot.condition()), now_ns)
        match k % 400:
            case 199 | 399:
                held, arrived = payload, []
            case 220:  # the one that was held back is given up long before
                arrived = [payload, held]
            case 20:
                arrived = [payload, payload]
            case 30:
                arrived = [payload, payload[:-3]]
            case _:
                arrived = [payload]
        for message in arrived:
            pipeline.feed("joints", message, now_ns)
        yield pipeline.tick(now_ns + 300_000)


def exposition(collector: Collector) -> str:
    registry = CollectorRegistry()
    registry.register(collector)
    return generate_latest(registry).decode()


def series(families: Iterable[Metric]) -> dict[Series, float]:
    samples = [sample for family in families for sample in family.samples]
    values = {(s.name, frozenset(s.labels.items())): float(s.value) for s in samples}
    assert len(values) == len(samples), "a series was exported twice"
    return values


def scrape(collector: Collector) -> dict[Series, float]:
    return series(parse(exposition(collector)))


def of(name: str, **labels: str) -> Series:
    return f"limbtell_{name}", frozenset(labels.items())


def holds(values: Mapping[Series, float], name: str, label: str, **labels: str) -> list[str]:
    """Words of a state that are at 1; all others have to be at 0."""
    states = {
        dict(found)[label]: value
        for (metric, found), value in values.items()
        if metric == f"limbtell_{name}" and labels.items() <= dict(found).items()
    }
    assert set(states.values()) <= {0.0, 1.0}
    return [word for word, value in states.items() if value]


def words(members: Iterable[Any]) -> set[str]:
    return {member.name.lower().replace("_", "-") for member in members}


# --- what is exported ----------------------------------------------------------------------------


def test_every_declared_metric_is_exported_with_its_type_and_labels(rind: Desk) -> None:
    families = {family.name: family for family in parse(exposition(rind.collector))}
    for declared in METRICS:
        # The parser names a counter without its suffix.
        family = families.pop(declared.name.removesuffix("_total"))
        assert (family.type, family.documentation) == (declared.type, declared.meaning)
        for sample in family.samples:
            assert set(sample.labels) - {"le"} == set(declared.labels)
        # Rind has no prismatic joint, and no torque sensor at a link.
        assert family.samples or declared.name.endswith("_newtons") or "link_torque" in declared.name
    assert not families


def test_all_labels_are_there_before_the_loop_has_started(rind: Desk, rind_setup: Setup) -> None:
    values = scrape(rind.collector)

    def seen(name: str, label: str) -> set[str]:
        return {dict(found)[label] for (metric, found) in values if metric == f"limbtell_{name}"}

    joints = set(rind_setup.facts.joints)
    assert seen("residual_newton_meters", "joint") == joints
    assert seen("residual_newton_meters", "bandwidth") == {"fast", "slow"}
    assert seen("joint_coverage", "joint") == seen("samples_torque_at_limit_total", "joint") == joints
    assert seen("coverage", "coverage") == seen("coverage_seconds_total", "coverage") == words(Coverage)
    assert (
        seen("joint_coverage_reason", "reason") == seen("coverage_seconds_total", "reason") == words(Reason)
    )
    assert seen("samples_bad_total", "reason") == words(Signal) - {"ok"}
    assert seen("alarms_raised_total", "kind") == seen("alarms_standing", "kind") == set(KINDS)
    assert seen("events_total", "verdict") == set(VERDICTS)
    assert seen("band_newton_meters", "joint") == seen("explained_torque_newton_meters", "joint") == joints
    assert seen("measured_torque_newton_meters", "joint") == joints
    assert seen("right", "answer") == words(Right)
    assert seen("right", "right") == {"priority", "cpu", "memory"}
    counters = {metric: value for (metric, _), value in values.items() if metric.endswith("_total")}
    assert set(counters.values()) == {0.0}


def test_a_run_adds_no_series_and_never_counts_backwards(rind: Desk) -> None:
    first = before = scrape(rind.collector)
    for k, _ in enumerate(drive(rind.pipeline, 1.5)):
        if k % 100 == 0:
            now = scrape(rind.collector)
            assert now.keys() == first.keys()
            assert all(now[key] >= before[key] for key in now if key[0].endswith("_total"))
            before = now


def test_the_counters_agree_with_the_messages_sent_out(rind: Desk) -> None:
    sent = [message for tick in drive(rind.pipeline, 2.1) for message in tick]
    sent += rind.pipeline.tick(10**9 + 2_100 * 10**6 + 10**9)  # a silent second: one more report of health
    values = scrape(rind.collector)
    health = [message.body for message in sent if message.topic == "health"][-1]
    names = {
        "received": "samples_received_total",
        "stepped": "samples_stepped_total",
        "lost": "samples_lost_total",
        "late": "samples_late_total",
        "duplicates": "samples_duplicate_total",
        "refused": "samples_refused_total",
        "wire_errors": "wire_errors_total",
        "restarts": "robot_restarts_total",
    }
    for count, name in names.items():
        assert values[of(name)] == health["counts"][count], name
    assert {name for name, count in health["counts"].items() if not count} == {"refused", "restarts"}
    assert values[of("samples_bad_total", reason="non-finite")] == health["counts"]["bad"] == 1

    alarms = [message.body for message in sent if message.topic == "alarm"]
    raised = Counter(body["kind"] for body in alarms if body["state"] == "unacknowledged")
    standing = Counter(kind for kind, _, _ in health["standing"])
    assert raised["unexplained-torque"] == raised["contact"] == 1
    for kind, priority in KINDS.items():
        assert values[of("alarms_raised_total", kind=kind, priority=priority)] == raised[kind]
        assert values[of("alarms_standing", kind=kind, priority=priority)] == standing[kind]
    over = {body["event"]: body for body in alarms if body["kind"] not in ("unexplained-torque", "contact")}
    over |= {m.body["event"]: m.body for m in sent if m.topic == "verdict" and not m.body["open"]}
    held = Counter(body["verdict"] for body in over.values())
    assert held["contact"] == 1
    for verdict in VERDICTS:
        assert values[of("events_total", verdict=verdict)] == held[verdict]
    assert held.total() == max(body["event"] for body in alarms)


def test_a_push_stands_outside_its_band_and_the_robot_time_goes_on(rind: Desk) -> None:
    largest = 0.0
    for k, _ in enumerate(drive(rind.pipeline, 1.5)):
        if 1300 <= k < 1400:
            values = scrape(rind.collector)
            largest = max(largest, *(values[of("band_ratio", joint=joint)] for joint in ("swivel", "nod")))
            assert values[of("last_sample_robot_time_seconds")] == pytest.approx(k / 1000, abs=0.0021)
    assert largest > 1.0


def test_coverage_and_its_seconds_agree_with_the_reports_of_health(rind: Desk) -> None:
    for tick in drive(rind.pipeline, 1.2):
        rind.shared.loop["tick_ns"] = time.monotonic_ns() + MINUTE_NS  # fresh, however slow this test is
        for health in (message.body for message in tick if message.topic == "health"):
            values = scrape(rind.collector)
            assert holds(values, "coverage", "coverage") == [health["coverage"]]
            assert holds(values, "coverage_reason", "reason") == [health["reason"]]
            for joint, (coverage, reason) in health["joints"].items():
                assert holds(values, "joint_coverage", "coverage", joint=joint) == [coverage]
                assert holds(values, "joint_coverage_reason", "reason", joint=joint) == [reason]
    values = scrape(rind.collector)
    seconds = {
        (dict(labels)["coverage"], dict(labels)["reason"]): value
        for (name, labels), value in values.items()
        if name == "limbtell_coverage_seconds_total"
    }
    # 1200 ticks have 1199 ms between them; time is added up with each health message at the latest.
    assert 0.999 <= sum(seconds.values()) <= 1.1991
    assert seconds["watching", "none"] > 0.0
    assert seconds["blind", "settling"] > 0.0


def test_a_loop_that_stands_still_is_blind_whatever_it_said_last(rind: Desk) -> None:
    for _ in drive(rind.pipeline, 0.9):
        pass
    for lead_ns, expected in ((MINUTE_NS, ["watching"]), (-MINUTE_NS, ["blind"])):
        rind.shared.loop["tick_ns"] = time.monotonic_ns() + lead_ns
        values = scrape(rind.collector)
        assert holds(values, "coverage", "coverage") == expected
        assert holds(values, "joint_coverage", "coverage", joint="elbow") == expected


def test_residuals_carry_the_unit_and_the_name_of_their_own_row(tmp_path: Path) -> None:
    setup = build(loads(HOIST_TOML, "hoist.toml", {"hoist.urdf": HOIST_URDF}))
    shared = attach(tmp_path / "blocks", setup.sizes)
    out = shared.outputs
    # Rows: six of the base, then in order of the description rail and hinge; on the wire hinge is first.
    out["row_fast"], out["row_slow"] = [0, 0, 0, 0, 0, 0, 1.5, -2.5], [0, 0, 0, 0, 0, 0, 3.5, -4.5]
    out["tau_model"], out["ratio"] = [9, 9, 9, 9, 9, 9, 5.5, -6.5], [9, 9, 9, 9, 9, 9, 0.25, 0.75]
    out["band_fast"], out["band_slow"] = [0, 0, 0, 0, 0, 0, 7.5, 8.5], [0, 0, 0, 0, 0, 0, 9.5, 10.5]
    out["explained"], shared.state["tau"] = [9, 9, 9, 9, 9, 9, 0.5, -0.5], [9, 9, 9, 9, 9, 9, 11.5, -12.5]
    out["body_ratio"] = 0.125
    shared.state["trend"], shared.state["trend_sd"] = np.arange(24).reshape(8, 3), 0.5
    values = scrape(Collector(setup, shared, "4f2a", "0.1.0"))
    assert values[of("body_ratio")] == 0.125
    assert values[of("drift_ratio", joint="rail", parameter="offset")] == 20.0
    assert values[of("drift_ratio", joint="hinge", parameter="coulomb-friction")] == 21.0
    assert values[of("drift_ratio_sd", joint="hinge", parameter="viscous-friction")] == 0.5
    words = ("residual", "model", "band", "explained", "measured")
    found = {
        (name, dict(labels)["joint"], dict(labels).get("bandwidth")): value
        for (name, labels), value in values.items()
        if any(name.startswith(f"limbtell_{word}_") for word in words)
    }
    assert found == {
        ("limbtell_residual_newtons", "rail", "fast"): 1.5,
        ("limbtell_residual_newtons", "rail", "slow"): 3.5,
        ("limbtell_residual_newton_meters", "hinge", "fast"): -2.5,
        ("limbtell_residual_newton_meters", "hinge", "slow"): -4.5,
        ("limbtell_band_newtons", "rail", "fast"): 7.5,
        ("limbtell_band_newtons", "rail", "slow"): 9.5,
        ("limbtell_band_newton_meters", "hinge", "fast"): 8.5,
        ("limbtell_band_newton_meters", "hinge", "slow"): 10.5,
        ("limbtell_explained_force_newtons", "rail", None): 0.5,
        ("limbtell_explained_torque_newton_meters", "hinge", None): -0.5,
        ("limbtell_measured_force_newtons", "rail", None): 11.5,
        ("limbtell_measured_torque_newton_meters", "hinge", None): -12.5,
        ("limbtell_model_force_newtons", "rail", None): 5.5,
        ("limbtell_model_torque_newton_meters", "hinge", None): -6.5,
        ("limbtell_band_ratio", "rail", None): 0.25,
        ("limbtell_band_ratio", "hinge", None): 0.75,
    }


def test_what_the_step_counts_is_exported_in_the_order_of_the_wire(rind: Desk, rind_setup: Setup) -> None:
    rind.shared.state["at_limit"], rind.shared.state["rebased"] = range(7), 8
    values = scrape(rind.collector)
    assert values[of("rebases_total")] == 8
    for i, joint in enumerate(rind_setup.facts.joints):
        assert values[of("samples_torque_at_limit_total", joint=joint)] == i


def test_the_loops_own_figures_are_exported_in_base_units(rind: Desk) -> None:
    started_ns = time.monotonic_ns()
    rind.shared.loop["started_ns"], rind.shared.loop["tick_ns"] = started_ns, started_ns + 2_500_000_000
    figures = {"ticks": 11, "overruns": 12, "full_ticks": 13, "messages": 14, "published": 15}
    figures |= {"publish_dropped": 16, "record_dropped": 17, "late_compilations": 18}
    figures |= {"busy_ns": 19_500_000_000, "utc_uncertainty_ns": 250_000, "right_cpu": Right.GRANTED}
    for name, value in figures.items():
        rind.shared.loop[name] = value
    # Without an offset UTC is not known.
    assert scrape(rind.collector)[of("heartbeat_timestamp_seconds")] == 0.0
    rind.shared.loop["utc_offset_ns"] = UTC_OFFSET_NS
    values = scrape(rind.collector)
    expected = {
        "ticks_total": 11,
        "tick_overruns_total": 12,
        "full_ticks_total": 13,
        "input_messages_total": 14,
        "published_total": 15,
        "publish_dropped_total": 16,
        "record_dropped_total": 17,
        "late_compilations_total": 18,
        "tick_busy_seconds_total": 19.5,
        "utc_uncertainty_seconds": 0.00025,
    }
    assert {name: values[of(name)] for name in expected} == expected
    start_s = (started_ns + UTC_OFFSET_NS) / 1e9
    assert values[of("loop_start_timestamp_seconds")] == pytest.approx(start_s, abs=1e-3)
    assert values[of("heartbeat_timestamp_seconds")] == pytest.approx(start_s + 2.5, abs=1e-3)
    assert holds(values, "right", "answer", right="cpu") == ["granted"]
    assert holds(values, "right", "answer", right="memory") == ["not-asked"]


def test_lateness_is_a_histogram_with_cumulative_buckets(rind: Desk) -> None:
    rind.shared.loop["lateness"] = range(1, len(LATENESS_EDGES_S) + 2)
    rind.shared.loop["lateness_sum_ns"] = 1_250_000_000
    (family,) = (f for f in parse(exposition(rind.collector)) if f.name == "limbtell_tick_lateness_seconds")
    buckets = [(float(s.labels["le"]), s.value) for s in family.samples if s.name.endswith("_bucket")]
    edges = (*LATENESS_EDGES_S, float("inf"))
    assert buckets == [(edge, (i + 1) * (i + 2) / 2) for i, edge in enumerate(edges)]
    values = series([family])
    assert values[of("tick_lateness_seconds_count")] == buckets[-1][1]
    assert values[of("tick_lateness_seconds_sum")] == 1.25


def test_the_build_is_told_by_labels(rind: Desk) -> None:
    (info,) = (labels for name, labels in scrape(rind.collector) if name == "limbtell_build_info")
    assert {("version", "0.1.0"), ("robot", "rind"), ("run", "4f2a")} < info


def test_the_table_has_a_line_for_every_metric() -> None:
    lines = table().splitlines()[2:]
    assert [line.split("`")[1] for line in lines] == [declared.name for declared in METRICS]
    assert "| `limbtell_alarms_standing` | gauge | kind, priority | Alarms that stand now. |" in lines


# --- how it is served ----------------------------------------------------------------------------


def get(url: str, accept: str = "text/plain") -> str:
    # Not through a proxy: it is a port of this machine.
    opener = build_opener(ProxyHandler({}))
    with opener.open(Request(url, headers={"Accept": accept}), timeout=10) as answer:
        text: str = answer.read().decode()
        return text


def test_both_formats_are_served_and_closing_frees_the_port(rind: Desk) -> None:
    with closing(serve(rind.collector, "127.0.0.1", 0)) as server:
        url = f"http://127.0.0.1:{server.port}/metrics"
        plain = series(parse(get(url)))
        text = get(url, "application/openmetrics-text; version=1.0.0")
        openmetrics = series(parse_openmetrics(text))  # type: ignore[no-untyped-call]
        assert plain == openmetrics == scrape(rind.collector)
        asked = series(parse(get(f"{url}?name[]=limbtell_ticks_total")))
        assert asked == {of("ticks_total"): 0.0}
    with closing(serve(rind.collector, "127.0.0.1", server.port)) as again:
        assert again.port == server.port


def test_a_port_in_use_is_named_with_the_key_that_changes_it(rind: Desk) -> None:
    with socket.create_server(("127.0.0.1", 0)) as taken:
        port = taken.getsockname()[1]
        with pytest.raises(SystemFault) as caught:
            serve(rind.collector, "127.0.0.1", port)
    assert f"127.0.0.1:{port}: found Address already in use" in str(caught.value)
    assert "`desk.metrics_port`" in str(caught.value)


# TEST-NET-1 (RFC 5737), an unknown zone, and a label that is too long for any name (RFC 1035).
@pytest.mark.parametrize("host", ["192.0.2.1", "fe80::1%none", "." + "x" * 70])
def test_an_address_that_cannot_be_had_is_named_with_its_keys(rind: Desk, host: str) -> None:
    with pytest.raises(SystemFault) as caught:
        serve(rind.collector, host, 9637)
    assert f"{host}:9637: found " in str(caught.value)
    assert "`desk.metrics_port` or `desk.metrics_host`" in str(caught.value)


# --- outside judges ------------------------------------------------------------------------------


def program(name: str) -> str:
    path = shutil.which(name)
    require(path is not None, f"no {name} here")
    return str(path)


@pytest.mark.prometheus
def test_promtool_has_no_complaints(rind: Desk) -> None:
    for _ in drive(rind.pipeline, 0.5):
        pass
    check = [program("promtool"), "check", "metrics"]
    done = subprocess.run(
        check, input=exposition(rind.collector), capture_output=True, text=True, check=False
    )
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")


class Prometheus:
    """A running Prometheus that scrapes one port five times a second."""

    def __init__(self, folder: Path, target: int) -> None:
        prometheus = program("prometheus")
        with socket.create_server(("127.0.0.1", 0)) as free:
            self._address = f"127.0.0.1:{free.getsockname()[1]}"
        (folder / "prometheus.yml").write_text(
            "global: {scrape_interval: 200ms, scrape_timeout: 200ms}\n"
            "scrape_configs: [{job_name: limbtell, "
            f"static_configs: [{{targets: ['127.0.0.1:{target}']}}]}}]\n"
        )
        self._log = (folder / "log").open("w")
        self._process = subprocess.Popen(
            [
                prometheus,
                f"--config.file={folder}/prometheus.yml",
                f"--storage.tsdb.path={folder}/data",
                f"--web.listen-address={self._address}",
            ],
            stdout=self._log,
            stderr=subprocess.STDOUT,
        )

    def ask(self, query: str) -> list[dict[str, Any]]:
        try:
            answer = json.loads(get(f"http://{self._address}/api/v1/query?{urlencode({'query': query})}"))
        except OSError:  # not up yet
            assert self._process.poll() is None, Path(self._log.name).read_text()
            return []
        result: list[dict[str, Any]] = answer["data"]["result"]
        return result

    def wait(self, query: str) -> list[dict[str, Any]]:
        """The answer once there is one."""
        end_s = time.monotonic() + 30.0
        while not (result := self.ask(query)):
            assert time.monotonic() < end_s, Path(self._log.name).read_text()
            time.sleep(0.1)
        return result

    def number(self, query: str) -> float:
        (only,) = self.wait(query)
        return float(only["value"][1])

    def close(self) -> None:
        self._process.terminate()
        self._process.wait(20)
        self._log.close()


@pytest.mark.prometheus
def test_a_real_prometheus_scrapes_our_values_and_takes_quantiles(rind: Desk, tmp_path: Path) -> None:
    for _ in drive(rind.pipeline, 1.35):
        pass
    loop = rind.shared.loop
    loop["tick_ns"], loop["utc_offset_ns"] = time.monotonic_ns(), UTC_OFFSET_NS
    loop["lateness"][0, 0], loop["ticks"] = 1000, 1000
    with (
        closing(serve(rind.collector, "127.0.0.1", 0)) as server,
        closing(Prometheus(tmp_path, server.port)) as prometheus,
    ):
        # Two scrapes of the first 1000 ticks, then two after 200 more: half on time, half 100 to 200 µs late.
        prometheus.wait("count_over_time(limbtell_ticks_total[1m]) >= 2")
        loop["lateness"][0, 0] += 100
        loop["lateness"][0, LATENESS_EDGES_S.index(200e-6)] += 100
        loop["ticks"] = 1200
        prometheus.wait("count_over_time((limbtell_ticks_total == 1200)[1m:200ms]) >= 2")

        bucket = "limbtell_tick_lateness_seconds_bucket"
        # Linear inside a bucket (Prometheus manual, histogram_quantile): 3/4 of the increase is its middle.
        recent = prometheus.number(f"histogram_quantile(0.75, rate({bucket}[1m]))")
        assert recent == pytest.approx(150e-6, rel=1e-3)
        # 1150 of all 1200 as well.
        whole = prometheus.number(f"histogram_quantile({1150 / 1200}, {bucket})")
        assert whole == pytest.approx(150e-6, rel=1e-3)

        stored = prometheus.wait('{__name__=~"limbtell_.*",job="limbtell"}')
        held = {}
        for entry in stored:
            labels = {k: v for k, v in entry["metric"].items() if k not in ("__name__", "job", "instance")}
            held[entry["metric"]["__name__"], frozenset(labels.items())] = float(entry["value"][1])
        ours = scrape(rind.collector)
        # The state of coverage turns while the test lasts: nothing ticks.
        steady = {key: value for key, value in ours.items() if "coverage" not in key[0]}
        assert {key: held[key] for key in steady} == steady
        assert held.keys() == ours.keys()
        assert prometheus.number("max(limbtell_band_ratio)") > 1.0
        assert 0.999 <= prometheus.number("sum(limbtell_coverage_seconds_total)") <= 1.3491
