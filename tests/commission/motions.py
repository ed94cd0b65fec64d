"""Recordings of given motions, their torques by an outside library (`pin`, inverse dynamics)."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import pinocchio as pin
from numpy.typing import NDArray

from monitor.commission.fit import Recording
from monitor.kernels.ledger import BENDS
from monitor.robot.tree import Base, Tree, build_tree
from monitor.robot.urdf import parse_urdf
from monitor.setup.calibration import Model

Floats = NDArray[np.float64]

GRAVITY = np.array([0.0, 0.0, -9.81])
V0 = 0.01


@dataclass(frozen=True)
class Machine:
    """A robot without followers, its joints depth-first by name too, and its true friction (n)."""

    urdf: str
    base: Base
    armature: Floats
    viscous: Floats
    coulomb: Floats
    offset: Floats

    @property
    def tree(self) -> Tree:
        return build_tree(parse_urdf(self.urdf), self.base)

    @property
    def truth(self) -> Model:
        friction = self.viscous, self.coulomb, self.offset
        return Model(self.tree.arrays.E, self.armature, *friction, np.zeros((self.tree.n, BENDS)))

    def friction(self, v: Floats) -> Floats:
        torque: Floats = self.viscous * v + self.coulomb * np.tanh(v / V0) + self.offset
        return torque

    def moved(self, seconds: float, seed: int, speed: float = 2.0, period: float = 1e-3) -> Recording:
        """Return an exact recording; on the base rows the force that the motion needs there."""
        model, swap = self.pin_model()
        data = model.createData()
        rng = np.random.default_rng(seed)
        frequency = rng.uniform(0.2, 1.2, (3, self.tree.n))
        phase = rng.uniform(0.0, 2.0 * math.pi, (3, self.tree.n))
        size = speed * rng.dirichlet(np.ones(3), self.tree.n).T

        def velocity(t: float) -> Floats:
            total: Floats = (size * np.sin(2.0 * math.pi * frequency * t + phase)).sum(axis=0)
            return total

        q = pin.neutral(model)
        times = period * np.arange(round(seconds / period))
        rows: list[tuple[Floats, Floats, Floats]] = []
        for t in times:
            v = velocity(t)
            turn = 2.0 * math.pi * frequency
            a = (size * turn * np.cos(turn * t + phase)).sum(axis=0)
            tau = pin.rnea(model, data, q, v[swap], a[swap])[swap] + self.armature * a + self.friction(v)
            rows.append((self._ours(q), v, tau))
            for k in range(4):  # the midpoint rule; its error is far below that of the ledger
                q = pin.integrate(model, q, velocity(t + (k + 0.5) / 4.0 * period)[swap] * period / 4.0)
        q_rows, v_rows, tau_rows = (np.array(column) for column in zip(*rows, strict=True))
        return Recording(times, q_rows, v_rows, tau_rows)

    def pin_model(self) -> tuple[pin.Model, NDArray[np.int64]]:
        """Return the library's model, and where its velocities are among ours (the same way back)."""
        free = (pin.JointModelFreeFlyer(),) if self.base == "floating" else ()
        model = pin.buildModelFromXML(self.urdf, *free)
        model.gravity.linear = GRAVITY
        swap = np.arange(model.nv)
        if self.base == "floating":
            swap[:6] = (3, 4, 5, 0, 1, 2)
        return model, swap

    def _ours(self, q: Floats) -> Floats:
        return np.concatenate([q[:3], q[[6, 3, 4, 5]], q[7:]]) if self.base == "floating" else q.copy()


def off(E: Floats, seed: int, share: float = 0.08) -> Floats:
    """Return pseudo-inertias (N,4,4) about that share off, still of real bodies; massless ones stay."""
    rng = np.random.default_rng(seed)
    result = E.copy()
    for k in np.flatnonzero(E[:, 3, 3] > 0.0):
        L, G = np.linalg.cholesky(E[k]), rng.standard_normal((4, 4))
        result[k] = L @ (np.eye(4) + share * (G + G.T) / 2.0) @ L.T
    return result


def noisy(recording: Recording, seed: int, torque_sd: Floats, velocity_sd: float = 0.007) -> Recording:
    """Return what sensors see: encoders of 2^17 steps a turn, white noise on velocity and torque."""
    rng = np.random.default_rng(seed)
    t, q, v, tau, usable = recording
    step, joints = 2.0 * math.pi / 2**17, slice(7 if q.shape[1] != v.shape[1] else 0, None)
    q = q.copy()
    q[:, joints] = np.round(q[:, joints] / step) * step
    return Recording(
        t,
        q,
        v + velocity_sd * rng.standard_normal(v.shape),
        tau + torque_sd * rng.standard_normal(tau.shape),
        usable,
    )
