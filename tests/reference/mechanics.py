"""Energies, mass matrix and Coriolis matrix straight from their definitions, for small robots.

Poses are products of 4x4 matrices; velocities are their derivatives by a complex step, exact to rounding
("The Complex-Step Derivative Approximation", ACM TOMS 2003, doi 10.1145/838250.838251). No spatial algebra,
no recursion over inertias, and the URDF text is read anew.
"""

from __future__ import annotations

from typing import Any
from xml.etree import ElementTree

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

Array = NDArray[Any]  # real, or complex for a complex step
Floats = NDArray[np.float64]

STEP = 1e-30


class ReferenceRobot:
    """A robot read from trusted URDF text; `joints` are the independent ones in the caller's order of q."""

    def __init__(self, urdf: str, joints: tuple[str, ...], base: str, gravity: Floats) -> None:
        root = ElementTree.fromstring(urdf)
        self.bodies = [_Body(link) for link in root.iter("link") if link.find("inertial") is not None]
        self.above = {
            _get(joint, "child", "link"): joint
            for joint in root.iter("joint")
            if joint.find("child") is not None
        }
        self.by_name = {joint.get("name"): joint for joint in self.above.values()}
        self.joints, self.floating, self.gravity = joints, base == "floating", gravity
        self.n = len(joints) + (6 if self.floating else 0)

    def pose(self, link: str, q: Floats, delta: Array) -> Array:
        """Return the pose (4,4) of a link at q moved by the small motion `delta` (n,)."""
        if link not in self.above:
            return self._base_pose(q, delta)
        joint = self.above[link]
        T = self.pose(_get(joint, "parent", "link"), q, delta) @ _origin(joint)
        if joint.get("type") == "fixed":
            return T
        axis = _numbers(_get(joint, "axis", "xyz"))
        x = self._coordinate(joint, q, delta)
        moved: Array = np.eye(4, dtype=complex)
        if joint.get("type") == "prismatic":
            moved[:3, 3] = axis * x
        else:
            along = np.outer(axis, axis)
            moved[:3, :3] = along + np.cos(x) * (np.eye(3) - along) + np.sin(x) * _cross(axis)
        return T @ moved

    def velocity(self, link: str, q: Floats, v: Floats) -> tuple[Floats, Floats]:
        """Return the pose of a link and its rate of change, both (4,4), when the robot moves with v."""
        T = self.pose(link, q, 1j * STEP * v)
        return T.real, T.imag / STEP

    def kinetic_energy(self, q: Floats, v: Floats) -> float:
        """Return the sum of ½ m |ċ|² + ½ ωᵀ I ω over the bodies [J]."""
        return float(
            sum(0.5 * body.mass * c @ c + 0.5 * w @ body.inertia @ w for body, c, w in self._rates(q, v))
        )

    def potential_energy(self, q: Floats, delta: Array) -> complex:
        """Return minus the sum of m gᵀ c over the bodies [J]."""
        terms = [b.mass * self.gravity @ (self.pose(b.link, q, delta) @ b.com)[:3] for b in self.bodies]
        return complex(-sum(terms))

    def gravity_torque(self, q: Floats) -> Floats:
        """Return ∂U/∂q (n,)."""
        return np.array([self.potential_energy(q, 1j * STEP * unit).imag / STEP for unit in np.eye(self.n)])

    def mass_matrix(self, q: Floats) -> Floats:
        """Return the sum of m J_cᵀ J_c + J_ωᵀ I J_ω over the bodies (n,n)."""
        M = np.zeros((self.n, self.n))
        columns = [self._rates(q, unit) for unit in np.eye(self.n)]
        for body, *rates in zip(self.bodies, *columns, strict=True):
            J_c = np.array([c for _, c, _ in rates]).T
            J_w = np.array([w for _, _, w in rates]).T
            M += body.mass * J_c.T @ J_c + J_w.T @ body.inertia @ J_w
        return M

    def coriolis_matrix(self, q: Floats, v: Floats, step: float = 1e-4) -> Floats:
        """Return the Christoffel matrix (n,n) of a fixed base from fourth-order differences of M."""

        def slope(unit: Floats) -> Floats:
            far, near = (
                self.mass_matrix(q + size * unit) - self.mass_matrix(q - size * unit)
                for size in (2.0 * step, step)
            )
            result: Floats = (8.0 * near - far) / (12.0 * step)
            return result

        dM = np.array([slope(unit) for unit in np.eye(self.n)])
        # c_ijk = ½ (∂_k M_ij + ∂_j M_ik − ∂_i M_jk)
        christoffel = 0.5 * (dM.transpose(1, 2, 0) + dM.transpose(1, 0, 2) - dM)
        C: Floats = christoffel @ v
        return C

    def _rates(self, q: Floats, v: Floats) -> list[tuple[_Body, Floats, Floats]]:
        """Return per body the velocity of its centre of mass (world) and its angular velocity (own axes)."""
        rates = []
        for body in self.bodies:
            T, T_dot = self.velocity(body.link, q, v)
            W = T[:3, :3].T @ T_dot[:3, :3]
            w = body.axes.T @ np.array([W[2, 1], W[0, 2], W[1, 0]])
            rates.append((body, (T_dot @ body.com)[:3], w))
        return rates

    def _base_pose(self, q: Floats, delta: Array) -> Array:
        T: Array = np.eye(4, dtype=complex)
        if self.floating:
            small = np.zeros((4, 4), dtype=complex)
            small[:3, :3], small[:3, 3] = _cross(delta[:3]), delta[3:6]
            T[:3, :3], T[:3, 3] = Rotation.from_quat(q[3:7], scalar_first=True).as_matrix(), q[:3]
            T = T @ (np.eye(4) + small)
        return T

    def _coordinate(self, joint: ElementTree.Element, q: Floats, delta: Array) -> complex:
        mimic = joint.find("mimic")
        if mimic is not None:
            leader = self.by_name[mimic.get("joint")]
            scale, offset = float(mimic.get("multiplier", 1.0)), float(mimic.get("offset", 0.0))
            return scale * self._coordinate(leader, q, delta) + offset
        index = self.joints.index(joint.get("name", ""))
        return complex(q[(7 if self.floating else 0) + index] + delta[(6 if self.floating else 0) + index])


class _Body:
    """Mass, centre of mass (4, homogeneous) and inertia about it, in `axes` of the link frame."""

    def __init__(self, link: ElementTree.Element) -> None:
        inertial = link.find("inertial")
        assert inertial is not None
        place = _origin(inertial)
        entry = {
            key: float(_get(inertial, "inertia", key)) for key in ("ixx", "ixy", "ixz", "iyy", "iyz", "izz")
        }
        self.link = link.get("name", "")
        self.mass = float(_get(inertial, "mass", "value"))
        self.com, self.axes = place[:, 3], place[:3, :3]
        self.inertia = np.array(
            [
                [entry["ixx"], entry["ixy"], entry["ixz"]],
                [entry["ixy"], entry["iyy"], entry["iyz"]],
                [entry["ixz"], entry["iyz"], entry["izz"]],
            ]
        )


def _get(element: ElementTree.Element, tag: str, key: str) -> str:
    child = element.find(tag)
    assert child is not None
    return child.attrib[key]


def _numbers(text: str) -> Floats:
    return np.array([float(word) for word in text.split()])


def _origin(element: ElementTree.Element) -> Floats:
    T = np.eye(4)
    origin = element.find("origin")
    if origin is not None:
        T[:3, 3] = _numbers(origin.get("xyz", "0 0 0"))
        T[:3, :3] = Rotation.from_euler("xyz", _numbers(origin.get("rpy", "0 0 0"))).as_matrix()
    return T


def _cross(w: Array) -> Array:
    return np.array([[0.0, -w[2], w[1]], [w[2], 0.0, -w[0]], [-w[1], w[0], 0.0]])
