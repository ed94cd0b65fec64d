"""Seeded random robots as URDF text, harder than robots are in the field."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

Floats = NDArray[np.float64]


def random_urdf(seed: int, joints: int) -> str:
    """Return a random robot with that many joints of all kinds.

    Branches, axes in any direction, joint frames turned anyhow, fixed links in between and at the world,
    massless links between massive ones, followers (also of followers, and of joints further out), names and
    document order shuffled.
    """
    rng = np.random.default_rng([seed, joints])
    parents = [k if rng.random() < 0.6 else int(rng.integers(k + 1)) for k in range(joints)]
    kinds = _kinds(rng, joints)
    massless = _massless(rng, parents)
    leaders = _leaders(rng, kinds)
    link_names = [f"link_{number:02d}" for number in rng.permutation(joints + 1)]
    joint_names = [f"turn_{number:02d}" for number in rng.permutation(joints)]
    elements = [_link(rng, name, empty) for name, empty in zip(link_names, massless, strict=True)]
    for k, (parent, kind) in enumerate(zip(parents, kinds, strict=True)):
        leader = leaders.get(k)
        elements.append(
            f'<joint name="{joint_names[k]}" type="{kind}">'
            f'<parent link="{link_names[parent]}"/><child link="{link_names[k + 1]}"/>{_origin(rng)}'
            + _motion(rng, kind)
            + ("" if leader is None else _mimic(rng, joint_names[leader]))
            + "</joint>"
        )
    order = rng.permutation(len(elements))
    return '<robot name="random">' + "\n".join(elements[k] for k in order) + "</robot>"


def random_state(seed: int, base: str, joints: int) -> tuple[Floats, Floats]:
    """Return q and v of a robot with that many independent joints, base as in the product's order."""
    rng = np.random.default_rng(seed)
    q = rng.uniform(-2.0, 2.0, joints)
    v = rng.normal(size=joints + (6 if base == "floating" else 0))
    if base == "floating":
        quaternion = rng.normal(size=4)
        q = np.concatenate([rng.normal(size=3), quaternion / np.linalg.norm(quaternion), q])
    return q, v


def _kinds(rng: np.random.Generator, joints: int) -> list[str]:
    names = ["revolute", "continuous", "prismatic", "fixed"]
    kinds = [str(kind) for kind in rng.choice(names, joints, p=[0.4, 0.2, 0.2, 0.2])]
    # One joint at least has to move.
    return kinds if set(kinds) - {"fixed"} else ["revolute", *kinds[1:]]


def _massless(rng: np.random.Generator, parents: list[int]) -> list[bool]:
    """Choose links without mass whose parent has some and from which one link with mass hangs."""
    massless = [False] * (len(parents) + 1)
    for link in range(1, len(massless)):
        children = [k + 1 for k, parent in enumerate(parents) if parent == link]
        massless[link] = bool(len(children) == 1 and not massless[parents[link - 1]] and rng.random() < 0.3)
    return massless


def _leaders(rng: np.random.Generator, kinds: list[str]) -> dict[int, int]:
    """Choose followers and whom they follow, without circles: along a random order of the moving joints."""
    moving = [int(k) for k in rng.permutation(len(kinds)) if kinds[k] != "fixed"]
    return {
        k: int(rng.choice(moving[:place])) for place, k in enumerate(moving) if place and rng.random() < 0.15
    }


def _numbers(values: Floats) -> str:
    return " ".join(repr(float(value)) for value in values)


def _origin(rng: np.random.Generator) -> str:
    return f'<origin xyz="{_numbers(rng.normal(0.0, 0.3, 3))}" rpy="{_numbers(rng.uniform(-3.0, 3.0, 3))}"/>'


def _link(rng: np.random.Generator, name: str, massless: bool) -> str:
    if massless:
        return f'<link name="{name}"/>'
    # A cloud of points has a mass, a centre and an inertia that some body really has.
    masses = rng.uniform(0.05, 0.5, 8)
    points = rng.normal(0.0, 0.1, (8, 3)) + rng.normal(0.0, 0.2, 3)
    mass = masses.sum()
    com = masses @ points / mass
    rpy = rng.uniform(-3.0, 3.0, 3)
    arms = (points - com) @ Rotation.from_euler("xyz", rpy).as_matrix()
    inertia = np.einsum("k,ki,ki->", masses, arms, arms) * np.eye(3) - np.einsum(
        "k,ki,kj->ij", masses, arms, arms
    )
    entries = " ".join(
        f'i{a}{b}="{float(inertia["xyz".index(a), "xyz".index(b)])!r}"'
        for a, b in ("xx", "xy", "xz", "yy", "yz", "zz")
    )
    return (
        f'<link name="{name}"><inertial><origin xyz="{_numbers(com)}" rpy="{_numbers(rpy)}"/>'
        f'<mass value="{float(mass)!r}"/><inertia {entries}/></inertial></link>'
    )


def _motion(rng: np.random.Generator, kind: str) -> str:
    if kind == "fixed":
        return ""
    axis = rng.normal(size=3) if rng.random() < 0.7 else np.eye(3)[rng.integers(3)]
    axis /= np.linalg.norm(axis)
    limits = "" if kind == "continuous" else 'lower="-6" upper="6" '
    return f'<axis xyz="{_numbers(axis)}"/><limit {limits}velocity="9" effort="90"/>'


def _mimic(rng: np.random.Generator, leader: str) -> str:
    multiplier, offset = rng.uniform(0.5, 2.0) * rng.choice([-1.0, 1.0]), rng.normal()
    return f'<mimic joint="{leader}" multiplier="{float(multiplier)!r}" offset="{float(offset)!r}"/>'
