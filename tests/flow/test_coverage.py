"""What the robot says of itself decides how far may be judged, joint by joint; never taken for granted."""

from __future__ import annotations

from itertools import product
from typing import Any

import msgpack
import numpy as np
import pinocchio
import pytest
from numpy.typing import ArrayLike, NDArray

from monitor.flow.layout import Coverage, Reason
from monitor.setup.build import Setup
from tests.flow.rig import PAIR, PAIR_JOINTS, PERIOD_NS, SLED, Mover, Rig, Rows, base_fields, both, made

Floats = NDArray[np.float64]

W, C, B = Coverage.WATCHING, Coverage.CONDITIONAL, Coverage.BLIND
REST = np.array([0.3, -0.5])
WEIGHT = Mover(PAIR, (0.3, 0.1)).gravity_torque(REST)


def stand(rig: Rig, count: int, tau: ArrayLike = WEIGHT, **fields: Any) -> None:
    for _ in range(count):
        rig.sample(REST, [0.0, 0.0], tau, **fields)


def seen(rig: Rig) -> tuple[list[tuple[Coverage, Reason]], tuple[Coverage, Reason]]:
    """Return coverage and reason per joint, and whole."""
    out = rig.outputs
    joints = [(Coverage(int(c)), Reason(int(r))) for c, r in zip(out["coverage"], out["reason"], strict=True)]
    return joints, (Coverage(int(out["coverage_whole"])), Reason(int(out["reason_whole"])))


@pytest.mark.parametrize(
    ("condition", "joints", "whole"),
    [
        ({}, [(W, Reason.NONE)] * 2, (W, Reason.NONE)),
        ({"brake": [1, 0]}, [(B, Reason.BRAKED), (W, Reason.NONE)], (C, Reason.BRAKED)),
        ({"brake": [1, 1]}, [(B, Reason.BRAKED)] * 2, (B, Reason.BRAKED)),
        ({"drive": [1, 0]}, [(W, Reason.NONE), (B, Reason.UNPOWERED)], (C, Reason.UNPOWERED)),
        ({"drive": [0, 0], "brake": [1, 0]}, [(B, Reason.BRAKED), (B, Reason.UNPOWERED)], (B, Reason.BRAKED)),
        ({"mode": "guided"}, [(C, Reason.GUIDED)] * 2, (C, Reason.GUIDED)),
        ({"mode": "calibrating"}, [(C, Reason.CALIBRATING)] * 2, (C, Reason.CALIBRATING)),
        ({"mode": "stopped"}, [(C, Reason.STOPPED)] * 2, (C, Reason.STOPPED)),
        ({"stop": "door-open"}, [(C, Reason.STOPPED)] * 2, (C, Reason.STOPPED)),
        (
            {"stop": "door-open", "brake": [1, 0]},
            [(B, Reason.BRAKED), (C, Reason.STOPPED)],
            (C, Reason.BRAKED),
        ),
        ({"mode": "guided", "brake": [0, 1]}, [(C, Reason.GUIDED), (B, Reason.BRAKED)], (C, Reason.BRAKED)),
        ({"mode": ...}, [(C, Reason.CONDITION_UNKNOWN)] * 2, (C, Reason.CONDITION_UNKNOWN)),
        ({"drive": ...}, [(C, Reason.CONDITION_UNKNOWN)] * 2, (C, Reason.CONDITION_UNKNOWN)),
        ({"brake": None}, [(C, Reason.CONDITION_UNKNOWN)] * 2, (C, Reason.CONDITION_UNKNOWN)),
        ({"payload": ...}, [(C, Reason.PAYLOAD_UNKNOWN)] * 2, (C, Reason.PAYLOAD_UNKNOWN)),
        ({"payload": {"m": 1.0}}, [(W, Reason.NONE)] * 2, (W, Reason.NONE)),
        ({"support": ...}, [(W, Reason.NONE)] * 2, (W, Reason.NONE)),
        ({"serial": "P-1"}, [(W, Reason.NONE)] * 2, (W, Reason.NONE)),
        ({"serial": "P-2"}, [(B, Reason.REFUSED)] * 2, (B, Reason.REFUSED)),
    ],
)
def test_each_condition_has_its_coverage_per_joint_and_whole_and_its_reason(
    pair: Rig, condition: dict[str, Any], joints: Any, whole: Any
) -> None:
    stand(pair, 700)
    pair.condition(**condition)
    stand(pair, 1600)
    assert seen(pair) == (joints, whole)
    health = [m.body for m in pair.messages if m.topic == "health"][-1]
    words = {W: "watching", C: "conditional", B: "blind"}

    def said(one: tuple[Coverage, Reason]) -> list[str]:
        return [words[one[0]], one[1].name.lower().replace("_", "-")]

    assert [health["coverage"], health["reason"]] == said(whole)
    assert health["joints"] == dict(zip(("upper", "lower"), map(said, joints), strict=True))


def test_no_combination_that_leaves_anything_unsaid_or_unpowered_counts_as_watching(
    pair_setup: Setup,
) -> None:
    rig = Rig(pair_setup)
    stand(rig, 700)
    values: dict[str, tuple[Any, ...]] = {
        "drive": ([1, 1], [1, 0], ...),
        "brake": ([0, 0], [1, 0], ...),
        "mode": ("work", "stopped", "guided", "calibrating", ...),
        "payload": (None, {"m": 2.0}, ...),
    }
    for drive, brake, mode, payload in product(*values.values()):
        rig.condition(drive=drive, brake=brake, mode=mode, payload=payload)
        rig.state["pending"], rig.outputs["settling"] = 0, 0
        rig.elapse(1000)
        joints, whole = seen(rig)
        fine = drive == [1, 1] and brake == [0, 0] and mode == "work" and payload is not ...
        assert (whole[0] == W) == fine, (drive, brake, mode, payload)
        assert (whole[1] == Reason.NONE) == fine
        for i, (coverage, _) in enumerate(joints):
            blind = (drive is not ... and not drive[i]) or (brake is not ... and bool(brake[i]))
            assert (coverage == B) == blind
        judged = rig.pipeline.blocks.inputs[0]["judged"]
        for i in range(2):
            assert not (judged[i] and (joints[i][0] == B or mode == "calibrating"))


@pytest.mark.parametrize(
    ("support", "reason", "judged"),
    [
        ("ground", Reason.FEET_UNKNOWN, 0),  # this one has no feet that could be planned to stand
        ("hoisted", Reason.NONE, 1),
        ("carried", Reason.HELD, 1),
        ("docked", Reason.HELD, 0),
        (..., Reason.CONDITION_UNKNOWN, 0),
    ],
)
def test_a_walker_is_watched_as_far_as_the_forces_on_it_are_known(
    sled_setup: Setup, support: Any, reason: Reason, judged: int
) -> None:
    rig = Rig(sled_setup)
    rig.condition(support=support)
    pose = np.array([0, 0, 1, 1, 0, 0, 0.0, 0, 0])
    pinned = np.array([0, 0, 1, 0, 0, 0, 1.0, 0, 0])  # the judge has w last
    held = Mover(SLED, (0.05, 0.5), floating=True).gravity_torque(pinned)[6:]
    base = base_fields(pose, np.zeros(6))
    for _ in range(600):
        rig.sample([0.0, 0.0], [0.0, 0.0], held, **base)
    assert seen(rig)[0] == [(W if reason == Reason.NONE else C, reason)] * 2
    assert rig.pipeline.blocks.inputs[0]["judged"].tolist() == [0] * 6 + [judged] * 2


def test_before_the_robot_says_anything_nothing_counts_as_well(pair_setup: Setup) -> None:
    rig = Rig(pair_setup, known=False)
    rig.elapse(1_000_000)
    assert seen(rig)[1] == (B, Reason.NO_STREAM)
    stand(rig, 100)
    assert seen(rig)[1] == (B, Reason.SETTLING)
    stand(rig, 500)
    assert seen(rig) == ([(C, Reason.CONDITION_UNKNOWN)] * 2, (C, Reason.CONDITION_UNKNOWN))
    # Unknown is not unwatched: a torque loss opens an event.
    stand(rig, 300, np.zeros(2))
    assert rig.alarms()[0]["kind"] == "unexplained-torque"
    assert {body["event"] for body in rig.alarms()} == {1}


def test_a_condition_that_is_not_repeated_grows_stale_after_three_seconds(pair: Rig) -> None:
    stand(pair, 700)
    pair.silent_condition()
    stand(pair, 2400)
    assert seen(pair)[1] == (W, Reason.NONE)
    stand(pair, 1000)
    assert seen(pair) == ([(C, Reason.CONDITION_UNKNOWN)] * 2, (C, Reason.CONDITION_UNKNOWN))
    rebased = int(pair.state["rebased"])
    pair.condition()
    stand(pair, 2)
    assert seen(pair)[1] == (W, Reason.NONE)
    assert pair.state["rebased"] == rebased
    assert pair.alarms() == []


def test_time_is_accounted_to_exactly_one_coverage(pair: Rig) -> None:
    pair.elapse(1_000_000)
    begin = pair.now_ns
    stand(pair, 2000)
    pair.condition(brake=[1, 1])
    stand(pair, 1000)
    pair.elapse(500_000_000)
    spent = pair.pipeline.coverage_ns(pair.now_ns)
    assert spent.sum() == pair.now_ns - begin
    assert spent[W, Reason.NONE] == pytest.approx(1.5e9, abs=5e6)
    assert spent[B, Reason.SETTLING] == pytest.approx(0.5e9, abs=5e6)
    # One tick only noticed the silence at its end: until then it is accounted to what was known.
    assert spent[B, Reason.BRAKED] == pytest.approx(1.5e9, abs=5e6)
    assert spent[B, Reason.NO_STREAM] == PERIOD_NS  # before the first sample
    pair.elapse(300_000_000)
    assert pair.pipeline.coverage_ns(pair.now_ns)[B, Reason.NO_STREAM] == PERIOD_NS + 300_000_000


def test_an_ordinary_stop_with_all_brakes_closed_raises_no_alarm_while_the_torque_drops(pair: Rig) -> None:
    stand(pair, 1000, tau_cmd=WEIGHT.tolist())
    # The brakes close and say so, then the drives let go; the controller may still ask for the weight.
    pair.condition(brake=[1, 1], mode="stopped", stop="end of shift")
    stand(pair, 50, tau_cmd=WEIGHT.tolist())
    for k in range(50):
        stand(pair, 1, WEIGHT * (1 - k / 50), tau_cmd=WEIGHT.tolist())
    stand(pair, 200, np.zeros(2), tau_cmd=WEIGHT.tolist())
    pair.condition(brake=[1, 1], drive=[0, 0], mode="stopped", stop="end of shift")
    stand(pair, 1000, np.zeros(2), tau_cmd=WEIGHT.tolist())
    # And back: drives on, holding the weight, brakes open.
    pair.condition(brake=[1, 1], mode="stopped")
    stand(pair, 100, WEIGHT, tau_cmd=WEIGHT.tolist())
    pair.condition()
    stand(pair, 1500, tau_cmd=WEIGHT.tolist())
    assert pair.alarms() == []
    assert seen(pair)[1] == (W, Reason.NONE)


def test_a_drive_that_lets_go_without_its_brake_is_no_ordinary_stop(pair: Rig) -> None:
    stand(pair, 1000)
    pair.condition(brake=[1, 0])
    stand(pair, 700)
    stand(pair, 300, [0.0, WEIGHT[1] + 4.0])
    # One row alone is judged: a force on the blade and a fault of its drive are the same data.
    (alarm,) = pair.alarms()
    assert (alarm["kind"], alarm["verdict"], alarm["joint"]) == ("unexplained-torque", "undecided", "lower")


def test_a_joint_that_moves_behind_its_closed_brake_is_an_alarm_until_the_brake_opens(pair: Rig) -> None:
    stand(pair, 1000)
    pair.condition(brake=[0, 1])
    # While it closes it may still settle.
    for k in range(200):
        pair.sample(REST + both(0.0, 1e-4 * k), [0.0, 0.1], WEIGHT)
    for _ in range(300):
        pair.sample(REST + both(0.0, 0.02), [0.0, 0.0], WEIGHT)
    assert not pair.alarms("brake")
    for k in range(120):
        pair.sample(REST + both(0.0, 0.02 + 1e-4 * k), [0.0, 0.1], WEIGHT)
    (alarm,) = pair.alarms("brake")
    assert (alarm["verdict"], alarm["detail"], alarm["joint"], alarm["priority"]) == (
        "actuator", "moved-while-closed", "lower", "high",
    )  # fmt: skip
    for _ in range(500):
        pair.sample(REST + both(0.0, 0.0319), [0.0, 0.0], WEIGHT)
    assert ("brake", "moved-while-closed", "lower") in pair.standing()
    pair.condition()
    for _ in range(10):
        pair.sample(REST + both(0.0, 0.0319), [0.0, 0.0], WEIGHT)
    assert ("brake", "moved-while-closed", "lower") not in pair.standing()
    assert len(pair.alarms("brake")) == 2


def test_another_robots_serial_stops_the_watch_with_an_alarm_until_the_right_one_is_back(pair: Rig) -> None:
    stand(pair, 700)
    stepped = int(pair.state["stepped"])
    pair.condition(serial="P-2")
    stand(pair, 300)
    assert pair.state["stepped"] == stepped
    assert pair.state["refused"] == 300
    assert seen(pair)[0] == [(B, Reason.REFUSED)] * 2
    (alarm,) = pair.alarms()
    assert (alarm["kind"], alarm["detail"]) == ("robot", "other-serial")
    assert (alarm["detail"], alarm["priority"]) == ("other-serial", "high")
    assert "'P-2'" in alarm["text"]
    pair.condition(serial=...)
    stand(pair, 100)
    assert pair.state["refused"] == 400, "to say nothing is no proof"
    pair.condition(serial="P-1")
    stand(pair, 700)
    assert pair.standing() == set()
    assert seen(pair)[1] == (W, Reason.NONE)
    assert not pair.alarms("unexplained-torque")


@pytest.mark.parametrize("inertia", [True, False])
def test_an_announced_payload_is_carried_by_the_model_where_it_is(inertia: bool) -> None:
    # Judge: pin moves the arm with the payload as a body of its own, its frame that of the tool.
    m, c = 1.7, (0.05, -0.02, 0.11)
    J = (
        ((0.006, 0.001, 0.0), (0.001, 0.007, -0.0005), (0.0, -0.0005, 0.004))
        if inertia
        else ((0.0,) * 3,) * 3
    )
    entries = {"ixx": J[0][0], "ixy": J[0][1], "ixz": J[0][2], "iyy": J[1][1], "iyz": J[1][2], "izz": J[2][2]}
    written = " ".join(f'{name}="{value}"' for name, value in entries.items())
    origin = f'<origin xyz="{c[0]} {c[1]} {c[2]}"/>'
    body = f'<inertial>{origin}<mass value="{m}"/><inertia {written}/></inertial>'
    mover = Mover(PAIR.replace('<link name="tip"/>', f'<link name="tip">{body}</link>'), (0.3, 0.1))

    def torque(t: float, q: Floats, v: Floats) -> Floats:
        shaking: Floats = np.array([6.0, 3.0]) * np.sin(np.array([5.0, 7.0]) * t)
        return mover.gravity_torque(q) + shaking - 0.5 * v

    rows: Rows = mover.run(1.0, (0.3, -0.7), (0.0, 0.0), torque)
    setup = made(PAIR, PAIR_JOINTS, {"tool_link": "tip"}, {"residual": "second-order"})
    payload = {"m": m, "c": list(c), "I": [list(row) for row in J]}
    announced, silent, bare = Rig(setup), Rig(setup), Rig(made(PAIR, PAIR_JOINTS))
    announced.condition(payload=payload if inertia else {"m": m, "c": list(c)})
    bare.condition(payload=payload)
    fast, _ = announced.play(rows)
    assert np.abs(fast).max() < 1e-3
    fast, _ = silent.play(rows)
    assert np.abs(fast).max() > 1.0
    bare.play(rows)
    assert seen(bare)[1] == (C, Reason.PAYLOAD_UNKNOWN)


def test_a_payload_changes_the_gravity_torque_by_its_weight_times_its_lever_arm(pair: Rig) -> None:
    stand(pair, 700)
    before = pair.state["g"].copy()
    # The first sample after a change is the new start: the model is taken exactly there.
    pair.condition(payload={"m": 2.5, "c": [0.1, -0.2, 0.3]})
    stand(pair, 1)
    change = pair.state["g"] - before
    # Judge: pin's frame Jacobian of the payload's centre of mass, times its weight.
    model = pinocchio.buildModelFromXML(PAIR)
    data = model.createData()
    frame = model.getFrameId("tip")
    J = pinocchio.computeFrameJacobian(model, data, REST, frame, pinocchio.LOCAL_WORLD_ALIGNED)
    pinocchio.updateFramePlacements(model, data)
    arm = data.oMf[frame].rotation @ np.array([0.1, -0.2, 0.3])
    weight = np.array([0.0, 0.0, -2.5 * 9.81])
    np.testing.assert_allclose(change, -J.T @ np.concatenate([weight, np.cross(arm, weight)]), atol=1e-10)
    pair.condition()
    stand(pair, 1)
    np.testing.assert_allclose(pair.state["g"], before, atol=1e-10)


@pytest.mark.parametrize(
    "payload",
    [
        {"m": 1.0, "I": [[0.01, 0, 0], [0, 0.01, 0], [0, 0, 0.03]]},  # triangle inequality
        {"m": 1.0, "I": [[-0.01, 0, 0], [0, 0.01, 0], [0, 0, 0.01]]},
        {"m": 1.0, "I": [[0.01, 0.005, 0], [0, 0.01, 0], [0, 0, 0.01]]},  # not symmetric
        # check-values §2: positive definite, and yet no body has it.
        {"m": 1.0, "I": [[1.15e-4, 5.2e-5, 2.5e-5], [5.2e-5, 1.53e-4, 3.4e-5], [2.5e-5, 3.4e-5, 1.9e-4]]},
        {"m": 1e300, "c": [1e300, 0.0, 0.0]},
        {"m": 1.0, "c": [1e200, 0.0, 0.0]},
    ],
)
def test_a_payload_that_no_body_can_be_is_a_wire_error_and_changes_nothing(pair: Rig, payload: Any) -> None:
    stand(pair, 10)
    before = pair.pipeline.blocks.inputs["E"].tobytes()
    bad = {"boot": "first", "mode": "work", "drive": [1, 1], "brake": [0, 0], "payload": payload}
    pair.elapse(1000, msgpack.packb(bad), "robot")
    assert pair.state["wire_errors"] == 1
    assert pair.standing() == {("wire", "malformed", None)}
    assert pair.pipeline.blocks.inputs["E"].tobytes() == before


def test_heavy_payloads_far_from_the_tool_are_not_refused_for_rounding(pair: Rig) -> None:
    for m, c in ((400.0, [3.0, -2.0, 1.0]), (1e-6, [0.0, 0.0, 0.0]), (1e4, [9.0, 9.0, 9.0])):
        pair.condition(payload={"m": m, "c": c})
    assert pair.state["wire_errors"] == 0


def test_a_change_of_condition_re_bases_and_the_same_condition_again_does_not(pair: Rig) -> None:
    stand(pair, 700)
    rebased = int(pair.state["rebased"])
    for _ in range(3):
        pair.condition()
        stand(pair, 5)
    assert pair.state["rebased"] == rebased
    for change in ({"mode": "guided"}, {"tool": "hook"}, {"payload": {"m": 1.0}}, {"support": "ground"}):
        pair.condition(**change)
        stand(pair, 5)
        rebased += 1
        assert pair.state["rebased"] == rebased


def test_a_new_boot_id_is_a_restart_without_an_event(pair: Rig) -> None:
    stand(pair, 700)
    pair.condition(boot="second")
    pair.seq, pair.t_ns = 9, 123_456_789
    stand(pair, 700)
    assert pair.state["restarts"] == 1
    assert pair.state["lost"] == 0
    assert pair.state["bad"][1:].sum() == 0
    assert pair.alarms() == []


@pytest.mark.parametrize(("braked", "judged"), [([1, 0], [0, 0]), ([0, 1], [0, 0]), ([0, 0], [1, 1])])
def test_behind_coupled_motors_a_row_is_judged_only_if_all_its_motors_are(
    braked: list[int], judged: list[int]
) -> None:
    # Joint 1 turns with motor 1 alone, but its torque is that of both: tau_joint = coupling^-T tau_motor.
    coupled = made(PAIR, PAIR_JOINTS, {"coupling": [[1.0, 0.0], [-0.5, 0.8]]})
    rig = Rig(coupled)
    rig.condition(brake=braked)
    assert rig.pipeline.blocks.inputs[0]["judged"].tolist() == judged


@pytest.mark.parametrize(
    "said", [None, {}, {"support": "ground"}, {"support": "hoisted", "mode": "calibrating"}]
)
def test_a_walker_that_does_not_say_it_hangs_free_opens_no_event_of_its_feet(
    sled_setup: Setup, said: dict[str, Any] | None
) -> None:
    # It stands: the ground's force loads the slide with its whole weight.
    rig = Rig(sled_setup, known=False)
    if said is not None:
        rig.condition(**({"support": ...} | said))
    base = base_fields(np.array([0, 0, 1, 1, 0, 0, 0.0]), np.zeros(6))
    for _ in range(900):
        rig.sample([0.0, 0.0], [0.0, 0.0], [5.0, -100.0], **base)
    assert abs(rig.outputs["r_fast"][7]) > 50.0
    assert rig.alarms() == []
