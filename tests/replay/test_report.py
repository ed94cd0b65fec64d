"""`limbtell review`: a session in, two reports out, and clear words where that cannot be.

Judges: the schedule of the simulated robot, the live side in-process, and sums that have to come out.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import pytest
import typer
from typer.testing import CliRunner, Result

from monitor.errors import ConfigError, LimbtellError, SessionError, SystemFault
from monitor.session import GAP, SNAPSHOT, Session, SessionWriter
from monitor.setup.build import Setup
from monitor.setup.config import load
from replay import convert
from replay.report import DAMAGED, command, review, write
from replay.run import DIFFERENT, Replay
from replay.simulate import Push, Rind, Schedule
from tests.replay.rind import BEGIN_NS, MS, RUN, Live, Packet, clean, quick_setup, wire, write_rind

FIELDS = [
    "t", "utc", "run", "event", "state", "kind", "priority", "verdict", "detail", "joint", "link",
    "probability", "alternatives", "size", "onset_t", "seq",
]  # fmt: skip
# Only the two joints below the beam can feel it.
PUSH = Push(0.8, 0.2, "beam", (110.0, 110.0, 0.0), (0.0, 0.0, 0.18))
BEGIN_S = 40.0
LAST_TICK_S = 0.858  # of a live run


@pytest.fixture(scope="session")
def setup(tmp_path_factory: pytest.TempPathFactory) -> Setup:
    return quick_setup(tmp_path_factory.mktemp("rind"))


def converted(folder: Path, begin_s: float, count: int) -> Path:
    """Return so many samples of the arm, pushed once, brought in by `convert`."""
    rind = Rind(1, Schedule(pushes=(PUSH,)), start_ns=round(begin_s * 1e9))
    rows = [rind.step() for _ in range(count)]
    columns = {name: np.array([getattr(row, name) for row in rows]) for name in ("q", "qd", "tau")}
    np.savez(folder / "a.npz", allow_pickle=True, t=np.array([row.t_ns for row in rows]) / 1e9, **columns)
    convert.convert(folder / "a.npz", load(write_rind(folder)), folder / "a.mcap")
    return folder / "a.mcap"


@pytest.fixture(scope="session")
def recording(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A recording of 2 s."""
    return converted(tmp_path_factory.mktemp("recording"), BEGIN_S, 2000)


@pytest.fixture
def live(setup: Setup, tmp_path: Path) -> Live:
    """A live run with two pushes and some refused bytes, and its recording."""
    packets = [*clean(), Packet(50 * MS, "joints", b"\xc1")]
    return Live(setup, tmp_path / "live.mcap").run(packets, snapshots=(200, 400, 600))


def invoke(*arguments: object) -> Result:
    app = typer.Typer()
    app.command("review")(command)
    return CliRunner().invoke(app, [str(argument) for argument in arguments])


def run(*arguments: object, exit_code: int = 0) -> Result:
    result = invoke(*arguments)
    if result.exception is not None and not isinstance(result.exception, SystemExit):
        raise result.exception
    assert result.exit_code == exit_code
    return result


def lines(folder: Path) -> list[dict[str, Any]]:
    return [json.loads(line) for line in (folder / "alarms.jsonl").read_text().splitlines()]


def summary(folder: Path) -> dict[str, Any]:
    loaded: dict[str, Any] = json.loads((folder / "summary.json").read_text())
    return loaded


def contents(folder: Path) -> dict[str, bytes]:
    return {str(p.relative_to(folder)): p.read_bytes() for p in folder.rglob("*") if p.is_file()}


# --- what is written


def test_a_push_in_a_converted_recording_is_reported_when_and_where_it_acted(
    recording: Path, tmp_path: Path
) -> None:
    out = tmp_path / "out"
    run(recording, "--out", out)
    raised, named, cleared = lines(out)
    assert list(raised) == list(named) == list(cleared) == FIELDS
    assert raised["state"] == named["state"] == "unacknowledged"
    assert cleared["state"] == "returned-to-normal-unacknowledged"
    assert [(line["event"], line["seq"]) for line in (raised, named, cleared)] == [(1, 1), (1, 2), (1, 3)]
    kinds = [line["kind"] for line in (raised, named, cleared)]
    assert kinds == ["unexplained-torque", "contact", "contact"]
    # Judge: the schedule. The push swells over 30 ms; an event ends after 0.3 s of quiet.
    assert BEGIN_S + 0.8 < raised["t"] < BEGIN_S + 0.85
    assert raised["t"] < named["t"] < BEGIN_S + 0.9
    assert BEGIN_S + 1.25 < cleared["t"] < BEGIN_S + 1.6
    assert BEGIN_S + 0.79 < raised["onset_t"] <= raised["t"]
    assert raised["joint"] in {"swivel", "lean"}
    assert cleared["joint"] is None
    # Judge: the link of the schedule, or one beside it.
    assert cleared["link"] in {"shoulder", "beam", "sleeve"}
    assert cleared["probability"] > 0.9
    assert raised["utc"] is None  # such a file knows nothing of UTC
    (event,) = summary(out)["events"]
    assert (event["raised_t"], event["cleared_t"]) == (raised["t"], cleared["t"])
    assert (event["kind"], event["verdict"], event["link"]) == ("contact", "contact", cleared["link"])
    assert event["size"] == cleared["size"]
    # Judge: the force of the schedule.
    assert event["size"]["unit"] == "N"
    force_n = np.linalg.norm(PUSH.force_n)
    assert abs(event["size"]["value"] - force_n) < max(0.25 * force_n, 2.0 * event["size"]["sd"])
    # How sure it was, and of what, from the first word to the last.
    series = event["series"]
    assert [said["t"] for said in series] == sorted(said["t"] for said in series)
    assert [said["open"] for said in series] == [True] * (len(series) - 1) + [False]
    assert (series[0]["t"], series[0]["explanations"]) == (raised["t"], [])
    assert series[-1]["explanations"][0]["verdict"] == "contact"
    for said in series:
        shown = [one["probability"] for one in said["explanations"]]
        assert shown == sorted(shown, reverse=True)
        assert sum(shown) <= 1.0 + 1e-9


def test_the_summary_accounts_for_every_sample_and_all_time(recording: Path, tmp_path: Path) -> None:
    run(recording, "--out", tmp_path)
    found = summary(tmp_path)
    assert found["samples"]["received"] == found["samples"]["stepped"] == 2000
    assert found["samples"]["lost"] == sum(found["samples"]["bad"].values()) == 0
    assert set(found["samples"]["at_limit"].values()) == {0}
    seconds = {(c, r): s for c, reasons in found["coverage_s"].items() for r, s in reasons.items()}
    # 2000 ticks, a millisecond apart; the payload is unknown in a converted file; the start takes 0.5 s.
    assert sum(seconds.values()) == pytest.approx(1.999, abs=1e-9)
    assert seconds.keys() == {("conditional", "payload-unknown"), ("blind", "settling")}
    assert seconds["blind", "settling"] == pytest.approx(0.5, abs=0.003)
    assert found["duration_s"] == pytest.approx(1.999, abs=1e-9)
    assert found["alarms"] == {
        "unexplained-torque": {"unacknowledged": 1},
        "contact": {"unacknowledged": 1, "returned-to-normal-unacknowledged": 1},
    }
    assert (found["exact"], found["truncated"], found["damaged"], found["gaps"]) == (True, False, None, [])
    assert found["run"] == Session(recording).run
    assert "not a safety function" in found["caution"]
    assert any("mode work" in note for note in found["notes"])


def test_a_recording_may_begin_at_time_zero(tmp_path: Path) -> None:
    found = review(Session(converted(tmp_path, 0.0, 100))).summary
    assert sum(found["coverage_s"]["blind"].values()) == pytest.approx(0.099, abs=1e-9)


def test_the_lines_are_the_alarms_of_the_live_run(live: Live, tmp_path: Path) -> None:
    out = tmp_path / "out"
    run(live.writer.path, "--out", out)
    sent = [message.body for message in live.sent if message.topic == "alarm"]
    assert [{key: line[key] for key in body} for body, line in zip(sent, lines(out), strict=True)] == sent
    assert [line["text"] for line in lines(out) if line["kind"] == "wire" and "text" in line]
    assert {line["run"] for line in lines(out)} == {RUN}
    found = summary(out)
    assert found["begin_utc"].startswith("2023-11-14T")  # 1.7e9 s of UTC, and 500 s
    assert found["confirmed_snapshots"] == 3
    # It had not been quiet for long enough since the refused message, and at last the stream fell silent.
    standing = [event["detail"] for event in found["events"] if event["cleared_t"] is None]
    assert standing == ["malformed", "stale"]


def test_a_second_review_writes_the_same_bytes_in_place_of_the_first(live: Live, tmp_path: Path) -> None:
    out = tmp_path / "out"
    out.mkdir()
    run(live.writer.path, "--out", out)
    first = contents(out)
    run(live.writer.path, "--out", out)
    assert contents(out) == first
    assert first.keys() == {"alarms.jsonl", "summary.json"}


def test_several_sessions_get_a_folder_each(recording: Path, live: Live, tmp_path: Path) -> None:
    out = tmp_path / "out"
    shown = run(recording, live.writer.path, "--out", out, "--json").stdout
    assert [found["session"] for found in json.loads(shown)] == [str(recording), str(live.writer.path)]
    assert contents(out).keys() == {
        f"{s}/{f}" for s in ("a", "live") for f in ("alarms.jsonl", "summary.json")
    }
    run(recording, "--out", tmp_path / "one")
    assert contents(out / "a") == contents(tmp_path / "one")
    run(recording, live.writer.path, "--out", out)  # again, over its own


def test_json_and_table_say_what_the_file_says(recording: Path, tmp_path: Path) -> None:
    assert json.loads(run(recording, "--out", tmp_path, "--json").stdout) == summary(tmp_path)
    shown = run(recording, "--out", tmp_path).stdout
    assert "2000 stepped, 0 lost" in shown
    assert "conditional 1.5 s (payload-unknown)" in shown
    (event,) = summary(tmp_path)["events"]
    size = event["size"]
    for word in ("contact:", event["detail"], event["link"], f"{size['value']:.3g}", f"{size['sd']:.2g}"):
        assert word in shown
    assert "safety function" in shown


# --- beginning in mid-stream


def test_a_review_may_begin_at_the_last_snapshot_before_a_time(live: Live, tmp_path: Path) -> None:
    for from_s, number, begin_s in ((0.0, 0, 0.0), (0.39, 1, 0.2), (0.4, 2, 0.4), (99.0, 3, 0.6)):
        out = tmp_path / str(from_s)
        run(live.writer.path, "--out", out, "--from", from_s)
        alarms = [m.body["seq"] for m in live.sent[live.marks[number] :] if m.topic == "alarm"]
        assert [line["seq"] for line in lines(out)] == alarms
        found = summary(out)
        assert found["from_s"] == begin_s
        assert found["duration_s"] == pytest.approx(LAST_TICK_S - begin_s, abs=1e-9)
        # Counted is what was reviewed; events keep the numbers of the live run.
        total = sum(seconds for reasons in found["coverage_s"].values() for seconds in reasons.values())
        assert total == pytest.approx(found["duration_s"], abs=0.0011)
        assert found["samples"]["stepped"] == 800 - round(begin_s * 1000)
    first = next(event for event in summary(tmp_path / "0.39")["events"] if event["series"])
    assert first["raised_t"] is None  # its begin lies before
    assert first["cleared_t"] is not None


def test_a_replay_cannot_begin_at_a_snapshot_that_is_not_there(live: Live) -> None:
    with pytest.raises(SessionError, match="found 4 snapshots; expected at least 5"):
        list(Replay(Session(live.writer.path), start=4))


# --- gaps


def copied(live: Live, path: Path, drop: range, gap: bool = True) -> Path:
    """Write the recording again as if the records of these numbers had not been kept."""
    source = Session(live.writer.path)
    writer = SessionWriter(
        path,
        config_toml=source.config_toml,
        model=source.model,
        run=source.run,
        utc_offset_ns=source.utc_offset_ns,
        utc_uncertainty_ns=source.utc_uncertainty_ns,
        versions=source.versions,
    )
    for number, (kind, topic, payload, time_ns) in enumerate(source.records()):
        if gap and number == drop.start:
            writer.gap(len(drop), time_ns, "the recorder did not keep up")
        if number in drop:
            continue
        if kind == SNAPSHOT:
            writer.snapshot(payload, time_ns)
        elif topic:
            writer.tuple(topic, payload, time_ns)
        else:
            writer.tick(time_ns)
    writer.close()
    return path


def test_after_a_gap_the_replay_goes_on_exactly_from_the_next_snapshot(live: Live, tmp_path: Path) -> None:
    path = copied(live, tmp_path / "gap.mcap", range(500, 600))
    replay = Replay(Session(path))
    messages = wire(replay)
    tail = wire(live.sent[live.marks[2] :])  # the snapshot at 0.4 s is the first after the gap
    assert len(tail) > 3
    assert messages[-len(tail) :] == tail
    (gap,) = replay.gaps
    assert (gap.lost, gap.reason, gap.resumed_s) == (100, "the recorder did not keep up", 0.4)
    assert gap.at_s == pytest.approx(0.249, abs=0.002)
    after = list(Session(path).records())[501:]  # 500 records, and the gap
    assert gap.skipped == sum(1 for _, topic, _, at_ns in after if topic and at_ns < BEGIN_NS + 400 * MS) > 90
    total = replay.counters["coverage_ns"].sum() / 1e9
    assert total == pytest.approx(LAST_TICK_S - (0.4 - gap.at_s), abs=0.005)
    found = review(Session(path)).summary
    assert not found["exact"]
    assert any("goes on at 0.400 s" in note for note in found["notes"])


def test_a_gap_without_a_later_snapshot_ends_the_replay(live: Live, tmp_path: Path) -> None:
    path = copied(live, tmp_path / "gap.mcap", range(1500, 1510))
    found = review(Session(path))
    assert found.summary["gaps"][0]["resumed_s"] is None
    assert "nothing after it is replayed" in found.summary["notes"][0]
    before = [message.body for message in live.sent if message.topic == "alarm"]
    assert found.alarms == before[: len(found.alarms)]


def test_a_state_that_is_not_the_replays_own_is_noticed_and_taken_over(live: Live, tmp_path: Path) -> None:
    # A loop that died and was started anew leaves no gap of the recorder's, only another state.
    path = copied(live, tmp_path / "lost.mcap", range(500, 600), gap=False)
    replay = Replay(Session(path))
    messages = wire(replay)
    tail = wire(live.sent[live.marks[2] :])
    assert messages[-len(tail) :] == tail
    (gap,) = replay.gaps
    assert (gap.at_s, gap.resumed_s, gap.lost, gap.reason) == (0.4, 0.4, 0, DIFFERENT)
    assert replay.confirmed == 2


# --- another configuration, another version


def test_with_another_configuration_it_begins_afresh_and_says_so(live: Live, tmp_path: Path) -> None:
    deaf = write_rind(tmp_path, {"start_settle_s": 30.0})
    path = copied(live, tmp_path / "gap.mcap", range(500, 600))
    run(path, "--out", tmp_path / "out", "--config", deaf)
    found = summary(tmp_path / "out")
    assert found["alarms"].keys().isdisjoint({"unexplained-torque", "contact", "actuator"})
    assert found["config"] == str(deaf)
    assert not found["exact"]
    assert "begun afresh" in found["notes"][0]
    assert found["gaps"][0]["skipped"] == 0
    kept = sum(topic == "joints" for _, topic, _, _ in Session(path).records())
    assert found["samples"]["received"] == kept
    assert any(kind == GAP for kind, *_ in Session(path).records())


def with_snapshot(live: Live, path: Path, **changes: Any) -> Path:
    """Write a session of one snapshot, changed."""
    snapshot = msgpack.unpackb(live.pipeline.snapshot(), strict_map_key=False) | changes
    source = Session(live.writer.path)
    writer = SessionWriter(
        path, config_toml=source.config_toml, model=source.model, run=RUN, utc_offset_ns=0,
        utc_uncertainty_ns=0, versions={"limbtell": "0.0.1"},
    )  # fmt: skip
    writer.snapshot(msgpack.packb(snapshot), BEGIN_NS)
    writer.tick(BEGIN_NS + MS)
    writer.close()
    return path


@pytest.mark.parametrize("changes", [{"version": 99}, {"state": b"short"}])
def test_a_state_of_another_version_is_refused_with_the_way_out(
    live: Live, tmp_path: Path, changes: dict[str, Any]
) -> None:
    path = with_snapshot(live, tmp_path / "old.mcap", **changes)
    with pytest.raises(SessionError, match=r"old\.mcap, snapshot at 0\.000 s.*expected a state.*--config"):
        run(path, "--out", tmp_path / "out")
    assert not (tmp_path / "out").exists()
    run(path, "--out", tmp_path / "out", "--config", write_rind(tmp_path))
    assert any("Another version" in note for note in summary(tmp_path / "out")["notes"])


# --- cut and damaged sessions


def test_a_cut_session_is_reviewed_up_to_the_cut(live: Live, tmp_path: Path) -> None:
    whole = review(Session(live.writer.path)).alarms
    content = live.writer.path.read_bytes()
    cut = tmp_path / "cut.mcap"
    cut.write_bytes(content[: len(content) * 2 // 3])
    run(cut, "--out", tmp_path / "out")
    found = summary(tmp_path / "out")
    assert found["truncated"]
    assert 0 < found["samples"]["stepped"] < 800
    seen = lines(tmp_path / "out")
    assert [line["seq"] for line in seen] == [alarm["seq"] for alarm in whole][: len(seen)]
    assert any("was cut" in note for note in found["notes"])


def test_what_lies_before_damage_is_reviewed_and_the_exit_code_tells(live: Live, tmp_path: Path) -> None:
    content = bytearray(live.writer.path.read_bytes())
    content[len(content) // 2] ^= 0xFF
    damaged = tmp_path / "damaged.mcap"
    damaged.write_bytes(content)
    shown = run(damaged, "--out", tmp_path / "out", exit_code=DAMAGED).stdout
    found = summary(tmp_path / "out")
    assert "damaged.mcap, byte" in found["damaged"]
    assert "damaged chunk" in " ".join(shown.split())
    assert 0 < found["samples"]["stepped"] < 800
    whole = review(Session(live.writer.path)).alarms
    assert [line["seq"] for line in lines(tmp_path / "out")] == [
        alarm["seq"] for alarm in whole[: len(lines(tmp_path / "out"))]
    ]


def test_a_session_of_which_nothing_is_left_is_refused(live: Live, tmp_path: Path) -> None:
    empty = tmp_path / "empty.mcap"
    source = Session(live.writer.path)
    SessionWriter(
        empty, config_toml=source.config_toml, model=source.model, run=RUN, utc_offset_ns=0,
        utc_uncertainty_ns=0, versions={},
    ).close()  # fmt: skip
    with pytest.raises(SessionError, match="found 0 snapshots; expected at least 1"):
        run(empty, "--out", tmp_path / "out")
    assert not (tmp_path / "out").exists()


# --- refusals


def test_a_folder_with_other_files_is_refused_and_stays_as_it_is(recording: Path, tmp_path: Path) -> None:
    (tmp_path / "notes.txt").write_text("mine")
    with pytest.raises(SystemFault, match=r"'notes\.txt' in it; expected an empty folder"):
        run(recording, "--out", tmp_path)
    (tmp_path / "notes.txt").unlink()
    (tmp_path / "a").mkdir()
    (tmp_path / "a" / "notes.txt").write_text("mine")
    with pytest.raises(SystemFault, match="'a' in it"):
        run(recording, "--out", tmp_path)
    assert contents(tmp_path) == {"a/notes.txt": b"mine"}


def test_sessions_of_one_name_are_refused(recording: Path, tmp_path: Path) -> None:
    with pytest.raises(SessionError, match=r"the name 'a' more than once.*one by one"):
        run(recording, tmp_path / "a.mcap", "--out", tmp_path / "out")


@pytest.mark.parametrize(
    ("arguments", "error", "words"),
    [
        (["nowhere.mcap"], SessionError, r"nowhere\.mcap: found No such file"),
        (["text.mcap"], SessionError, r"text\.mcap: found other leading bytes; expected an MCAP file"),
        (["good.mcap", "text.mcap"], SessionError, r"text\.mcap: found other leading bytes"),
        (["good.mcap", "--config", "none.toml"], ConfigError, r"none\.toml"),
    ],
)
def test_nothing_is_written_where_something_is_refused(
    recording: Path,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    arguments: list[str],
    error: type[LimbtellError],
    words: str,
) -> None:
    monkeypatch.chdir(tmp_path)
    Path("text.mcap").write_text("dear diary")
    Path("good.mcap").write_bytes(recording.read_bytes())
    with pytest.raises(error, match=words):
        run(*arguments, "--out", "out")
    assert not Path("out").exists()


def test_a_folder_that_cannot_be_made_is_named_and_nothing_is_left(recording: Path, tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(SystemFault, match="file"):
        run(recording, "--out", tmp_path / "file" / "out")
    (tmp_path / "summary.json").mkdir()
    found = review(Session(recording))
    with pytest.raises(SystemFault, match="expected a folder that can be written"):
        write(found, tmp_path)
    assert not list(tmp_path.glob("*.part"))
