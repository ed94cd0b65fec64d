"""Recordings become sessions: what comes out is what the file says, and a bad file is named where it is bad.

Judges: the arrays the files were made of, `msgpack` for the wire form, the public reader of `mcap`.
"""

from __future__ import annotations

import csv
import json
from collections.abc import Callable, Iterator
from contextlib import suppress
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import pytest
import typer
from hypothesis import given, settings
from hypothesis import strategies as st
from mcap.reader import make_reader
from numpy.typing import NDArray
from typer.testing import CliRunner

from monitor.errors import SessionError, SystemFault
from monitor.session import SNAPSHOT, TICK, TUPLE, UTC_UNKNOWN_NS, Record, Session
from monitor.setup.config import Config, load
from replay import convert as module
from replay.convert import command, convert

JOINTS = ("swivel", "lean", "turn")
FEET = ("front", "back")
MS = 1_000_000
ARM = """schema = 1
[robot]
urdf = "robot.urdf"
"""
WALKER = """schema = 1
[robot]
urdf = "robot.urdf"
base = "floating"
"""

Columns = dict[str, NDArray[Any]]


def configuration(folder: Path, text: str = ARM, feet: tuple[str, ...] = ()) -> Config:
    joints = [f'[[robot.joint]]\nname = "{name}"\nrated_torque = 20.0\n' for name in JOINTS]
    places = [f'[[robot.foot]]\nname = "{name}"\nlink = "{name}_shin"\n' for name in feet]
    (folder / "robot.urdf").write_text("<robot name='rind'/>")
    (folder / "robot.toml").write_text("\n".join([text, *joints, *places]))
    return load(folder / "robot.toml")


def columns(rows: int = 50, seed: int = 1) -> Columns:
    rng = np.random.default_rng(seed)
    t = 3.0 + np.arange(rows) / 1000
    return {"t": t, **{name: rng.normal(size=(rows, len(JOINTS))) for name in ("q", "qd", "tau")}}


def walker_columns(rows: int = 50) -> Columns:
    rng = np.random.default_rng(2)
    widths = {"base_pos": 3, "base_quat": 4, "base_vel": 3, "base_omega": 3}
    base = {name: rng.normal(size=(rows, width)) for name, width in widths.items()}
    return {**columns(rows), **base, "feet": rng.integers(0, 2, (rows, len(FEET)))}


AXES = {
    "t": ("",),
    "t_rx": ("",),
    "base_pos": tuple("xyz"),
    "base_quat": tuple("wxyz"),
    "base_vel": tuple("xyz"),
    "base_omega": tuple("xyz"),
    "feet": FEET,
    "planned_contact": FEET,
}


def save_npz(path: Path, data: Columns) -> Path:
    np.savez(path, allow_pickle=True, **data)
    return path


def save_csv(path: Path, data: Columns) -> Path:
    """One column per axis; `repr` of a double reads back as the same double."""
    names = [f"{name}.{axis}" if axis else name for name in data for axis in AXES.get(name, JOINTS)]
    table = np.column_stack([np.asarray(values, dtype=float) for values in data.values()])
    with path.open("w", newline="") as file:
        out = csv.writer(file)
        out.writerow(names)
        out.writerows([repr(float(value)) for value in row] for row in table)
    return path


def save(folder: Path, suffix: str, data: Columns) -> Path:
    return {".npz": save_npz, ".csv": save_csv}[suffix](folder / f"recording{suffix}", data)


both = pytest.mark.parametrize("suffix", [".npz", ".csv"])


def messages(path: Path, topic: str = "joints") -> list[dict[str, Any]]:
    return [
        msgpack.unpackb(payload)
        for kind, name, payload, _ in Session(path).records()
        if (kind, name) == (TUPLE, topic)
    ]


def doubles(raw: list[bytes]) -> NDArray[np.float64]:
    return np.array([np.frombuffer(row, dtype="<f8") for row in raw])


@both
def test_every_value_comes_through_to_the_bit(tmp_path: Path, suffix: str) -> None:
    data = columns()
    data["tau_cmd"], data["tau_link"] = data["tau"] * 1.1, data["tau"] / 3
    convert(save(tmp_path, suffix, data), configuration(tmp_path), tmp_path / "out.mcap")
    rows = messages(tmp_path / "out.mcap")
    for name in ("q", "qd", "tau", "tau_cmd", "tau_link"):
        np.testing.assert_array_equal(doubles([row[name] for row in rows]), data[name])
    assert [row["seq"] for row in rows] == list(range(50))
    assert [row["t_ns"] for row in rows] == [3_000_000_000 + i * MS for i in range(50)]
    assert {row["v"] for row in rows} == {1}
    assert not {"base", "feet"} & set(rows[0])


@both
@pytest.mark.parametrize("name", ["feet", "planned_contact"])
def test_a_walker_brings_its_base_and_its_planned_contacts(tmp_path: Path, suffix: str, name: str) -> None:
    data = walker_columns()
    data[name] = data.pop("feet")
    config = configuration(tmp_path, WALKER, FEET)
    convert(save(tmp_path, suffix, data), config, tmp_path / "out.mcap")
    rows = messages(tmp_path / "out.mcap")
    for key, column in {"p": "base_pos", "quat": "base_quat", "v": "base_vel", "w": "base_omega"}.items():
        np.testing.assert_array_equal([row["base"][key] for row in rows], data[column])
    np.testing.assert_array_equal([row["feet"] for row in rows], data[name])


def test_both_kinds_of_file_give_the_same_messages(tmp_path: Path) -> None:
    config, data = configuration(tmp_path), columns()
    convert(save_npz(tmp_path / "a.npz", data), config, tmp_path / "a.mcap")
    convert(save_csv(tmp_path / "b.csv", data), config, tmp_path / "b.mcap")
    first, second = messages(tmp_path / "a.mcap"), messages(tmp_path / "b.mcap")
    assert first == second


def test_a_session_begins_afresh_and_ticks_at_the_rate_of_the_loop(tmp_path: Path) -> None:
    config = configuration(tmp_path, ARM.replace("[robot]", "[watch]\nloop_hz = 500.0\n[robot]"))
    summary = convert(save_npz(tmp_path / "a.npz", columns()), config, tmp_path / "out.mcap")
    records = list(Session(tmp_path / "out.mcap").records())
    assert records[0] == (SNAPSHOT, "", b"", 3_000_000_000)
    ticks = [time_ns for kind, _, _, time_ns in records if kind == TICK]
    assert ticks == list(range(3_000_000_000, 3_000_000_000 + 49 * MS + 2 * MS, 2 * MS))
    assert summary.ticks == len(ticks)


def in_order_of_receipt(records: list[Record]) -> Iterator[tuple[int, int]]:
    """(receive time, time of the tick that first sees it) of each joint sample."""
    waiting: list[int] = []
    for kind, topic, _, time_ns in records:
        if kind == TUPLE and topic == "joints":
            waiting.append(time_ns)
        elif kind == TICK:
            yield from ((received_ns, time_ns) for received_ns in waiting)
            waiting.clear()
    assert not waiting


def test_every_sample_is_seen_by_the_first_tick_at_or_after_its_receipt(tmp_path: Path) -> None:
    data = columns()
    data["t_rx"] = data["t"] + np.random.default_rng(3).uniform(0, 0.0009, 50)
    convert(save_npz(tmp_path / "a.npz", data), configuration(tmp_path), tmp_path / "out.mcap")
    pairs = list(in_order_of_receipt(list(Session(tmp_path / "out.mcap").records())))
    assert [received_ns for received_ns, _ in pairs] == np.rint(data["t_rx"] * 1e9).astype(int).tolist()
    assert all(0 <= tick_ns - received_ns < MS for received_ns, tick_ns in pairs)


def test_the_public_reader_finds_the_robots_time_beside_the_time_of_receipt(tmp_path: Path) -> None:
    data = columns()
    data["t_rx"] = data["t"] + 0.25
    convert(save_npz(tmp_path / "a.npz", data), configuration(tmp_path), tmp_path / "out.mcap")
    with (tmp_path / "out.mcap").open("rb") as file:
        times = [(m.log_time, m.publish_time) for _, _, m in make_reader(file).iter_messages("joints")]
    assert times == [(3_250_000_000 + i * MS, 3_000_000_000 + i * MS) for i in range(50)]


def test_the_assumed_condition_is_sent_once_a_second_and_said(tmp_path: Path) -> None:
    data = columns(3500)
    summary = convert(save_npz(tmp_path / "a.npz", data), configuration(tmp_path), tmp_path / "out.mcap")
    conditions = messages(tmp_path / "out.mcap", "robot")
    assert [c["t_ns"] for c in conditions] == [3_000_000_000 + s * 10**9 for s in range(4)]
    assert {c["mode"] for c in conditions} == {"work"}
    assert {(*c["drive"], *c["brake"], c["stop"]) for c in conditions} == {(1, 1, 1, 0, 0, 0, None)}
    assert "payload" not in conditions[0]
    session = Session(tmp_path / "out.mcap")
    assert "mode work" in session.versions["assumed"]
    assert "mode work" in summary.assumed
    assert session.utc_uncertainty_ns == UTC_UNKNOWN_NS


def test_the_session_carries_configuration_and_model(tmp_path: Path) -> None:
    config = configuration(tmp_path)
    convert(save_npz(tmp_path / "a.npz", columns()), config, tmp_path / "out.mcap")
    session = Session(tmp_path / "out.mcap")
    assert session.config_toml == (tmp_path / "robot.toml").read_text()
    assert session.model == {"robot.urdf": "<robot name='rind'/>"}


@both
def test_converting_again_gives_the_same_bytes(tmp_path: Path, suffix: str) -> None:
    config, recording = configuration(tmp_path), save(tmp_path, suffix, columns())
    convert(recording, config, tmp_path / "a.mcap")
    convert(recording, config, tmp_path / "b.mcap")
    assert (tmp_path / "a.mcap").read_bytes() == (tmp_path / "b.mcap").read_bytes()


@both
def test_the_size_of_a_block_changes_nothing(
    tmp_path: Path, suffix: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    config, recording = configuration(tmp_path), save(tmp_path, suffix, columns())
    convert(recording, config, tmp_path / "a.mcap")
    monkeypatch.setattr(module, "BLOCK_ROWS", 7)
    convert(recording, config, tmp_path / "b.mcap")
    assert (tmp_path / "a.mcap").read_bytes() == (tmp_path / "b.mcap").read_bytes()


@both
def test_values_that_are_not_numbers_are_passed_on_for_the_monitor_to_judge(
    tmp_path: Path, suffix: str
) -> None:
    data = columns()
    data["q"][5, 1], data["qd"][6, 0], data["tau"][7, 2] = np.nan, np.inf, np.nan
    convert(save(tmp_path, suffix, data), configuration(tmp_path), tmp_path / "out.mcap")
    rows = messages(tmp_path / "out.mcap")
    for name in ("q", "qd", "tau"):
        np.testing.assert_array_equal(doubles([row[name] for row in rows]), data[name])


def test_stamps_that_repeat_or_go_back_are_passed_on_and_received_in_order(tmp_path: Path) -> None:
    data = columns(8)
    data["t"] = np.array([3.000, 3.001, 3.001, 3.003, 3.002, 3.004, 0.0, 0.001])  # at last a restart
    convert(save_npz(tmp_path / "a.npz", data), configuration(tmp_path), tmp_path / "out.mcap")
    assert [row["t_ns"] for row in messages(tmp_path / "out.mcap")] == [
        3_000_000_000,
        3_001_000_000,
        3_001_000_000,
        3_003_000_000,
        3_002_000_000,
        3_004_000_000,
        0,
        1_000_000,
    ]
    received = [
        (r - 3_000_000_000) / MS
        for r, _ in in_order_of_receipt(list(Session(tmp_path / "out.mcap").records()))
    ]
    assert received == [0, 1, 1, 3, 3, 4, 5, 6]


def test_times_of_receipt_that_go_back_are_refused(tmp_path: Path) -> None:
    data = columns()
    data["t_rx"] = np.where(np.arange(50) < 30, 100.0, 98.0) + data["t"]
    with pytest.raises(SessionError, match=r"a\.npz, row 31: found a step of -2 s in the time of receipt"):
        convert(save_npz(tmp_path / "a.npz", data), configuration(tmp_path), tmp_path / "out.mcap")


def test_temperatures_become_a_tuple_where_they_change(tmp_path: Path) -> None:
    data = columns(6)
    data["motor_temp"] = np.array([[30.0, 31, 32]] * 3 + [[30, 31, 33]] * 3)
    convert(save_npz(tmp_path / "a.npz", data), configuration(tmp_path), tmp_path / "out.mcap")
    temperatures = messages(tmp_path / "out.mcap", "motor_temp")
    assert [row["t_ns"] for row in temperatures] == [3_000_000_000, 3_003_000_000]
    np.testing.assert_array_equal(
        doubles([row["celsius"] for row in temperatures]), data["motor_temp"][[0, 3]]
    )


def test_csv_columns_may_stand_in_any_order_with_blanks_and_others_among_them(tmp_path: Path) -> None:
    data = columns(2)
    path = save_csv(tmp_path / "a.csv", data)
    with path.open(newline="") as file:
        table = list(csv.reader(file))
    mixed = [
        ["note", *(f" {cell} " if i == 0 else cell for cell in reversed(row))] for i, row in enumerate(table)
    ]
    path.write_bytes(b"\xef\xbb\xbf" + "\r\n\r\n".join(",".join(row) for row in mixed).encode())
    summary = convert(path, configuration(tmp_path), tmp_path / "out.mcap")
    np.testing.assert_array_equal(
        doubles([row["tau"] for row in messages(tmp_path / "out.mcap")]), data["tau"]
    )
    assert summary.ignored == ["note"]


def test_a_long_csv_is_read_in_blocks(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "BLOCK_ROWS", 100)
    source = module._open(
        save_csv(tmp_path / "a.csv", columns(1000)), module._groups(configuration(tmp_path))
    )
    shares = []
    for block, share in source.blocks:
        assert len(block["t"]) == 100
        shares.append(share)
    assert len(shares) == 10
    assert shares == sorted(shares)
    assert shares[-1] == 1.0


# --- bad files


def without(name: str) -> Callable[[Columns], None]:
    return lambda data: data.__delitem__(name)


def with_(name: str, change: Callable[[NDArray[Any]], NDArray[Any]]) -> Callable[[Columns], None]:
    return lambda data: data.update({name: change(data[name])})


def setting(name: str, row: int, value: float) -> Callable[[Columns], None]:
    return lambda data: data[name].__setitem__(row, value)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (without("tau"), r"array 'tau': found nothing; expected shape \(rows, 3\) for swivel, lean, turn"),
        (without("t"), r"array 't': found nothing; expected shape \(rows,\)"),
        (with_("q", lambda q: q[:, :2]), r"array 'q': found shape \(50, 2\); expected shape \(rows, 3\)"),
        (with_("q", lambda q: q[:, 0]), r"array 'q': found shape \(50,\); expected shape \(rows, 3\)"),
        (with_("qd", lambda qd: qd[:-1]), r"array 'qd': found 49 rows; expected 50 rows"),
        (
            with_("tau", lambda tau: tau.astype(str)),
            r"array 'tau': found values of type <U\d+; expected numbers",
        ),
        (with_("tau", lambda tau: tau * 1j), r"array 'tau': found values of type complex128"),
        (setting("t", 7, np.nan), r"column 't', row 8: found nan; expected a finite time"),
        (setting("t", 7, 1e300), r"column 't', row 8: found 1e\+300; expected a finite time"),
        (setting("t", 7, 8000.0), r"row 8: found a step of 7997 s .*Times are in seconds"),
        (with_("t", lambda t: t * 1000), r"column 't': found 1 samples a second; expected about .* = 1000"),
        (with_("t", lambda t: t[:0]), r"array 'q': found 50 rows; expected 0 rows"),
    ],
)
def test_a_bad_npz_is_refused_with_place_found_and_expected(
    tmp_path: Path, change: Callable[[Columns], None], message: str
) -> None:
    data = columns()
    change(data)
    with pytest.raises(SessionError, match=rf"a\.npz.*{message}"):
        convert(save_npz(tmp_path / "a.npz", data), configuration(tmp_path), tmp_path / "out.mcap")
    assert not list(tmp_path.glob("out*"))


def edit(line: int, cell: int, text: str) -> Callable[[list[list[str]]], None]:
    return lambda table: table[line].__setitem__(cell, text)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (edit(0, 3, "q.tail"), r"column 'q.turn': found nothing; expected this column"),
        (edit(0, 0, "time"), r"column 't': found nothing"),
        (lambda table: table[0].append("q.tail"), r"column 'q.tail': found a name that .*q.swivel"),
        (edit(0, 2, "q.swivel"), r"column 'q.swivel': found it more than once"),
        (edit(5, 4, "fast"), r"column 'qd.swivel', row 5: found 'fast'; expected a number"),
        (edit(49, 4, ""), r"column 'qd.swivel', row 49: found ''; expected a number"),
        (edit(5, 0, "nan"), r"column 't', row 5: found nan; expected a finite time"),
        (lambda table: table[9].pop(), r"row 9: found 9 cells; expected 10, as in the header"),
        (lambda table: table.__delitem__(slice(1, None)), r"found no samples"),
        (lambda table: table.clear(), r"found no header line"),
    ],
)
def test_a_bad_csv_is_refused_with_place_found_and_expected(
    tmp_path: Path, change: Callable[[list[list[str]]], Any], message: str
) -> None:
    path = save_csv(tmp_path / "a.csv", columns())
    with path.open(newline="") as file:
        table = list(csv.reader(file))
    change(table)
    path.write_text("\n".join(",".join(row) for row in table))
    with pytest.raises(SessionError, match=rf"a\.csv.*{message}"):
        convert(path, configuration(tmp_path), tmp_path / "out.mcap")
    assert not list(tmp_path.glob("out*"))


@pytest.mark.parametrize(
    "content", [b"", b"\x00\x00\x00", b"t,q\xff\n", b"t," + b"x" * 200_000 + b"\n", b"\n\n\n"]
)
def test_a_csv_that_is_no_text_table_is_refused(tmp_path: Path, content: bytes) -> None:
    (tmp_path / "a.csv").write_bytes(content)
    with pytest.raises(SessionError, match=r"a\.csv"):
        convert(tmp_path / "a.csv", configuration(tmp_path), tmp_path / "out.mcap")


def test_a_pickled_npz_is_refused(tmp_path: Path) -> None:
    data = columns()
    data["tau"] = np.array([{"a": 1}] * 50, dtype=object)
    with pytest.raises(SessionError, match=r"a\.npz: found no readable arrays .*Pickled objects are refused"):
        convert(save_npz(tmp_path / "a.npz", data), configuration(tmp_path), tmp_path / "out.mcap")


def test_a_planned_contact_is_0_or_1(tmp_path: Path) -> None:
    data = walker_columns()
    data["feet"] = data["feet"].astype(float)
    data["feet"][4, 1] = 0.5
    with pytest.raises(SessionError, match=r"column 'feet', foot 2, row 5: found 0\.5; expected 0 or 1"):
        convert(
            save_npz(tmp_path / "a.npz", data), configuration(tmp_path, WALKER, FEET), tmp_path / "out.mcap"
        )


def test_a_walker_without_the_state_of_its_base_is_refused(tmp_path: Path) -> None:
    with pytest.raises(SessionError, match="array 'base_pos': found nothing"):
        convert(
            save_npz(tmp_path / "a.npz", columns()), configuration(tmp_path, WALKER), tmp_path / "out.mcap"
        )


@pytest.mark.parametrize("name", ["gone.npz", "gone.csv", "gone.xls"])
def test_a_file_that_is_missing_or_of_another_kind_is_refused(tmp_path: Path, name: str) -> None:
    with pytest.raises(SessionError, match=name.replace(".", r"\.")):
        convert(tmp_path / name, configuration(tmp_path), tmp_path / "out.mcap")


def test_a_session_that_cannot_be_written_is_a_fault_of_the_system(tmp_path: Path) -> None:
    recording = save_npz(tmp_path / "a.npz", columns())
    for out in (tmp_path / "no folder" / "out.mcap", tmp_path / "robot.toml" / "out.mcap", tmp_path):
        with pytest.raises(SystemFault):
            convert(recording, configuration(tmp_path), out)


def test_a_refused_recording_leaves_an_older_session_as_it_was(tmp_path: Path) -> None:
    (tmp_path / "out.mcap").write_bytes(b"older")
    data = columns()
    data["t"][49] = np.nan
    with pytest.raises(SessionError):
        convert(save_npz(tmp_path / "a.npz", data), configuration(tmp_path), tmp_path / "out.mcap")
    assert (tmp_path / "out.mcap").read_bytes() == b"older"
    assert not list(tmp_path.glob("*.part"))


@settings(max_examples=150)
@given(
    damage=st.lists(st.tuples(st.integers(0, 10_000), st.integers(0, 255)), min_size=1, max_size=5),
    end=st.integers(0, 10_000),
)
def test_any_bytes_in_an_npz_give_a_session_or_a_session_error(
    tmp_path_factory: pytest.TempPathFactory, damage: list[tuple[int, int]], end: int
) -> None:
    folder = tmp_path_factory.getbasetemp()
    path = save_npz(folder / "fuzz.npz", columns(5))
    content = bytearray(path.read_bytes())
    for at, value in damage:
        content[at % len(content)] = value
    path.write_bytes(content[: max(end, len(content) // 2)])
    with suppress(SessionError):
        convert(path, configuration(folder), folder / "fuzz.mcap")


# --- the command


def run(*arguments: str) -> Any:
    app = typer.Typer()
    app.command("convert")(command)
    result = CliRunner().invoke(app, list(arguments), catch_exceptions=False)
    assert result.exit_code == 0
    return result


def test_the_command_says_what_it_did_and_what_it_assumed(tmp_path: Path) -> None:
    configuration(tmp_path)
    recording = save_npz(tmp_path / "a.npz", columns())
    arguments = [str(recording), "--config", str(tmp_path / "robot.toml"), "-o", str(tmp_path / "out.mcap")]
    shown = run(*arguments).stdout
    assert "50 samples of 3 joints" in shown
    assert "assumed: mode work" in shown


def test_the_command_gives_its_summary_as_json(tmp_path: Path) -> None:
    configuration(tmp_path)
    recording = save_npz(tmp_path / "a.npz", columns())
    arguments = [str(recording), "--config", str(tmp_path / "robot.toml"), "-o", str(tmp_path / "out.mcap")]
    summary = json.loads(run(*arguments, "--json").stdout)
    assert summary["samples"] == 50
    assert summary["ticks"] == 50
    assert summary["joints"] == list(JOINTS)
    assert summary["columns"] == ["t", "q", "qd", "tau"]
    assert summary["last_t"] - summary["first_t"] == pytest.approx(0.049)
    assert "mode work" in summary["assumed"]
    assert Session(Path(summary["session"])).run == summary["run"]
