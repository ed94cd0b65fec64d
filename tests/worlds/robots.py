"""Random but plausible seven-joint arms: what the maker says about them, and what they truly are.

Axes alternate (roll, pitch, roll, ... from the base), reach from the shoulder 0.8 to 1.3 m, moving mass 12 to
35 kg. The description given out has link masses, centres of mass and inertias 3 to 8 % off the true ones.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache
from typing import Any

import mujoco
import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

JOINTS = 7
ENCODER_STEP_RAD = 2.0 * math.pi / 2**17
VELOCITY_SD = 0.007
TORQUE_SD_SHARE = 0.005
LINK_TORQUE_SD_SHARE = 0.005
FRICTION_VELOCITY = 0.004
# Where the arm works: middle and half width of the range of each joint [rad].
HOME = np.array([0.0, 0.5, 0.0, 1.2, 0.0, 0.8, 0.0])
HALF_RANGE = np.array([1.8, 0.7, 1.0, 0.7, 1.4, 0.9, 1.8])
_LIMIT = (2.9, 2.2, 2.9, 2.6, 2.9, 2.6, 2.9)


@dataclass(frozen=True)
class Link:
    """A cylinder along z, from the origin of its frame; the next joint sits at (`aside_m`, 0, `length_m`).

    `inertia` [kg m²] is that about the centre of mass `com_m`, along the axes of the frame.
    """

    name: str
    length_m: float
    radius_m: float
    aside_m: float
    mass_kg: float
    com_m: tuple[float, float, float]
    inertia: tuple[float, float, float]

    def surface(self, along: float, angle: float) -> tuple[Floats, Floats]:
        """Return a point on the shell (3,) [m] in link axes and its outward normal; `along` from 0 to 1."""
        normal = np.array([math.cos(angle), math.sin(angle), 0.0])
        return np.array([self.aside_m / 2, 0.0, along * self.length_m]) + self.radius_m * normal, normal


@dataclass(frozen=True)
class Arm:
    """A robot: its description, its datasheet, and what is true of it.

    Attributes
    ----------
    urdf, true_urdf : str
        Description as given out, and the true one.
    joints : tuple of dict
        Keys and values for `[[robot.joint]]`, as a datasheet would state them.
    links : tuple of Link
        Of the description, from the base out.
    armature : (n,)
        True rotor inertia at the joint [kg m²].
    coulomb, viscous : (n,)
        True friction of a warm arm on a usual day [Nm], [Nm s/rad].
    stiffness, coupling_damping, backlash : (n,)
        Of the gears, for the elastic world [Nm/rad], [Nm s/rad], [rad].
    dip, dip_velocity : (n,)
        Share of the Coulomb friction that goes with speed, and over which speed, for the world with a dip.
    """

    urdf: str
    true_urdf: str
    joints: tuple[dict[str, Any], ...]
    links: tuple[Link, ...]
    armature: Floats
    coulomb: Floats
    viscous: Floats
    stiffness: Floats
    coupling_damping: Floats
    backlash: Floats
    dip: Floats
    dip_velocity: Floats

    @property
    def rated(self) -> Floats:
        """Rated torques (n,) [Nm]."""
        return np.array([joint["rated_torque"] for joint in self.joints])

    @property
    def peak(self) -> Floats:
        """Peak torques (n,) [Nm]."""
        return np.array([joint["peak_torque"] for joint in self.joints])


@cache
def robot(seed: int) -> Arm:
    """Return the arm of this seed."""
    rng = np.random.default_rng([seed, 7])
    links = _links(rng)
    urdf = _urdf(links)
    model = mujoco.MjModel.from_xml_string(urdf)
    gravity, inertia = _loads(model, rng)
    rated = _rated(gravity, rng)
    armature = rated * rng.uniform(0.0045, 0.0065, JOINTS)
    coulomb, viscous = rated * rng.uniform(0.03, 0.08, JOINTS), rated * rng.uniform(0.015, 0.04, JOINTS)
    frequency = np.array([9.0, 9.0, 13.0, 13.0, 20.0, 20.0, 25.0]) * rng.uniform(0.9, 1.25, JOINTS)
    # At least so stiff that rated torque twists a gear by 12 mrad.
    stiffness = np.maximum(inertia * (2.0 * math.pi * frequency) ** 2, rated / 0.012)
    joints = tuple(
        {
            "name": f"joint{i + 1}",
            "rated_torque": float(rated[i]),
            "peak_torque": float(np.round(1.8 * rated[i], 1)),
            "armature": float(armature[i] * rng.uniform(0.98, 1.02)),
            "coulomb_friction": float(coulomb[i]),
            "viscous_friction": float(viscous[i]),
            "friction_velocity": FRICTION_VELOCITY,
            "encoder_step": ENCODER_STEP_RAD,
            "velocity_noise_sd": VELOCITY_SD,
            "torque_noise_sd": TORQUE_SD_SHARE * float(rated[i]),
        }
        for i in range(JOINTS)
    )
    return Arm(
        urdf,
        _urdf(_true_links(links, rng)),
        joints,
        links,
        armature,
        coulomb,
        viscous,
        stiffness,
        2.0 * rng.uniform(0.04, 0.08, JOINTS) * np.sqrt(stiffness * inertia),
        rng.uniform(1.0e-4, 6.0e-4, JOINTS),
        rng.uniform(0.35, 0.7, JOINTS),
        rng.uniform(0.06, 0.2, JOINTS),
    )


def _links(rng: np.random.Generator) -> tuple[Link, ...]:
    """Draw the links: two for the shoulder height, upper arm and forearm each in two halves, wrist, tool."""
    upper, lower, tool = rng.uniform(0.35, 0.5), rng.uniform(0.32, 0.45), rng.uniform(0.16, 0.3)
    first, second = rng.uniform(0.4, 0.6, 2)
    lengths = (
        rng.uniform(0.12, 0.2),
        first * upper,
        (1 - first) * upper,
        second * lower,
        (1 - second) * lower,
        rng.uniform(0.07, 0.11),
        tool,
    )
    radii = np.array([0.085, 0.075, 0.068, 0.06, 0.052, 0.047, 0.042]) * rng.uniform(0.85, 1.1)
    elbow = rng.choice([0.0, rng.uniform(0.03, 0.07)])
    aside = (0.0, 0.0, elbow, -elbow, 0.0, rng.choice([0.0, 0.05]), 0.0)
    shares = np.array([5.0, 4.2, 3.4, 2.8, 2.0, 1.5, 1.2]) * rng.uniform(0.85, 1.15, JOINTS)
    masses = rng.uniform(12.0, 35.0) * shares / shares.sum()
    links = []
    for i in range(JOINTS):
        m, r, length = masses[i], radii[i], lengths[i]
        across, along = m * (3 * r * r + length * length) / 12, m * r * r / 2  # a solid cylinder
        lean = rng.uniform(-0.15, 0.15, 3) * (r, r, length)
        com = (aside[i] / 2 + lean[0], lean[1], length / 2 + lean[2])
        links.append(Link(f"link{i + 1}", length, r, aside[i], m, com, (across, across, along)))
    return tuple(links)


def _true_links(links: Sequence[Link], rng: np.random.Generator) -> list[Link]:
    """Return links whose mass, centre of mass and inertia are 3 to 8 % off."""

    def off(size: int) -> Floats:
        factors: Floats = 1.0 + rng.uniform(0.03, 0.08, size) * rng.choice([-1.0, 1.0], size)
        return factors

    return [
        Link(
            link.name,
            link.length_m,
            link.radius_m,
            link.aside_m,
            link.mass_kg * off(1)[0],
            tuple(np.array(link.com_m) * off(3)),
            tuple(np.array(link.inertia) * off(1)),  # one factor: still the inertia of a real body
        )
        for link in links
    ]


def _urdf(links: Sequence[Link]) -> str:
    parts = ['<robot name="arm">', '<link name="base"/>']
    parent, at = "base", (0.0, 0.0, 0.06)
    for i, link in enumerate(links):
        axis = "0 0 1" if i % 2 == 0 else "0 1 0"
        ixx, iyy, izz = link.inertia
        middle = f'<origin xyz="{link.aside_m / 2} 0 {link.length_m / 2}"/>'
        parts.append(
            f'<link name="{link.name}"><inertial><origin xyz="{_text(link.com_m)}"/>'
            f'<mass value="{link.mass_kg}"/>'
            f'<inertia ixx="{ixx}" iyy="{iyy}" izz="{izz}" ixy="0" ixz="0" iyz="0"/></inertial>'
            f'<collision>{middle}<geometry><cylinder radius="{link.radius_m}" length="{link.length_m}"/>'
            f"</geometry></collision></link>"
            f'<joint name="joint{i + 1}" type="revolute"><parent link="{parent}"/><child link="{link.name}"/>'
            f'<origin xyz="{_text(at)}"/><axis xyz="{axis}"/>'
            f'<limit lower="{-_LIMIT[i]}" upper="{_LIMIT[i]}" velocity="3" effort="1000"/></joint>'
        )
        parent, at = link.name, (link.aside_m, 0.0, link.length_m)
    return "\n".join([*parts, "</robot>"])


def _loads(model: Any, rng: np.random.Generator) -> tuple[Floats, Floats]:
    """Return the largest gravity torque and the median inertia at each joint (n,) over the working range."""
    data = mujoco.MjData(model)
    gravity, inertia, M = np.zeros(JOINTS), [], np.zeros((JOINTS, JOINTS))
    for _ in range(300):
        data.qpos[:] = HOME + HALF_RANGE * rng.uniform(-1.0, 1.0, JOINTS)
        mujoco.mj_forward(model, data)
        gravity = np.maximum(gravity, np.abs(data.qfrc_bias))
        mujoco.mj_fullM(model, data, M)
        inertia.append(np.diag(M).copy())
    return gravity, np.median(inertia, axis=0)


def _rated(gravity: Floats, rng: np.random.Generator) -> Floats:
    """Return rated torques (n,): gravity takes at most 60 %; drives of one arm are of a family of sizes."""
    needed = gravity / rng.uniform(0.42, 0.58, JOINTS)
    shoulder = max(needed[1], 40.0)
    least = shoulder * np.array([0.8, 1.0, 0.4, 0.4, 0.14, 0.14, 0.09])
    return np.round(np.maximum(np.maximum(needed, least), 7.0), 1)


def _text(numbers: Sequence[float] | Floats) -> str:
    return " ".join(repr(float(x)) for x in numbers)
