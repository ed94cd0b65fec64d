"""URDF text to a checked, frozen description of links and joints.

Everything that makes a file unusable is a `ModelError` that names file and element; what can be mended
without guessing is mended with a `ModelWarning`.
"""

from __future__ import annotations

import math
import warnings
from collections import Counter
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from xml.etree.ElementTree import Element, ParseError

from defusedxml import DefusedXmlException
from defusedxml.ElementTree import fromstring

from monitor.errors import ModelError
from monitor.robot.pseudo_inertia import flaw, pseudo_inertia

MOVING_KINDS = ("revolute", "continuous", "prismatic")
_UNIT_TOLERANCE = 1e-6
_SHORTEST_AXIS = 1e-9
# Beyond any robot, and small enough that no product of a few numbers overflows.
_LARGEST_NUMBER = 1e30
Vector = tuple[float, float, float]


class ModelWarning(UserWarning):
    """Something in the robot description was mended or left out; the model is usable."""


@dataclass(frozen=True)
class Origin:
    """Placement of a frame: `xyz` [m], then `rpy` [rad] about the fixed axes x, y, z."""

    xyz: Vector = (0.0, 0.0, 0.0)
    rpy: Vector = (0.0, 0.0, 0.0)


@dataclass(frozen=True)
class Inertial:
    """Mass [kg] and inertia (ixx, ixy, ixz, iyy, iyz, izz) [kg m²] about the centre of mass, at `origin`."""

    origin: Origin
    mass: float
    inertia: tuple[float, float, float, float, float, float]

    @property
    def matrix(self) -> list[list[float]]:
        """Inertia as a symmetric 3x3 matrix, in the axes of `origin`."""
        xx, xy, xz, yy, yz, zz = self.inertia
        return [[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]]


@dataclass(frozen=True)
class Shape:
    """Shape of a link [m]: `box` (x, y, z), `cylinder` (radius, length along z) or `sphere` (radius).

    A `mesh` has no size; only its file name is noted.
    """

    kind: str
    size: tuple[float, ...]
    origin: Origin
    filename: str = ""


@dataclass(frozen=True)
class Link:
    """A rigid body; `inertial` is None where the description gives no mass."""

    name: str
    inertial: Inertial | None
    shapes: tuple[Shape, ...]


@dataclass(frozen=True)
class Mimic:
    """The joint's coordinate is `multiplier * coordinate of joint + offset`."""

    joint: str
    multiplier: float
    offset: float


@dataclass(frozen=True)
class Joint:
    """A joint: `axis` is a unit vector in the joint frame, limits are infinite where none is given.

    `lower`, `upper` [rad or m], `velocity` [rad/s or m/s], `effort` [Nm or N], `damping` [Nm s/rad or N s/m],
    `friction` [Nm or N]. `mimic` names a joint that does not itself follow another.
    """

    name: str
    kind: str
    parent: str
    child: str
    origin: Origin
    axis: Vector
    lower: float
    upper: float
    velocity: float
    effort: float
    damping: float
    friction: float
    mimic: Mimic | None

    @property
    def moves(self) -> bool:
        """Whether the joint is anything but fixed."""
        return self.kind in MOVING_KINDS


@dataclass(frozen=True)
class Description:
    """A robot: one tree of links under `root`. `where` names the file in messages."""

    name: str
    where: str
    root: str
    links: tuple[Link, ...]
    joints: tuple[Joint, ...]


def read_urdf(path: str | Path) -> Description:
    """Read and check a URDF file.

    Raises
    ------
    ModelError
        If the file cannot be read or the description is malformed or physically impossible.
    """
    path = Path(path)
    try:
        text = path.read_bytes()
    except OSError as error:
        found = f"a file that cannot be read ({error.strerror})"
        raise ModelError(
            str(path), found, "a URDF file", "Check the path of the robot description."
        ) from error
    return parse_urdf(text, path.name)


def parse_urdf(text: str | bytes, where: str = "robot description") -> Description:
    """Parse and check URDF text; `where` names its source in messages.

    Raises
    ------
    ModelError
        If the description is malformed or physically impossible.
    """
    root = _xml(text, where)
    if root.tag != "robot":
        raise ModelError(where, f"root element <{root.tag}>", "<robot>", "Give a URDF file.")
    for element in root:
        if "xacro" in element.tag:
            todo = "Expand the macros into plain URDF first."
            raise ModelError(where, f"unexpanded macro element <{element.tag}>", "plain URDF", todo)
    links = tuple(_link(element, where) for element in root.findall("link"))
    joints = tuple(_joint(element, where) for element in root.findall("joint"))
    top = _check_tree(links, joints, where)
    return Description(root.get("name", ""), where, top, links, _resolve_mimics(joints, where))


def _xml(text: str | bytes, where: str) -> Element:
    """Parse XML that may be hostile: no document type, no entities, nothing fetched."""
    try:
        root: Element = fromstring(text, forbid_dtd=True)
    except DefusedXmlException as error:
        todo = "Remove the <!DOCTYPE ...> part; a robot description needs none."
        raise ModelError(where, f"a document type or entity ({error})", "XML without them", todo) from error
    except ParseError as error:
        raise ModelError(where, f"malformed XML ({error})", "well-formed XML", "Mend that line.") from error
    except (ValueError, LookupError) as error:
        found = f"an encoding that cannot be read ({error})"
        raise ModelError(where, found, "XML in UTF-8", "Save the file as UTF-8.") from error
    return root


# --- elements ----------------------------------------------------------------------------------


def _link(element: Element, where: str) -> Link:
    name = _attribute(element, "name", f"{where}: <link>")
    where = f"{where}: link '{name}'"
    return Link(name, _inertial(element.find("inertial"), f"{where} <inertial>"), _shapes(element, where))


def _inertial(element: Element | None, where: str) -> Inertial | None:
    """Return mass and inertia; None where both are absent or zero, which descriptions use for mere frames."""
    if element is None:
        return None
    mass = _number(_child(element, "mass", where), "value", f"{where} <mass>")
    entries = _child(element, "inertia", where)
    xx, yy, zz = (_number(entries, key, f"{where} <inertia>") for key in ("ixx", "iyy", "izz"))
    xy, xz, yz = (_number(entries, key, f"{where} <inertia>", 0.0) for key in ("ixy", "ixz", "iyz"))
    inertial = Inertial(_origin(element, where), mass, (xx, xy, xz, yy, yz, zz))
    if mass == 0.0 and not any(inertial.inertia):
        return None
    wrong = flaw(pseudo_inertia(mass, (0.0, 0.0, 0.0), inertial.matrix))
    if wrong:
        expected = "positive mass and principal moments, each moment less than the sum of the other two"
        todo = (
            "Take mass and inertia about the centre of mass from CAD, in kg and kg m²; "
            "a mere frame has no <inertial>."
        )
        raise ModelError(where, wrong, expected, todo)
    return inertial


def _shapes(link: Element, where: str) -> tuple[Shape, ...]:
    """Return the collision shapes of a link, or where it has none the visual ones."""
    tag = "visual" if link.find("collision") is None else "collision"
    found = (_shape(element, f"{where} <{tag}>") for element in link.findall(tag))
    return tuple(shape for shape in found if shape is not None)


def _shape(element: Element, where: str) -> Shape | None:
    origin = _origin(element, where)
    body = next(iter(_child(element, "geometry", where)), None)
    kind = "nothing" if body is None else body.tag
    where = f"{where} <{kind}>"
    if body is not None and kind == "box":
        return Shape(kind, _positive(_vector(body, "size", where), "size", where), origin)
    if body is not None and kind == "cylinder":
        size = (_number(body, "radius", where), _number(body, "length", where))
        return Shape(kind, _positive(size, "radius and length", where), origin)
    if body is not None and kind == "sphere":
        return Shape(kind, _positive((_number(body, "radius", where),), "radius", where), origin)
    if body is not None and kind == "mesh":
        return Shape(kind, (), origin, _attribute(body, "filename", where))
    warnings.warn(f"{where}: not a box, cylinder, sphere or mesh; left out", ModelWarning, stacklevel=2)
    return None


def _joint(element: Element, where: str) -> Joint:
    name = _attribute(element, "name", f"{where}: <joint>")
    where = f"{where}: joint '{name}'"
    kind = _kind(element, where)
    moves = kind in MOVING_KINDS
    lower, upper, velocity, effort = _limits(element.find("limit"), kind, f"{where} <limit>")
    damping, friction = _dynamics(element.find("dynamics"), f"{where} <dynamics>")
    return Joint(
        name,
        kind,
        _attribute(_child(element, "parent", where), "link", f"{where} <parent>"),
        _attribute(_child(element, "child", where), "link", f"{where} <child>"),
        _origin(element, where),
        _axis(element.find("axis"), f"{where} <axis>") if moves else (1.0, 0.0, 0.0),
        lower,
        upper,
        velocity,
        effort,
        damping,
        friction,
        _mimic(element.find("mimic"), moves, f"{where} <mimic>"),
    )


def _kind(element: Element, where: str) -> str:
    kind = _attribute(element, "type", where)
    expected = "type fixed, revolute, continuous or prismatic"
    if kind in ("planar", "floating"):
        todo = (
            "Describe it as single joints; for a free base leave the joint out and set the base to floating."
            if kind == "floating"
            else "Describe it as two prismatic joints and a continuous one with massless links between."
        )
        raise ModelError(where, f"type '{kind}'", expected, todo)
    if kind not in (*MOVING_KINDS, "fixed"):
        raise ModelError(where, f"type '{kind}'", expected, "Correct the joint's type.")
    return kind


def _axis(element: Element | None, where: str) -> Vector:
    """Return the unit axis; a zero one is refused, another length is mended with a warning."""
    if element is None:
        return (1.0, 0.0, 0.0)
    x, y, z = _vector(element, "xyz", where)
    length = math.hypot(x, y, z)
    if length < _SHORTEST_AXIS:
        found = f"zero axis ({x:g}, {y:g}, {z:g})"
        raise ModelError(where, found, "a vector of length 1", "Give the direction of motion.")
    if abs(length - 1.0) > _UNIT_TOLERANCE:
        message = f"{where}: axis ({x:g}, {y:g}, {z:g}) has length {length:g}; taken as a unit vector"
        warnings.warn(message, ModelWarning, stacklevel=2)
    return (x / length, y / length, z / length)


def _limits(element: Element | None, kind: str, where: str) -> tuple[float, float, float, float]:
    """Return lower, upper, velocity and effort limit; infinite where none is given."""
    if element is None:
        return -math.inf, math.inf, math.inf, math.inf
    lower = _number(element, "lower", where, -math.inf)
    upper = _number(element, "upper", where, math.inf)
    velocity = _number(element, "velocity", where, math.inf)
    effort = _number(element, "effort", where, math.inf)
    if lower > upper:
        found = f"lower {lower:g} above upper {upper:g}"
        raise ModelError(where, found, "lower at most upper", "Exchange the two limits.")
    for key, value in (("velocity", velocity), ("effort", effort)):
        if value < 0.0:
            raise ModelError(where, f"{key} {value:g}", f"{key} not negative", "Give the limit's magnitude.")
    if velocity == 0.0:
        warnings.warn(f"{where}: velocity 0 is taken as not given", ModelWarning, stacklevel=2)
        velocity = math.inf
    return (
        (-math.inf, math.inf, velocity, effort) if kind == "continuous" else (lower, upper, velocity, effort)
    )


def _dynamics(element: Element | None, where: str) -> tuple[float, float]:
    if element is None:
        return 0.0, 0.0
    damping, friction = (_number(element, key, where, 0.0) for key in ("damping", "friction"))
    for key, value in (("damping", damping), ("friction", friction)):
        if value < 0.0:
            raise ModelError(where, f"{key} {value:g}", f"{key} not negative", "Friction takes energy out.")
    return damping, friction


def _mimic(element: Element | None, moves: bool, where: str) -> Mimic | None:
    if element is None:
        return None
    if not moves:
        raise ModelError(where, "a fixed joint that follows another", "a moving joint", "Remove the <mimic>.")
    return Mimic(
        _attribute(element, "joint", where),
        _number(element, "multiplier", where, 1.0),
        _number(element, "offset", where, 0.0),
    )


def _origin(element: Element, where: str) -> Origin:
    origin = element.find("origin")
    if origin is None:
        return Origin()
    where = f"{where} <origin>"
    return Origin(_vector(origin, "xyz", where, "0 0 0"), _vector(origin, "rpy", where, "0 0 0"))


# --- attributes --------------------------------------------------------------------------------


def _child(element: Element, tag: str, where: str) -> Element:
    child = element.find(tag)
    if child is None:
        raise ModelError(where, f"no <{tag}>", f"one <{tag}>", "Add the missing element.")
    return child


def _attribute(element: Element, key: str, where: str) -> str:
    value = element.get(key, "").strip()
    if not value:
        raise ModelError(where, f"no {key}", f"attribute {key}", "Add the missing attribute.")
    return value


def _number(element: Element, key: str, where: str, default: float | None = None) -> float:
    if default is not None and element.get(key) is None:
        return default
    return _finite(_attribute(element, key, where), key, where)


def _vector(element: Element, key: str, where: str, default: str = "") -> Vector:
    text = element.get(key) or default
    parts = text.split()
    if len(parts) != 3:
        found = f"{key} '{text}' with {len(parts)} numbers"
        raise ModelError(where, found, "three numbers separated by spaces", "Correct the attribute.")
    x, y, z = (_finite(part, key, where) for part in parts)
    return x, y, z


def _finite(text: str, key: str, where: str) -> float:
    try:
        value = math.nan if "_" in text else float(text)  # Python alone reads 1_000 as a number
    except ValueError:
        value = math.nan
    if not abs(value) < _LARGEST_NUMBER:
        raise ModelError(where, f"{key} '{text}'", "a finite number", "Correct the attribute.")
    return value


def _positive(values: tuple[float, ...], key: str, where: str) -> tuple[float, ...]:
    if min(values) <= 0.0:
        found = f"{key} {' '.join(f'{value:g}' for value in values)}"
        raise ModelError(where, found, "positive lengths", "Give the size in metres.")
    return values


# --- structure ---------------------------------------------------------------------------------


def _check_tree(links: tuple[Link, ...], joints: tuple[Joint, ...], where: str) -> str:
    """Return the name of the root after checking that the joints make one tree of all links."""
    if not links:
        raise ModelError(where, "no <link>", "at least one link", "Give a complete robot description.")
    for tag, names in (("link", [link.name for link in links]), ("joint", [joint.name for joint in joints])):
        for name, count in Counter(names).items():
            if count > 1:
                found, expected = f"the name {count} times", "every name once"
                raise ModelError(f"{where}: {tag} '{name}'", found, expected, f"Rename the other {tag}.")
    above = _parents(links, joints, where)
    roots = [link.name for link in links if link.name not in above]
    if len(roots) > 1:
        found = f"{len(roots)} root links ({', '.join(roots)})"
        todo = "Join the loose links to the tree with fixed joints, or remove them."
        raise ModelError(where, found, "one root link", todo)
    for link in links:
        for name in _ancestors(link.name, above):
            if name == link.name:
                todo = "Cut the loop at one joint: a robot is a tree here."
                raise ModelError(f"{where}: link '{name}'", "a loop of joints through it", "a tree", todo)
    return roots[0]


def _parents(links: tuple[Link, ...], joints: tuple[Joint, ...], where: str) -> dict[str, Joint]:
    """Return for each link that is a child the joint above it; its ends must exist and be unique."""
    known = {link.name for link in links}
    above: dict[str, Joint] = {}
    for joint in joints:
        for tag, end in (("parent", joint.parent), ("child", joint.child)):
            if end not in known:
                place = f"{where}: joint '{joint.name}' <{tag}>"
                raise ModelError(place, f"unknown link '{end}'", "the name of a link", "Correct the name.")
        if joint.child in above:
            found = f"two parents (joints '{above[joint.child].name}' and '{joint.name}')"
            todo = "Cut the loop at one of the two joints: a robot is a tree here."
            raise ModelError(f"{where}: link '{joint.child}'", found, "one parent", todo)
        above[joint.child] = joint
    return above


def _ancestors(name: str, above: Mapping[str, Joint]) -> Iterator[str]:
    """Yield the links above one, nearest first; in a loop it ends once the loop has been round."""
    seen: set[str] = set()
    while name in above and name not in seen:
        seen.add(name)
        name = above[name].parent
        yield name


def _resolve_mimics(joints: tuple[Joint, ...], where: str) -> tuple[Joint, ...]:
    """Return the joints with every chain of followers resolved to its independent leader."""
    by_name = {joint.name: joint for joint in joints}
    return tuple(replace(joint, mimic=_leader(joint, by_name, where)) for joint in joints)


def _leader(joint: Joint, by_name: Mapping[str, Joint], where: str) -> Mimic | None:
    followed = [joint.name]
    multiplier, offset = 1.0, 0.0
    place = f"{where}: joint '{joint.name}' <mimic>"
    while (mimic := joint.mimic) is not None:
        if mimic.joint in followed:
            found = f"a circle of followers ({' -> '.join([*followed, mimic.joint])})"
            raise ModelError(place, found, "an independent leader at the end", "Let one of them lead.")
        leader = by_name.get(mimic.joint)
        if leader is None or not leader.moves:
            found = f"{'unknown' if leader is None else 'fixed'} joint '{mimic.joint}'"
            raise ModelError(place, found, "the name of a moving joint", "Correct the name of the leader.")
        offset += multiplier * mimic.offset
        multiplier *= mimic.multiplier
        followed.append(leader.name)
        joint = leader
    return Mimic(joint.name, multiplier, offset) if len(followed) > 1 else None
