"""What `limbtell init` writes: a configuration with every key, its meaning beside it, that loads as it is."""

from __future__ import annotations

import json
import os
import textwrap
from collections.abc import Iterator, Mapping
from math import floor, isfinite, log10
from pathlib import Path
from typing import Annotated, Any, Literal, Self

import tomlkit
from pydantic import Field, model_validator
from pydantic.fields import FieldInfo
from pydantic_core import PydanticUndefined

from monitor.errors import ConfigError
from monitor.robot.tree import Tree, build_tree
from monitor.robot.urdf import read_urdf
from monitor.setup.config import (
    SCHEMA,
    Config,
    InputConfig,
    Name,
    NotNegative,
    Positive,
    RobotConfig,
    WatchConfig,
    read_text,
    standstill_floors,
)
from monitor.setup.table import Table, refusal, shown, table_of, validated

_WIDTH = 100
_HEADING = """\
# Configuration of limbtell, a monitoring aid; never a safety function.
# SI units, radians. A key without `#` before it is in force; a key behind `#` shows what it could be.
"""


class DatasheetJoint(Table):
    """What a maker says about one joint; a figure that is left out is taken from the robot description."""

    name: Name = Field(description="Name of the joint in the robot description.")
    rated_torque: Positive | None = Field(default=None, description="Lasting torque [N m].")
    peak_torque: Positive | None = Field(default=None, description="Largest torque [N m].")
    armature: NotNegative | None = Field(default=None, description="Reflected rotor inertia [kg m^2].")
    encoder_step: Positive | None = Field(default=None, description="Step of the position [rad].")
    velocity_noise_sd: Positive | None = Field(default=None, description="Noise of the velocity [rad/s].")
    torque_noise_sd: NotNegative | None = Field(default=None, description="Noise of the torque [N m].")
    link_torque_sensor: bool | None = Field(default=None, description="A torque sensor at the link side.")
    link_torque_noise_sd: NotNegative | None = Field(default=None, description="Noise of that sensor [N m].")
    link_torque_range: Positive | None = Field(default=None, description="Largest reading of it [N m].")

    @model_validator(mode="after")
    def _check(self) -> Self:
        if self.rated_torque and self.peak_torque and self.peak_torque < self.rated_torque:
            raise refusal(
                "peak_torque", f"{self.peak_torque}", f"at least the rated_torque, {self.rated_torque}"
            )
        return self

    def figures(self) -> dict[str, Any]:
        """What is given, by the key of `[[robot.joint]]`."""
        return self.model_dump(exclude_none=True, exclude={"name"})


class Datasheet(Table):
    """A datasheet file."""

    joints: Annotated[tuple[DatasheetJoint, ...], Field(max_length=200)] = Field(
        description="Figures per joint."
    )


def write_config(
    urdf: Path, base: Literal["fixed", "floating"], datasheet: Path | None = None, folder: Path | None = None
) -> str:
    """Text of a commented configuration for a robot.

    Parameters
    ----------
    urdf : Path
        Robot description.
    base : {'fixed', 'floating'}
        How the robot stands.
    datasheet : Path, optional
        JSON file with `joints`: list of objects with `name` and any of `rated_torque`, `peak_torque` [N m],
        `armature` [kg m²], `encoder_step` [rad], `velocity_noise_sd` [rad/s], `torque_noise_sd` [N m],
        `link_torque_sensor`, `link_torque_noise_sd`, `link_torque_range` [N m].
    folder : Path, optional
        Where the configuration will lie; the path of the description is written relative to it. Default: the
        current folder.

    Raises
    ------
    ModelError
        The robot description is refused.
    ConfigError
        The datasheet is refused, or nothing says how strong a joint is.
    """
    description = read_urdf(urdf)
    names = [joint.name for joint in description.joints if joint.moves and joint.mimic is None]
    figures = {} if datasheet is None else _read_datasheet(datasheet, names)
    armature = {name: given["armature"] for name, given in figures.items() if "armature" in given}
    tree = build_tree(description, base, armature)
    robot = {
        "name": tree.name,
        "urdf": Path(os.path.relpath(urdf.resolve(), (folder or Path()).resolve())).as_posix(),
        "base": base,
        "joint": [_joint(name, tree, figures.get(name, {}), urdf) for name in names],
    }
    watch = _watch(validated(RobotConfig, robot, str(urdf)))
    config = validated(Config, {"schema": SCHEMA, "robot": robot, "watch": watch}, str(urdf))
    return "\n".join([_HEADING.rstrip(), *_table(config, (), _hints(config, tree)), ""])


def _read_datasheet(path: Path, names: list[str]) -> dict[str, dict[str, Any]]:
    """Figures by the name of the joint."""
    try:
        document = json.loads(read_text(path, str(path)))
    except (ValueError, RecursionError) as error:
        raise ConfigError(str(path), f"text that is not JSON: {error}", "a JSON object") from error
    if not isinstance(document, dict):
        raise ConfigError(str(path), shown(document), 'a JSON object {"joints": [...]}')
    figures: dict[str, dict[str, Any]] = {}
    for index, joint in enumerate(validated(Datasheet, document, str(path)).joints):
        where = f"{path}: joints[{index}].name"
        if joint.name not in names:
            expected = f"a moving joint of the robot description: {', '.join(names)}"
            raise ConfigError(where, f"{joint.name!r}", expected)
        if joint.name in figures:
            raise ConfigError(where, f"{joint.name!r} a second time", "every joint at most once")
        figures[joint.name] = joint.figures()
    return figures


def _joint(name: str, tree: Tree, given: Mapping[str, Any], urdf: Path) -> dict[str, Any]:
    """Datasheet before robot description; what neither knows stays at its default."""
    index = tree.joints.index(name)
    effort = float(tree.limits.effort[index])
    strongest = effort if isfinite(effort) and effort > 0.0 else given.get("peak_torque")
    rated = given.get("rated_torque", strongest)
    if rated is None:
        raise ConfigError(
            f"{urdf}: joint '{name}' <limit> effort",
            "0" if effort == 0.0 else "nothing",
            "the torque of the joint, because sizes refer to it",
            "Give effort in N m, or rated_torque in a datasheet: --datasheet FILE.json with "
            f'{{"joints": [{{"name": "{name}", "rated_torque": ...}}]}}.',
        )
    peak = given.get("peak_torque", max(rated, strongest or rated))
    return {
        "name": name,
        "coulomb_friction": float(tree.friction[index]),
        "viscous_friction": float(tree.damping[index]),
        **given,
        "rated_torque": min(rated, peak),
        "peak_torque": peak,
    }


def _watch(robot: RobotConfig) -> dict[str, float]:
    """Limits of `[watch]` to widen because this robot's noise could fire their defaults at standstill."""
    watch = WatchConfig()
    floors = standstill_floors(robot, InputConfig(), watch)
    defaults = {key: getattr(watch, key) for key in floors}  # None: follows from the noise by itself
    return {
        key: _rounded_up(least)
        for key, (least, _) in floors.items()
        if defaults[key] is not None and least > defaults[key]
    }


def _rounded_up(value: float) -> float:
    """The next larger number of two digits."""
    unit = 10.0 ** (floor(log10(value)) - 1)
    return float(f"{(floor(value / unit) + 1) * unit:.2g}")


# --- text ----------------------------------------------------------------------------------------

Hints = Mapping[tuple[str, str], float]


def _hints(config: Config, tree: Tree) -> Hints:
    """What keys without a value stand for: (name of the joint, key) → number."""
    hints: dict[tuple[str, str], float] = {}
    for joint in config.robot.joint:
        index = tree.joints.index(joint.name)
        values = {
            "position_min": float(tree.limits.lower[index]),
            "position_max": float(tree.limits.upper[index]),
            "velocity_max": float(tree.limits.velocity[index]),
        }
        hints |= {(joint.name, key): value for key, value in values.items() if isfinite(value)}
    return hints


def _table(table: Table, path: tuple[str, ...], hints: Hints, explained: bool = True) -> Iterator[str]:
    """Lines below the header of a table, inner tables included."""
    for name, field in type(table).model_fields.items():
        inner, value = (*path, field.alias or name), getattr(table, name)
        kind = table_of(field.annotation)
        if explained:
            yield from ("", *_comment(field))
        if kind is None:
            yield _line(table, name, hints)
        elif isinstance(value, Table):
            yield from (f"[{'.'.join(inner)}]", *_table(value, inner, hints))
        elif value:
            for index, element in enumerate(value):
                first = index == 0
                yield from (*([] if first else [""]), f"[[{'.'.join(inner)}]]")
                yield from _table(element, inner, hints, explained=first)
        else:
            yield from (f"# [[{'.'.join(inner)}]]", *(f"# {key}" for key in _example(kind)))


def _example(kind: type[Table]) -> Iterator[str]:
    """Lines of a table that the robot does not have yet."""
    for name, field in kind.model_fields.items():
        yield _assignment(name, field.examples[0] if field.examples else field.get_default())


def _line(table: Table, name: str, hints: Hints) -> str:
    """`key = value`; behind `#` where the value is derived or not given."""
    field, value = type(table).model_fields[name], getattr(table, name)
    if value is None:
        hint = hints.get((getattr(table, "name", ""), name))
        return f"# {_assignment(name, (field.examples or [0.0])[0] if hint is None else hint)}"
    if field.default_factory is not None and name not in table.model_fields_set:
        return f"# {_assignment(name, float(f'{value:.4g}'))}"
    return _assignment(field.alias or name, value)


def _assignment(key: str, value: Any) -> str:
    return f"{key} = {_toml(value)}"


def _toml(value: Any) -> str:
    if isinstance(value, tuple):
        return f"[{', '.join(map(_toml, value))}]"
    text: str = tomlkit.item(value).as_string()
    return text


def _comment(field: FieldInfo) -> list[str]:
    """The description and the default as comment lines."""
    text = field.description or ""
    if field.default not in (None, PydanticUndefined) and table_of(field.annotation) is None:
        text += f" Default: {_toml(field.default)}."
    return [f"# {line}" for line in textwrap.wrap(text, _WIDTH, break_on_hyphens=False)]
