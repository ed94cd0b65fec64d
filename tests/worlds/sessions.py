"""Simulated sessions with the truth beside them, and a cache of them on disk.

Split: robots and sessions with seeds below `HELD_OUT_FROM` are for tuning; from there on they are held out,
and nobody looks at them before judging. Both halves come from the same generator.
"""

from __future__ import annotations

import json
import os
from collections.abc import Callable, Mapping
from dataclasses import asdict, dataclass, fields
from hashlib import sha256
from pathlib import Path
from typing import Any

import mujoco
import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

HELD_OUT_FROM = 1000
# Goes up, by world, with every change of what a seed means; cached sessions of another are not read.
VERSIONS = {"elastic": "2"}
FOLDER_VARIABLE = "LIMBTELL_WORLDS"


def held_out(seed: int) -> bool:
    """Return whether a robot or session of this seed is kept for judging."""
    return seed >= HELD_OUT_FROM


@dataclass(frozen=True)
class Truth:
    """One thing that happened.

    Attributes
    ----------
    kind : str
        `contact`, `actuator`, `position-sensor`, `torque-sensor`, `load` or `signal`.
    detail : str
        Contact: `prescribed`, `collision`. Actuator: `torque-loss`, `coulomb-friction`, `viscous-friction`,
        `offset`, `ripple`, `open-circuit`, `stuck`. Position sensor: `offset`. Torque sensor: `offset`,
        `scale`, `frozen`. Load: `gripped`. Signal: `jump`, `frozen`, `contradiction`, `noise`, `gap`,
        `duplicate`.
    joint, link : str or None
        Where it was.
    start_s, end_s : float
        From the first to the last instant at which it differs from nothing.
    size : float
        In `unit`: peak force [N]; lost share; added friction as a multiple of the normal one; torque
        [share of rated]; offset [rad]; mass [kg]; duration of a gap [s].
    unit : str
        Of the size.
    effect : float or None
        Largest unexplained torque as a share of rated torque, over all joints; for a load the largest weight
        torque. None where it has none (signals, sensors).
    effect_joint : str or None
        The joint of that largest share.
    passes_s : float or None
        When the unexplained torque first passes 3 % of rated on some joint.
    point_m : (3,) or None
        Contact point in link axes: as prescribed, or that of the largest force.
    force_n : (3,) or None
        Largest force, world axes.
    truthful : bool or None
        Open circuit: whether the drive reports the torque that is gone.
    during : int or None
        Index of the lasting fault into which this falls.
    """

    kind: str
    detail: str
    joint: str | None
    link: str | None
    start_s: float
    end_s: float
    size: float
    unit: str
    effect: float | None = None
    effect_joint: str | None = None
    passes_s: float | None = None
    point_m: tuple[float, float, float] | None = None
    force_n: tuple[float, float, float] | None = None
    truthful: bool | None = None
    during: int | None = None


@dataclass(frozen=True)
class Exact:
    """The motion without sensors, (T,n): link side q, qd, qdd; rotor acceleration; torques of the same rows.

    Rigid or elastic: `M qdd + C qd + g + armature motor_qdd = tau + friction + unexplained` with the true
    inertias, `tau` being what the drive believes.
    """

    q: Floats
    qd: Floats
    qdd: Floats
    motor_qdd: Floats
    tau: Floats
    friction: Floats


@dataclass(frozen=True)
class WorldSession:
    """A recording as the robot reports it, T rows at 1 kHz, n joints in the order of `joints`, and the truth.

    Attributes
    ----------
    world, robot_seed, seed : str, int, int
        What made it.
    urdf : str
        The description that is given out.
    joints : tuple of dict
        Keys and values for `[[robot.joint]]`.
    links : tuple of str
        Names, from the base out.
    seq : (T,)
        Number of the sample; skips where samples are lost, repeats where one came twice.
    t : (T,)
        Robot clock [s].
    q, qd, tau, tau_cmd : (T,n)
        Position, velocity, believed motor torque (joint side), commanded torque, as reported.
    truths : tuple of Truth
        In order of their start.
    unexplained : (T,n)
        Torque from outside (`Jᵀ F`), or lost or added in the drive, exact.
    force : (T,3)
        Sum of the contact forces, world axes [N].
    tau_link : (T,n) or None
        Torque at the link side as sensors there read it.
    stopped : bool
        Whether a protective stop ended the session early: a joint was too far from where it should be.
    exact : Exact or None
        Only where asked for, and never cached.
    """

    world: str
    robot_seed: int
    seed: int
    urdf: str
    joints: tuple[dict[str, Any], ...]
    links: tuple[str, ...]
    seq: Ints
    t: Floats
    q: Floats
    qd: Floats
    tau: Floats
    tau_cmd: Floats
    truths: tuple[Truth, ...]
    unexplained: Floats
    force: Floats
    tau_link: Floats | None = None
    stopped: bool = False
    exact: Exact | None = None


_SPARSE = ("unexplained", "force")
_READ_IN_SINGLE = ("qd", "tau", "tau_cmd", "tau_link")


def cached(
    make: Callable[[], WorldSession], key: Mapping[str, Any], folder: str | Path | None = None
) -> WorldSession:
    """Return the session of this key from the folder, or make it and put it there.

    Without a folder that of the environment variable `LIMBTELL_WORLDS` is taken; without that, none.
    """
    folder = folder or os.environ.get(FOLDER_VARIABLE)
    if folder is None:
        return make()
    version = VERSIONS.get(key["world"], "1")
    text = json.dumps({**key, "version": version, "engine": mujoco.__version__}, sort_keys=True)
    path = Path(folder) / f"{sha256(text.encode()).hexdigest()[:24]}.npz"
    if path.exists():
        return load(path)
    session = make()
    path.parent.mkdir(parents=True, exist_ok=True)
    save(path, session)
    return session


def save(path: Path, session: WorldSession) -> None:
    """Write a session; readings fit single precision, positions whole encoder steps: nothing is lost."""
    words: dict[str, Any] = {}
    arrays: dict[str, Any] = {}
    step = session.joints[0]["encoder_step"]
    for field in fields(session):
        value = getattr(session, field.name)
        if field.name in _SPARSE:
            rows = np.flatnonzero(value.any(axis=1))
            arrays[f"{field.name}_rows"], arrays[field.name] = rows, value[rows]
        elif field.name in _READ_IN_SINGLE and value is not None:
            arrays[field.name] = value.astype(np.float32)
        elif field.name == "q":
            arrays["q"] = np.round(value / step).astype(np.int32)
        elif isinstance(value, np.ndarray):
            arrays[field.name] = value
        elif field.name == "truths":
            words["truths"] = [asdict(truth) for truth in value]
        elif field.name != "exact":
            words[field.name] = value
    beside = path.with_suffix(f".{os.getpid()}.part")
    with beside.open("wb") as file:
        np.savez(file, words=np.array(json.dumps(words)), **arrays)
    beside.replace(path)


def load(path: Path) -> WorldSession:
    """Read a session; equal, bit for bit, to the one that was saved, but for `exact`."""
    with np.load(path) as file:
        arrays = {name: file[name] for name in file.files}
    words = json.loads(str(arrays.pop("words")))
    joints = tuple(words.pop("joints"))
    samples = len(arrays["t"])
    for name in _SPARSE:
        values, rows = arrays[name], arrays.pop(f"{name}_rows")
        arrays[name] = np.zeros((samples, values.shape[1]))
        arrays[name][rows] = values
    for name in arrays.keys() & set(_READ_IN_SINGLE):
        arrays[name] = arrays[name].astype(np.float64)
    arrays["q"] = arrays["q"] * joints[0]["encoder_step"]
    truths = tuple(_truth(values) for values in words.pop("truths"))
    links = tuple(words.pop("links"))
    return WorldSession(joints=joints, links=links, truths=truths, **words, **arrays)


def _truth(values: dict[str, Any]) -> Truth:
    for name in ("point_m", "force_n"):
        if values[name] is not None:
            values[name] = tuple(values[name])
    return Truth(**values)
