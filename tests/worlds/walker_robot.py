"""*Terrace*, an invented four-legged walker, drawn at random: description, data sheet, closed leg kinematics.

Axes: x forward, y to the left, z up; the base origin is the middle of the trunk. Each leg is hip roll (x
axis), hip pitch and knee (y axis); it hangs straight down at zero angles and knees bend backward
(negative). The foot is a ball at the end of the shank.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tests.worlds.walker_control import foot_place, leg_angles

Floats = NDArray[np.float64]

FEET = ("front_left", "front_right", "hind_left", "hind_right")
HINGES = ("roll", "pitch", "knee")
LINKS = ("hip", "thigh", "shank")
JOINTS = tuple(f"{foot}_{hinge}" for foot in FEET for hinge in HINGES)
ENCODER_STEP = 2.0 * math.pi / 2**17
VELOCITY_SD = 0.007
TORQUE_SD_SHARE = 0.005
_MASSES_KG = {"trunk": 18.0, "hip": 1.3, "thigh": 1.9, "shank": 0.4}


@dataclass(frozen=True)
class Legs:
    """Kinematics of four like legs; rows in the order of `FEET`.

    `hips` (4,3) [m] where the roll axes are, base axes; `outward` (4,) [m] from roll to pitch axis along y,
    signed; `thigh`, `shank` [m] from pitch axis to knee and from knee to the middle of the foot.
    """

    hips: Floats
    outward: Floats
    thigh: float
    shank: float

    def feet(self, q: Floats) -> tuple[Floats, Floats]:
        """Return where the feet are (4,3) and their Jacobians (4,3,3), base axes, at joint angles q (4,3)."""
        p, J = np.zeros((4, 3)), np.zeros((4, 3, 3))
        for i in range(4):
            foot_place(self.hips[i], self.outward[i], self.thigh, self.shank, q[i], p[i], J[i])
        return p, J

    def angles(self, feet: Floats) -> Floats:
        """Return joint angles (4,3) which bring the feet to these places (4,3), base axes."""
        q = np.zeros((4, 3))
        for i in range(4):
            leg_angles(self.hips[i], self.outward[i], self.thigh, self.shank, feet[i], q[i])
        return q


@dataclass(frozen=True)
class Terrace:
    """One walker, and what its makers say of it.

    Attributes
    ----------
    urdf, cad : str
        The true description, and the one from the drawing board: masses and inertias 3 to 8 % off, centres of
        mass some millimetres.
    legs : Legs
        True lengths; the drawing agrees with them.
    mass_kg : float
    foot_radius_m : float
    rated, peak : (12,)
        Torque [Nm].
    armature, coulomb, viscous : (12,)
        True rotor inertia at the joint [kg m²] and friction [Nm], [Nm s/rad].
    joints : tuple of dict
        The data sheet, in words of `[[robot.joint]]`: friction up to 25 %, rotor inertia up to 3 % off the
        truth.
    feet : tuple of dict
        As in `[[robot.foot]]`: the middle of each foot.
    grip : float
        Coefficient of friction of the ground.
    stance_height_m : float
        Height of the base origin while it stands at ease.
    """

    urdf: str
    cad: str
    legs: Legs
    mass_kg: float
    foot_radius_m: float
    rated: Floats
    peak: Floats
    armature: Floats
    coulomb: Floats
    viscous: Floats
    joints: tuple[dict[str, Any], ...]
    feet: tuple[dict[str, Any], ...]
    grip: float
    stance_height_m: float


def terrace(seed: int) -> Terrace:
    """Return the walker of that seed; seeds from 1000 on are held out."""
    rng = np.random.default_rng((seed, 4))
    size = rng.uniform(0.94, 1.06)
    heavy = rng.uniform(0.82, 1.2) * size
    length, width, outward = 0.27 * size, 0.1 * size, 0.085 * size
    thigh, shank = rng.uniform(0.25, 0.28) * size, rng.uniform(0.25, 0.28) * size
    radius = rng.uniform(0.018, 0.022)
    side = np.array([1.0, -1.0, 1.0, -1.0])
    fore = np.array([1.0, 1.0, -1.0, -1.0])
    hips = np.stack((fore * length, side * width, np.zeros(4)), axis=1)
    masses = {name: mass * heavy * rng.uniform(0.9, 1.1) for name, mass in _MASSES_KG.items()}

    parts = [
        '<robot name="terrace">',
        _link("trunk", masses["trunk"], (length, width, 0.07), np.zeros(3), rng),
    ]
    for i, foot in enumerate(FEET):
        out = side[i] * outward
        shapes = {
            "hip": ((0.05, 0.045, 0.045), np.array([0.0, 0.6 * out, 0.0])),
            "thigh": ((0.03, 0.03, 0.5 * thigh), np.array([0.0, 0.02 * side[i], -0.25 * thigh])),
            "shank": ((0.012, 0.012, 0.5 * shank), np.array([0.0, 0.0, -0.45 * shank])),
        }
        places = {"hip": hips[i], "thigh": np.array([0.0, out, 0.0]), "shank": np.array([0.0, 0.0, -thigh])}
        parent = "trunk"
        for link, hinge in zip(LINKS, HINGES, strict=True):
            axis = "1 0 0" if hinge == "roll" else "0 1 0"
            name = f"{foot}_{link}"
            parts.append(
                f'<joint name="{foot}_{hinge}" type="revolute">'
                f'<parent link="{parent}"/><child link="{name}"/>'
                f'<origin xyz="{_text(places[link])}"/><axis xyz="{axis}"/>'
                '<limit lower="-3" upper="3" effort="200" velocity="30"/></joint>'
            )
            half, middle = shapes[link]
            ball = _ball(foot, shank, radius) if link == "shank" else ""
            parts.append(_link(name, masses[link], half, middle, rng, ball))
            parent = name
    urdf = "\n".join([*parts, "</robot>"])

    mass = masses["trunk"] + 4.0 * (masses["hip"] + masses["thigh"] + masses["shank"])
    rated = np.tile((20.0, 30.0, 30.0), 4) * mass / 32.0
    nominal = {"armature": 7e-4 * rated, "coulomb": 0.025 * rated, "viscous": 0.003 * rated}
    true = {
        name: value * rng.uniform(1.0 - spread, 1.0 + spread, 12)
        for (name, value), spread in zip(nominal.items(), (0.03, 0.25, 0.25), strict=True)
    }
    joints = tuple(
        {
            "name": name,
            "rated_torque": float(rated[j]),
            "peak_torque": float(3.0 * rated[j]),
            "armature": float(nominal["armature"][j]),
            "coulomb_friction": float(nominal["coulomb"][j]),
            "viscous_friction": float(nominal["viscous"][j]),
            "encoder_step": ENCODER_STEP,
            "velocity_noise_sd": VELOCITY_SD,
            "torque_noise_sd": float(TORQUE_SD_SHARE * rated[j]),
        }
        for j, name in enumerate(JOINTS)
    )
    return Terrace(
        urdf=urdf,
        cad=_drawn(urdf, rng),
        legs=Legs(hips, side * outward, thigh, shank),
        mass_kg=mass,
        foot_radius_m=radius,
        rated=rated,
        peak=3.0 * rated,
        armature=true["armature"],
        coulomb=true["coulomb"],
        viscous=true["viscous"],
        joints=joints,
        feet=tuple(
            {"name": f, "link": f"{f}_shank", "point": [0.0, 0.0, -shank], "radius": radius} for f in FEET
        ),
        grip=rng.uniform(0.6, 0.9),
        stance_height_m=0.78 * (thigh + shank) + radius,
    )


def _link(
    name: str,
    mass: float,
    half: tuple[float, float, float],
    middle: Floats,
    rng: np.random.Generator,
    more: str = "",
) -> str:
    """Return a link with the inertia of a solid box (any mechanics handbook), turned and shifted a little."""
    inertia = np.array(
        [half[1] ** 2 + half[2] ** 2, half[0] ** 2 + half[2] ** 2, half[0] ** 2 + half[1] ** 2]
    )
    xx, yy, zz = inertia * mass / 3.0 * rng.uniform(0.95, 1.05)
    middle = middle + rng.uniform(-0.1, 0.1, 3) * np.array(half)
    turned = rng.uniform(-0.2, 0.2, 3)
    return (
        f'<link name="{name}"><inertial><origin xyz="{_text(middle)}" rpy="{_text(turned)}"/>'
        f'<mass value="{mass:.17g}"/><inertia ixx="{xx:.17g}" iyy="{yy:.17g}" izz="{zz:.17g}" '
        f'ixy="0" ixz="0" iyz="0"/></inertial>{more}</link>'
    )


def _ball(foot: str, shank: float, radius: float) -> str:
    return (
        f'<collision name="{foot}"><origin xyz="0 0 {-shank:.17g}"/>'
        f'<geometry><sphere radius="{radius:.17g}"/></geometry></collision>'
    )


def _drawn(urdf: str, rng: np.random.Generator) -> str:
    """Return the description as the drawing board has it."""

    def off() -> float:
        return 1.0 + float(rng.choice((-1.0, 1.0))) * rng.uniform(0.03, 0.08)

    def changed(link: re.Match[str]) -> str:
        mass, inertia, shift = off(), off(), rng.uniform(-0.004, 0.004, 3)
        text = re.sub(r'(mass value)="([^"]+)"', lambda m: f'{m[1]}="{float(m[2]) * mass:.17g}"', link[0])
        text = re.sub(r'(i..)="([^"]+)"', lambda m: f'{m[1]}="{float(m[2]) * inertia:.17g}"', text)
        return re.sub(
            r'xyz="([^"]+)"',
            lambda m: f'xyz="{_text(np.array(m[1].split(), dtype=float) + shift)}"',
            text,
            count=1,
        )

    return re.sub(r"<inertial>.*?</inertial>", changed, urdf)


def _text(numbers: Floats) -> str:
    return " ".join(repr(float(x)) for x in numbers)
