"""What commissioning knows of a robot beyond its configuration, a model it obeys and a band, and its file.

The file is JSON. It says what it was made for, and is refused for anything else: a model fitted with one sign
of an axis is wrong with the other.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, fields, replace
from hashlib import sha256
from typing import Any, Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray
from pydantic import Field
from scipy.stats import chi2

from monitor.errors import ConfigError
from monitor.kernels.band import (
    CAUSES,
    CRAWLS,
    CREEPS,
    FLOOR,
    INERTIA,
    NOISE,
    STANDS,
    STANDS_SQUARED,
    TORQUE,
    VELOCITY,
)
from monitor.kernels.ledger import BENDS
from monitor.robot.pseudo_inertia import flaw
from monitor.robot.tree import Tree
from monitor.setup.config import Config
from monitor.setup.table import Table, shown, validated

Floats = NDArray[np.float64]

SCHEMA = 1


class Model(NamedTuple):
    """Inertia and friction in the order of the model.

    Attributes
    ----------
    E : (N,4,4)
        Pseudo-inertias of the bodies, no payload.
    armature, viscous, coulomb, offset : (n,)
        Rotor inertia [kg m²], friction [N m s/rad, N m, N m]; zero for the rows of a base.
    bend : (n,BENDS)
        How friction bends away from Coulomb and viscous friction at low speed [N m], see kernels/ledger.py.
    """

    E: Floats
    armature: Floats
    viscous: Floats
    coulomb: Floats
    offset: Floats
    bend: Floats


@dataclass(frozen=True, eq=False)
class Band:
    """How large residuals are while all is well, and what is beyond.

    Attributes
    ----------
    fast, slow : (n,CAUSES)
        Weights of the causes of the squared residual, see kernels/band.py.
    rho : (n,n)
        Correlation of the fast residuals.
    slow_share : (n,)
        Share of the variance that is slow noise.
    track_sd : (n,3)
        How much Coulomb, viscous and constant friction may change from day to day [N m, N m s/rad, N m].
    row_limit, slow_limit, body_limit : float
        |residual| / sd of one row, and squared normalised residual of all, that open an event.
    cusum_sd : (n,)
        How far the model is off for a second or more [N m]; the sums count it beside the noise.
    cusum_limit : float
        Sum of normalised block means, less the reference, that opens an event.
    slow_body_limit : float
        As `body_limit`, of the slow residual of a walker.
    foot_limit : float
        Squared normalised force of a foot that should feel none, that opens an event.
    """

    fast: Floats
    slow: Floats
    rho: Floats
    slow_share: Floats
    track_sd: Floats
    row_limit: float
    slow_limit: float
    body_limit: float
    cusum_sd: Floats
    cusum_limit: float
    slow_body_limit: float
    foot_limit: float


@dataclass(frozen=True, eq=False)
class Calibration:
    """Model and band together.

    `provenance` is for people: hashes of the sessions, date and versions, whatever the caller knows (JSON).
    """

    model: Model
    band: Band
    provenance: Mapping[str, Any] = field(default_factory=dict)


# Without commissioning: a row's model is taken to be off by so much (common practice, no source).
_FLOOR, _TORQUE, _INERTIA = 0.01, 0.03, 0.12  # of rated, of the torque itself, of the inertial torque
_COULOMB, _VISCOUS = 0.25, 0.25  # of normal friction, from day to day
_LASTING = 0.01  # of rated
ROW_LIMIT = 6.0
CUSUM_LIMIT = 12.0


def default_band(rated: Floats, coulomb: Floats, viscous: Floats) -> Band:
    """Return the band that holds without commissioning: wide, from rated torque and normal friction (n)."""
    n = len(rated)
    fast = np.zeros((n, CAUSES))
    fast[:, FLOOR] = (_FLOOR * rated) ** 2
    fast[:, NOISE] = 1.5
    fast[:, STANDS] = (0.5 * coulomb) ** 2
    fast[:, STANDS_SQUARED] = (0.5 * coulomb) ** 2
    fast[:, TORQUE] = _TORQUE**2
    fast[:, VELOCITY] = (_VISCOUS * viscous) ** 2
    fast[:, INERTIA] = _INERTIA**2
    slow = fast.copy()
    slow[:, NOISE] = 0.3
    return Band(
        fast=fast,
        slow=slow,
        rho=np.eye(n),
        slow_share=np.full(n, 0.5),
        track_sd=np.column_stack([_COULOMB * coulomb, _VISCOUS * viscous, 0.02 * rated]),
        row_limit=ROW_LIMIT,
        slow_limit=ROW_LIMIT,
        body_limit=body_limit(n),
        cusum_sd=_LASTING * rated,
        cusum_limit=CUSUM_LIMIT,
        slow_body_limit=body_limit(n),
        foot_limit=body_limit(3),
    )


# What is friction of the joint, and so of the motor side alone.
_OF_FRICTION = [STANDS, STANDS_SQUARED, VELOCITY, CREEPS, CRAWLS]


def taken_apart(band: Band, rows: Sequence[int], noise_sd: Floats) -> Band:
    """Return the band (n rows) with T joints taken apart into link side and motor side (n + T rows).

    Parameters
    ----------
    band : Band
        Of whole joints.
    rows : sequence of int
        Rows of the T joints that have a torque sensor at the link side.
    noise_sd : (T,)
        Standard deviation of these sensors [N m].

    Both sides get the causes of the whole, but the link side no friction: it feels none. Noise of the sensor
    adds to both, with opposite sign: `[[l + s, -s], [-s, m + s]]` for the two rows of a joint. Its whole
    variance s is counted, though the residual's filter lets less through.
    """
    if not len(rows):
        return band
    n, at = len(band.rho), np.array(rows)
    motors = n + np.arange(len(at))

    def doubled(x: Floats) -> Floats:
        return np.concatenate([x, x[at]])

    fast, slow, track_sd = doubled(band.fast), doubled(band.slow), doubled(band.track_sd)
    for causes in (fast, slow):
        causes[at[:, None], _OF_FRICTION] = 0.0
        causes[at, FLOOR] += noise_sd**2
        causes[motors, FLOOR] += noise_sd**2
    track_sd[at] = 0.0
    rho = np.eye(n + len(at))
    rho[:n, :n] = band.rho
    rho[at, motors] = rho[motors, at] = -(noise_sd**2) / np.sqrt(fast[at, FLOOR] * fast[motors, FLOOR])
    return replace(
        band,
        fast=fast,
        slow=slow,
        rho=rho,
        slow_share=doubled(band.slow_share),
        track_sd=track_sd,
        body_limit=body_limit(len(rho)),
        cusum_sd=doubled(band.cusum_sd),
    )


def body_limit(n: int) -> float:
    """Return the limit of `r' R^-1 r` that goes with `ROW_LIMIT` for n rows of normal noise."""
    return float(chi2.isf(math.erfc(ROW_LIMIT / math.sqrt(2.0)), n))


# --- the file ------------------------------------------------------------------------------------

# Keys of a joint and of the watch without which a calibration is void.
_OF_JOINT = (
    "sign", "zero_offset", "torque_meaning", "torque_constant", "gear_ratio", "gravity_compensated",
    "torque_delay_s", "friction_velocity", "encoder_step", "position_noise_sd", "velocity_noise_sd",
)  # fmt: skip
_OF_WATCH = ("residual", "fast_walk", "slow_walk", "fast_bandwidth_hz", "slow_bandwidth_hz")
_LEAST_EIGENVALUE = 1e-6

Row = tuple[float, ...]
Rows = tuple[Row, ...]


class _ModelTable(Table):
    E: tuple[Rows, ...] = Field(description="Pseudo-inertia of each body (4,4).")
    armature: Row = Field(description="Rotor inertia of each row [kg m^2].")
    viscous: Row = Field(description="Viscous friction of each row [N m s/rad].")
    coulomb: Row = Field(description="Coulomb friction of each row [N m].")
    offset: Row = Field(description="Friction of one direction of each row [N m].")
    bend: Rows = Field(description="How friction bends at low speed, by row [N m].")


class _BandTable(Table):
    fast: Rows = Field(description="Weights of the causes of each row's squared fast residual.")
    slow: Rows = Field(description="The same of the slow residual.")
    rho: Rows = Field(description="Correlation of the fast residuals.")
    slow_share: Row = Field(description="Share of slow noise of each row.")
    track_sd: Rows = Field(description="How far friction changes from day to day, of each row.")
    row_limit: float = Field(description="Limit of one row, fast residual.", gt=0)
    slow_limit: float = Field(description="Limit of one row, slow residual.", gt=0)
    body_limit: float = Field(description="Limit of all rows together.", gt=0)
    cusum_sd: Row = Field(description="Lasting error of the model of each row [N m].")
    cusum_limit: float = Field(description="Limit of the sums.", gt=0)
    slow_body_limit: float = Field(description="Limit of all rows together, slow residual.", gt=0)
    foot_limit: float = Field(description="Limit of the force of a foot that should feel none.", gt=0)


class _File(Table):
    schema_version: Literal[1] = Field(alias="schema", description="Version of this format.")
    robot: str = Field(description="Name of the robot.")
    joints: tuple[str, ...] = Field(description="Joints in the order of the model.")
    made_for: dict[str, Any] = Field(description="What the calibration is void without.")
    provenance: dict[str, Any] = Field(description="Where it comes from.")
    model: _ModelTable = Field(description="Inertia and friction.")
    band: _BandTable = Field(description="How large residuals are.")


def calibration_text(calibration: Calibration, tree: Tree, config: Config) -> str:
    """Return the text of a file from which `read_calibration` makes the same calibration again."""
    band = {one.name: getattr(calibration.band, one.name) for one in fields(Band)}
    document = {
        "schema": SCHEMA,
        "robot": config.robot.name or tree.name,
        "joints": tree.joints,
        "made_for": _made_for(config),
        "provenance": calibration.provenance,
        "model": calibration.model._asdict(),
        "band": band,
    }
    return json.dumps(document, indent=1, allow_nan=False, default=np.ndarray.tolist) + "\n"


def read_calibration(text: str, where: str, tree: Tree, config: Config) -> Calibration:
    """Return the calibration of a file.

    Parameters
    ----------
    text : str
        What `calibration_text` wrote.
    where : str
        What errors call the file.
    tree, config : Tree, Config
        The robot it is to be used for.

    Raises
    ------
    ConfigError
        The file is not whole, was made for another robot or configuration, or holds what cannot be.
    """
    try:
        document = json.loads(text)
    except (ValueError, RecursionError) as error:
        raise ConfigError(where, f"text that is not JSON: {error}", "a calibration file") from error
    if not isinstance(document, dict):
        raise ConfigError(where, shown(document), "a JSON object")
    _check_schema(where, document.get("schema"))
    file = validated(_File, document, where)
    if file.joints != tree.joints:
        raise ConfigError(
            f"{where}: joints", shown(file.joints), f"the robot's: {shown(tree.joints)}", _AGAIN
        )
    _check_made_for(where, file.made_for, _made_for(config))
    rows = tree.n + sum(joint.link_torque_sensor for joint in config.robot.joint)
    return Calibration(_model(where, file.model, tree), _band(where, file.band, rows), file.provenance)


_AGAIN = "Commission this robot again, or name the calibration that is its own."


def _check_schema(where: str, version: Any) -> None:
    if version == SCHEMA and type(version) is int:
        return
    newer = type(version) is int and version > SCHEMA
    todo = "The file is newer than this program: update limbtell." if newer else _AGAIN
    raise ConfigError(f"{where}: schema", shown(version), f"{SCHEMA}", todo)


def _made_for(config: Config) -> dict[str, Any]:
    """Return by key what a calibration is void without."""
    robot = config.robot
    found: dict[str, Any] = {
        "robot.urdf (SHA-256)": sha256(config.urdf_text.encode()).hexdigest(),
        "robot.base": robot.base,
        "robot.coupling": robot.coupling,
        "input.rate_hz": config.input.rate_hz,
    }
    found |= {f"watch.{key}": getattr(config.watch, key) for key in _OF_WATCH}
    for joint in robot.joint:
        found |= {f"robot.joint {joint.name!r}.{key}": getattr(joint, key) for key in _OF_JOINT}
        if joint.link_torque_sensor:
            found |= {f"robot.joint {joint.name!r}.link_torque_sensor": True}
    return found


def _check_made_for(where: str, found: Mapping[str, Any], expected: Mapping[str, Any]) -> None:
    for key in {**expected, **found}:
        if found.get(key) != expected.get(key):
            raise ConfigError(
                f"{where}: made_for: {key}",
                shown(found.get(key)),
                f"{shown(expected.get(key))}, as it is now",
                "Commission the robot again, or undo the change.",
            )


def _model(where: str, table: _ModelTable, tree: Tree) -> Model:
    where = f"{where}: model"
    shapes: dict[str, tuple[int, ...]] = dict.fromkeys(Model._fields, (tree.n,))
    shapes |= {"E": tree.arrays.E.shape, "bend": (tree.n, BENDS)}
    model = Model(*(_array(f"{where}.{key}", getattr(table, key), shape) for key, shape in shapes.items()))
    for key in ("armature", "viscous", "coulomb"):
        _check_least(f"{where}.{key}", getattr(model, key), 0.0)
    for i, (E, said) in enumerate(zip(model.E, tree.arrays.E, strict=True)):
        if not np.allclose(E, E.T, rtol=1e-9, atol=0.0):
            raise ConfigError(f"{where}.E[{i}]", "a matrix that is not symmetric", "a symmetric one")
        # What is no real body in the description (no mass, a plate) is not fitted.
        if (wrong := flaw(E)) and not np.allclose(E, said, rtol=1e-9):
            raise ConfigError(f"{where}.E[{i}]", wrong, "the pseudo-inertia of a real body")
    return model


def _band(where: str, table: _BandTable, n: int) -> Band:
    where = f"{where}: band"
    shapes: dict[str, tuple[int, ...]] = {"fast": (n, CAUSES), "slow": (n, CAUSES), "rho": (n, n)}
    shapes |= {"track_sd": (n, 3), "slow_share": (n,), "cusum_sd": (n,)}
    arrays = {key: _array(f"{where}.{key}", getattr(table, key), shape) for key, shape in shapes.items()}
    for key, array in arrays.items():
        if key != "rho":
            _check_least(f"{where}.{key}", array, 0.0)
    for key in ("fast", "slow"):
        _check_least(f"{where}.{key}: floor", arrays[key][:, FLOOR], np.finfo(float).tiny)
    _check_least(f"{where}.cusum_sd", arrays["cusum_sd"], np.finfo(float).tiny)
    if arrays["slow_share"].max() >= 1.0:
        raise ConfigError(f"{where}.slow_share", f"{arrays['slow_share'].max()}", "less than 1")
    rho = arrays["rho"]
    least = float(np.linalg.eigvalsh(rho)[0])
    if not np.array_equal(rho, rho.T) or (np.diag(rho) != 1.0).any() or least < _LEAST_EIGENVALUE:
        raise ConfigError(
            f"{where}.rho",
            f"a matrix with diagonal {np.diag(rho).min():g} to {np.diag(rho).max():g}, "
            f"asymmetry {np.abs(rho - rho.T).max():.2g} and least eigenvalue {least:.3g}",
            "a correlation matrix: symmetric, ones on the diagonal, positive definite",
        )
    return Band(
        **arrays,
        row_limit=table.row_limit,
        slow_limit=table.slow_limit,
        body_limit=table.body_limit,
        cusum_limit=table.cusum_limit,
        slow_body_limit=table.slow_body_limit,
        foot_limit=table.foot_limit,
    )


def _array(where: str, value: tuple[Any, ...], shape: tuple[int, ...]) -> Floats:
    try:
        array = np.array(value, dtype=float)
    except ValueError:
        raise ConfigError(where, "rows of different lengths", f"numbers of shape {shape}") from None
    if array.shape != shape:
        raise ConfigError(where, f"numbers of shape {array.shape}", f"of shape {shape}", _AGAIN)
    return array


def _check_least(where: str, array: Floats, least: float) -> None:
    if array.min() < least:
        expected = "no negative number" if least == 0.0 else "numbers above 0"
        raise ConfigError(where, f"{array.min():g}", expected)
