"""Mass matrix, Coriolis matrix, gravity and momenta of a tree in one outward and one inward pass.

Everything is written in world axes with the origin at the base position of this sample, so moving an inertia
to a parent is plain addition. Twists are fields `(omega; u)`: the point at r moves with u + omega x r.
One object carries the mass of a body, its pseudo-inertia `E = [[Sigma, h], [h', m]]`; its rate of change is
`F = hat(V) E`. From the sums of both over a subtree follow all terms (see `inward`). The scheme and its
identities are in DEVELOPERS.md; the properties are tested in tests/robot.

Shapes: N axes in depth-first order (parents first), n degrees of freedom (mimic axes share the one of their
leader). Work arrays, all written by `outward`: R_W (N+1,3,3), p_W (N+1,3), V (N+1,6), whose last row is the
world so that the parent -1 of a root finds it; S, Sd (N,6); Ic (N,10): `Jxx Jxy Jxz Jyy Jyz Jzz hx hy hz m`;
Bc (N,12) as the nine entries of `K = tr(N)1 - N` and momentum `l`. `inward` turns Ic and Bc into the
composites of each subtree. q (n) or, with a floating base, (n+1): base position (not read: it is the origin),
unit quaternion w x y z, joints. v (n): base twist in body axes, angular then linear, then joints.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from monitor.kernels.jit import inlined, kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

REVOLUTE, PRISMATIC, BASE_ANGULAR, BASE_LINEAR = 0, 1, 2, 3


@kernel
def quaternion_matrix(w: float, x: float, y: float, z: float, R: Floats) -> None:
    """Fill the rotation matrix (3,3) of a unit quaternion, scalar first."""
    R[0, 0] = 1.0 - 2.0 * (y * y + z * z)
    R[0, 1] = 2.0 * (x * y - w * z)
    R[0, 2] = 2.0 * (x * z + w * y)
    R[1, 0] = 2.0 * (x * y + w * z)
    R[1, 1] = 1.0 - 2.0 * (x * x + z * z)
    R[1, 2] = 2.0 * (y * z - w * x)
    R[2, 0] = 2.0 * (x * z - w * y)
    R[2, 1] = 2.0 * (y * z + w * x)
    R[2, 2] = 1.0 - 2.0 * (x * x + y * y)


@inlined
def _place(
    i: int, j: int, kind: Ints, R_PJ: Floats, p_PJ: Floats, axis: Floats, x: float, R_W: Floats, p_W: Floats
) -> None:
    """Fill the world pose of the body moved by axis i at coordinate x, from that of its parent j."""
    a0, a1, a2 = axis[i, 0], axis[i, 1], axis[i, 2]
    slide, c, s = x, 1.0, 0.0
    if kind[i] == REVOLUTE:
        slide, c, s = 0.0, math.cos(x), math.sin(x)
    # Rotation about the axis in the joint frame (identity for a prismatic one).
    t = 1.0 - c
    q00, q01, q02 = c + t * a0 * a0, t * a0 * a1 - s * a2, t * a0 * a2 + s * a1
    q10, q11, q12 = t * a0 * a1 + s * a2, c + t * a1 * a1, t * a1 * a2 - s * a0
    q20, q21, q22 = t * a0 * a2 - s * a1, t * a1 * a2 + s * a0, c + t * a2 * a2
    for r in range(3):
        # Row r of R_P R_PJ, then times the joint rotation.
        r0, r1, r2 = R_W[j, r, 0], R_W[j, r, 1], R_W[j, r, 2]
        b0 = r0 * R_PJ[i, 0, 0] + r1 * R_PJ[i, 1, 0] + r2 * R_PJ[i, 2, 0]
        b1 = r0 * R_PJ[i, 0, 1] + r1 * R_PJ[i, 1, 1] + r2 * R_PJ[i, 2, 1]
        b2 = r0 * R_PJ[i, 0, 2] + r1 * R_PJ[i, 1, 2] + r2 * R_PJ[i, 2, 2]
        R_W[i, r, 0] = b0 * q00 + b1 * q10 + b2 * q20
        R_W[i, r, 1] = b0 * q01 + b1 * q11 + b2 * q21
        R_W[i, r, 2] = b0 * q02 + b1 * q12 + b2 * q22
        p_W[i, r] = p_W[j, r] + r0 * p_PJ[i, 0] + r1 * p_PJ[i, 1] + r2 * p_PJ[i, 2]
        p_W[i, r] += slide * (b0 * a0 + b1 * a1 + b2 * a2)


@inlined
def _inertia(i: int, E: Floats, R_W: Floats, p_W: Floats, V: Floats, Ic: Floats, Bc: Floats) -> None:
    """Fill the world inertia and velocity-weighted inertia of body i at its pose and twist."""
    m = E[i, 3, 3]
    p0, p1, p2 = p_W[i, 0], p_W[i, 1], p_W[i, 2]
    r00, r01, r02 = R_W[i, 0, 0], R_W[i, 0, 1], R_W[i, 0, 2]
    r10, r11, r12 = R_W[i, 1, 0], R_W[i, 1, 1], R_W[i, 1, 2]
    r20, r21, r22 = R_W[i, 2, 0], R_W[i, 2, 1], R_W[i, 2, 2]
    c0 = r00 * E[i, 0, 3] + r01 * E[i, 1, 3] + r02 * E[i, 2, 3]
    c1 = r10 * E[i, 0, 3] + r11 * E[i, 1, 3] + r12 * E[i, 2, 3]
    c2 = r20 * E[i, 0, 3] + r21 * E[i, 1, 3] + r22 * E[i, 2, 3]
    # G = R Sigma, row by row; then Sigma_world = G R' + p c' + c p' + m p p'.
    e00, e01, e02, e11, e12, e22 = E[i, 0, 0], E[i, 0, 1], E[i, 0, 2], E[i, 1, 1], E[i, 1, 2], E[i, 2, 2]
    g00 = r00 * e00 + r01 * e01 + r02 * e02
    g01 = r00 * e01 + r01 * e11 + r02 * e12
    g02 = r00 * e02 + r01 * e12 + r02 * e22
    g10 = r10 * e00 + r11 * e01 + r12 * e02
    g11 = r10 * e01 + r11 * e11 + r12 * e12
    g12 = r10 * e02 + r11 * e12 + r12 * e22
    g20 = r20 * e00 + r21 * e01 + r22 * e02
    g21 = r20 * e01 + r21 * e11 + r22 * e12
    g22 = r20 * e02 + r21 * e12 + r22 * e22
    h0, h1, h2 = c0 + m * p0, c1 + m * p1, c2 + m * p2
    s00 = g00 * r00 + g01 * r01 + g02 * r02 + p0 * c0 + h0 * p0
    s01 = g00 * r10 + g01 * r11 + g02 * r12 + p0 * c1 + h0 * p1
    s02 = g00 * r20 + g01 * r21 + g02 * r22 + p0 * c2 + h0 * p2
    s11 = g10 * r10 + g11 * r11 + g12 * r12 + p1 * c1 + h1 * p1
    s12 = g10 * r20 + g11 * r21 + g12 * r22 + p1 * c2 + h1 * p2
    s22 = g20 * r20 + g21 * r21 + g22 * r22 + p2 * c2 + h2 * p2
    Ic[i, 0], Ic[i, 1], Ic[i, 2] = s11 + s22, -s01, -s02
    Ic[i, 3], Ic[i, 4], Ic[i, 5] = s00 + s22, -s12, s00 + s11
    Ic[i, 6], Ic[i, 7], Ic[i, 8], Ic[i, 9] = h0, h1, h2, m
    w0, w1, w2, u0, u1, u2 = V[i, 0], V[i, 1], V[i, 2], V[i, 3], V[i, 4], V[i, 5]
    # N = omega x Sigma + u h'; K = tr(N) 1 - N.
    n00 = w1 * s02 - w2 * s01 + u0 * h0
    n11 = w2 * s01 - w0 * s12 + u1 * h1
    n22 = w0 * s12 - w1 * s02 + u2 * h2
    Bc[i, 0] = n11 + n22
    Bc[i, 1] = w2 * s11 - w1 * s12 - u0 * h1
    Bc[i, 2] = w2 * s12 - w1 * s22 - u0 * h2
    Bc[i, 3] = w0 * s02 - w2 * s00 - u1 * h0
    Bc[i, 4] = n00 + n22
    Bc[i, 5] = w0 * s22 - w2 * s02 - u1 * h2
    Bc[i, 6] = w1 * s00 - w0 * s01 - u2 * h0
    Bc[i, 7] = w1 * s01 - w0 * s11 - u2 * h1
    Bc[i, 8] = n00 + n11
    Bc[i, 9] = w1 * h2 - w2 * h1 + m * u0
    Bc[i, 10] = w2 * h0 - w0 * h2 + m * u1
    Bc[i, 11] = w0 * h1 - w1 * h0 + m * u2


@inlined
def outward(
    parent: Ints, kind: Ints, dof: Ints, multiplier: Floats, offset: Floats,
    R_PJ: Floats, p_PJ: Floats, axis: Floats, E: Floats, q: Floats, v: Floats,
    R_W: Floats, p_W: Floats, S: Floats, Sd: Floats, V: Floats, Ic: Floats, Bc: Floats,
) -> None:  # fmt: skip
    """Fill poses, joint twists and their rates, body twists and body inertias, parents first."""
    N = parent.shape[0]
    for r in range(3):
        p_W[N, r] = 0.0
        for c in range(3):
            R_W[N, r, c] = 1.0 if r == c else 0.0
    for r in range(6):
        V[N, r] = 0.0
    first = 0
    shift = 0
    if kind[0] == BASE_ANGULAR:
        first, shift = 6, 1  # q holds a quaternion, one number more than v
        _base(E, q, v, R_W, p_W, S, Sd, V, Ic, Bc)
    for i in range(first, N):
        d = dof[i]
        k = multiplier[i]
        x = k * q[d + shift] + offset[i]
        j = parent[i]
        _place(i, j, kind, R_PJ, p_PJ, axis, x, R_W, p_W)
        a0 = k * (R_W[i, 0, 0] * axis[i, 0] + R_W[i, 0, 1] * axis[i, 1] + R_W[i, 0, 2] * axis[i, 2])
        a1 = k * (R_W[i, 1, 0] * axis[i, 0] + R_W[i, 1, 1] * axis[i, 1] + R_W[i, 1, 2] * axis[i, 2])
        a2 = k * (R_W[i, 2, 0] * axis[i, 0] + R_W[i, 2, 1] * axis[i, 1] + R_W[i, 2, 2] * axis[i, 2])
        s0, s1, s2, s3, s4, s5 = 0.0, 0.0, 0.0, a0, a1, a2
        if kind[i] == REVOLUTE:
            p0, p1, p2 = p_W[i, 0], p_W[i, 1], p_W[i, 2]
            s0, s1, s2 = a0, a1, a2
            s3, s4, s5 = p1 * a2 - p2 * a1, p2 * a0 - p0 * a2, p0 * a1 - p1 * a0
        S[i, 0], S[i, 1], S[i, 2], S[i, 3], S[i, 4], S[i, 5] = s0, s1, s2, s3, s4, s5
        w0, w1, w2, u0, u1, u2 = V[j, 0], V[j, 1], V[j, 2], V[j, 3], V[j, 4], V[j, 5]
        # V_parent x S equals V x S, since S x S = 0.
        Sd[i, 0] = w1 * s2 - w2 * s1
        Sd[i, 1] = w2 * s0 - w0 * s2
        Sd[i, 2] = w0 * s1 - w1 * s0
        Sd[i, 3] = w1 * s5 - w2 * s4 + u1 * s2 - u2 * s1
        Sd[i, 4] = w2 * s3 - w0 * s5 + u2 * s0 - u0 * s2
        Sd[i, 5] = w0 * s4 - w1 * s3 + u0 * s1 - u1 * s0
        y = v[d]
        V[i, 0], V[i, 1], V[i, 2] = w0 + s0 * y, w1 + s1 * y, w2 + s2 * y
        V[i, 3], V[i, 4], V[i, 5] = u0 + s3 * y, u1 + s4 * y, u2 + s5 * y
        _inertia(i, E, R_W, p_W, V, Ic, Bc)


@kernel
def _base(
    E: Floats, q: Floats, v: Floats,
    R_W: Floats, p_W: Floats, S: Floats, Sd: Floats, V: Floats, Ic: Floats, Bc: Floats,
) -> None:  # fmt: skip
    """Fill the six axes of a floating base; they ride on it and share its twist. Axis 5 carries the body."""
    quaternion_matrix(q[3], q[4], q[5], q[6], R_W[0])
    R = R_W[0]
    for r in range(3):
        V[0, r] = R[r, 0] * v[0] + R[r, 1] * v[1] + R[r, 2] * v[2]
        V[0, r + 3] = R[r, 0] * v[3] + R[r, 1] * v[4] + R[r, 2] * v[5]
    w0, w1, w2, u0, u1, u2 = V[0, 0], V[0, 1], V[0, 2], V[0, 3], V[0, 4], V[0, 5]
    for i in range(6):
        for r in range(3):
            p_W[i, r] = 0.0
            S[i, r] = R[r, i] if i < 3 else 0.0
            S[i, r + 3] = 0.0 if i < 3 else R[r, i - 3]
            for c in range(3):
                R_W[i, r, c] = R[r, c]
        for r in range(6):
            V[i, r] = V[0, r]
        Sd[i, 0] = w1 * S[i, 2] - w2 * S[i, 1]
        Sd[i, 1] = w2 * S[i, 0] - w0 * S[i, 2]
        Sd[i, 2] = w0 * S[i, 1] - w1 * S[i, 0]
        Sd[i, 3] = w1 * S[i, 5] - w2 * S[i, 4] + u1 * S[i, 2] - u2 * S[i, 1]
        Sd[i, 4] = w2 * S[i, 3] - w0 * S[i, 5] + u2 * S[i, 0] - u0 * S[i, 2]
        Sd[i, 5] = w0 * S[i, 4] - w1 * S[i, 3] + u0 * S[i, 1] - u1 * S[i, 0]
        _inertia(i, E, R_W, p_W, V, Ic, Bc)


@inlined
def inward(
    parent: Ints, dof: Ints, S: Floats, Sd: Floats, gravity: Floats, Ic: Floats, Bc: Floats,
    M: Floats, C: Floats, g: Floats, p: Floats, Ctv: Floats,
) -> None:  # fmt: skip
    """Fill M, C (n,n), g, p = M v and C'v (n), children first; Ic and Bc become subtree composites.

    For i an ancestor of or equal to j: `M_ij = S_i.a`, `C_ij = S_i.b`, `C_ji = Sd_i.a + S_i.c` with
    `a = I S_j`, `b = I Sd_j + B S_j`, `c = B'S_j` of the composite of j. C is the Christoffel matrix.
    Momenta need no matrix: with the spatial momentum pi of the subtree, `p_j = S_j.pi`, `(C'v)_j = Sd_j.pi`.
    """
    n = g.shape[0]
    for i in range(n):
        g[i] = 0.0
        p[i] = 0.0
        Ctv[i] = 0.0
        for j in range(n):
            M[i, j] = 0.0
            C[i, j] = 0.0
    for j in range(parent.shape[0] - 1, -1, -1):
        J00, J01, J02, J11, J12, J22 = Ic[j, 0], Ic[j, 1], Ic[j, 2], Ic[j, 3], Ic[j, 4], Ic[j, 5]
        h0, h1, h2, m = Ic[j, 6], Ic[j, 7], Ic[j, 8], Ic[j, 9]
        K00, K01, K02 = Bc[j, 0], Bc[j, 1], Bc[j, 2]
        K10, K11, K12 = Bc[j, 3], Bc[j, 4], Bc[j, 5]
        K20, K21, K22 = Bc[j, 6], Bc[j, 7], Bc[j, 8]
        l0, l1, l2 = Bc[j, 9], Bc[j, 10], Bc[j, 11]
        w0, w1, w2, u0, u1, u2 = S[j, 0], S[j, 1], S[j, 2], S[j, 3], S[j, 4], S[j, 5]
        x0, x1, x2, y0, y1, y2 = Sd[j, 0], Sd[j, 1], Sd[j, 2], Sd[j, 3], Sd[j, 4], Sd[j, 5]
        a0 = J00 * w0 + J01 * w1 + J02 * w2 + h1 * u2 - h2 * u1
        a1 = J01 * w0 + J11 * w1 + J12 * w2 + h2 * u0 - h0 * u2
        a2 = J02 * w0 + J12 * w1 + J22 * w2 + h0 * u1 - h1 * u0
        a3 = m * u0 + h2 * w1 - h1 * w2
        a4 = m * u1 + h0 * w2 - h2 * w0
        a5 = m * u2 + h1 * w0 - h0 * w1
        b0 = J00 * x0 + J01 * x1 + J02 * x2 + h1 * y2 - h2 * y1 + K00 * w0 + K01 * w1 + K02 * w2
        b1 = J01 * x0 + J11 * x1 + J12 * x2 + h2 * y0 - h0 * y2 + K10 * w0 + K11 * w1 + K12 * w2
        b2 = J02 * x0 + J12 * x1 + J22 * x2 + h0 * y1 - h1 * y0 + K20 * w0 + K21 * w1 + K22 * w2
        b3 = m * y0 + h2 * x1 - h1 * x2 + l2 * w1 - l1 * w2
        b4 = m * y1 + h0 * x2 - h2 * x0 + l0 * w2 - l2 * w0
        b5 = m * y2 + h1 * x0 - h0 * x1 + l1 * w0 - l0 * w1
        c0 = K00 * w0 + K10 * w1 + K20 * w2 + l1 * u2 - l2 * u1
        c1 = K01 * w0 + K11 * w1 + K21 * w2 + l2 * u0 - l0 * u2
        c2 = K02 * w0 + K12 * w1 + K22 * w2 + l0 * u1 - l1 * u0
        dj = dof[j]
        g[dj] -= gravity[0] * a3 + gravity[1] * a4 + gravity[2] * a5
        # Angular momentum about the origin is the axial vector of N, here read from K.
        o0, o1, o2 = K12 - K21, K20 - K02, K01 - K10
        p[dj] += w0 * o0 + w1 * o1 + w2 * o2 + u0 * l0 + u1 * l1 + u2 * l2
        Ctv[dj] += x0 * o0 + x1 * o1 + x2 * o2 + y0 * l0 + y1 * l1 + y2 * l2
        M[dj, dj] += w0 * a0 + w1 * a1 + w2 * a2 + u0 * a3 + u1 * a4 + u2 * a5
        C[dj, dj] += w0 * b0 + w1 * b1 + w2 * b2 + u0 * b3 + u1 * b4 + u2 * b5
        i = parent[j]
        if i >= 0:
            for k in range(10):
                Ic[i, k] += Ic[j, k]
            for k in range(12):
                Bc[i, k] += Bc[j, k]
        while i >= 0:
            s0, s1, s2, s3, s4, s5 = S[i, 0], S[i, 1], S[i, 2], S[i, 3], S[i, 4], S[i, 5]
            di = dof[i]
            Mij = s0 * a0 + s1 * a1 + s2 * a2 + s3 * a3 + s4 * a4 + s5 * a5
            M[di, dj] += Mij
            M[dj, di] += Mij
            C[di, dj] += s0 * b0 + s1 * b1 + s2 * b2 + s3 * b3 + s4 * b4 + s5 * b5
            C[dj, di] += (
                Sd[i, 0] * a0 + Sd[i, 1] * a1 + Sd[i, 2] * a2
                + Sd[i, 3] * a3 + Sd[i, 4] * a4 + Sd[i, 5] * a5
                + s0 * c0 + s1 * c1 + s2 * c2
            )  # fmt: skip
            i = parent[i]


@inlined
def dynamics(
    parent: Ints, kind: Ints, dof: Ints, multiplier: Floats, offset: Floats,
    R_PJ: Floats, p_PJ: Floats, axis: Floats, E: Floats, armature: Floats, gravity: Floats,
    q: Floats, v: Floats,
    R_W: Floats, p_W: Floats, S: Floats, Sd: Floats, V: Floats, Ic: Floats, Bc: Floats,
    M: Floats, C: Floats, g: Floats, p: Floats, Ctv: Floats,
) -> None:  # fmt: skip
    """Fill M, C, g, p = M v and C'v of the whole tree, rotor inertia `armature` (n) included."""
    outward(parent, kind, dof, multiplier, offset, R_PJ, p_PJ, axis, E, q, v, R_W, p_W, S, Sd, V, Ic, Bc)
    inward(parent, dof, S, Sd, gravity, Ic, Bc, M, C, g, p, Ctv)
    for i in range(armature.shape[0]):
        M[i, i] += armature[i]
        p[i] += armature[i] * v[i]


@kernel
def jacobian(parent: Ints, dof: Ints, S: Floats, link: int, r: Floats, J: Floats) -> None:
    """Fill J (6,n), world axes: angular velocity, then linear velocity of the point at r (3) of a body.

    `link` is the axis that moves the body; `S` comes from `outward`; r is measured from the base position.
    """
    for k in range(6):
        for d in range(J.shape[1]):
            J[k, d] = 0.0
    i = link
    while i >= 0:
        d = dof[i]
        w0, w1, w2 = S[i, 0], S[i, 1], S[i, 2]
        J[0, d] += w0
        J[1, d] += w1
        J[2, d] += w2
        J[3, d] += S[i, 3] + w1 * r[2] - w2 * r[1]
        J[4, d] += S[i, 4] + w2 * r[0] - w0 * r[2]
        J[5, d] += S[i, 5] + w0 * r[1] - w1 * r[0]
        i = parent[i]


@kernel
def dynamics_packed(ints: Ints, reals: Floats, q: Floats, v: Floats, memory: Floats) -> None:
    """As `dynamics`, for callers in Python: an array argument costs 60 ns there, so they come packed.

    ints (3N): parent, kind, dof. reals (33N+n+3): multiplier, offset, R_PJ, p_PJ, axis, E, armature, gravity.
    memory (see `memory_size`): M, C, g, p, C'v, then the work arrays R_W, p_W, V, S, Sd, Ic, Bc.
    """
    N = ints.shape[0] // 3
    n = reals.shape[0] - 33 * N - 3
    R_PJ, p_PJ = reals[2 * N : 11 * N].reshape((N, 3, 3)), reals[11 * N : 14 * N].reshape((N, 3))
    axis, E = reals[14 * N : 17 * N].reshape((N, 3)), reals[17 * N : 33 * N].reshape((N, 4, 4))
    M, C = memory[: n * n].reshape((n, n)), memory[n * n : 2 * n * n].reshape((n, n))
    vectors = memory[2 * n * n :]
    world = vectors[3 * n :]
    w = N + 1
    work = world[18 * w :]
    dynamics(
        ints[:N], ints[N : 2 * N], ints[2 * N :], reals[:N], reals[N : 2 * N],
        R_PJ, p_PJ, axis, E, reals[33 * N : 33 * N + n], reals[33 * N + n :], q, v,
        world[: 9 * w].reshape((w, 3, 3)), world[9 * w : 12 * w].reshape((w, 3)),
        work[: 6 * N].reshape((N, 6)), work[6 * N : 12 * N].reshape((N, 6)),
        world[12 * w : 18 * w].reshape((w, 6)),
        work[12 * N : 22 * N].reshape((N, 10)), work[22 * N : 34 * N].reshape((N, 12)),
        M, C, vectors[:n], vectors[n : 2 * n], vectors[2 * n : 3 * n],
    )  # fmt: skip


def memory_size(N: int, n: int) -> int:
    """Return the length of `memory` of `dynamics_packed` for N axes and n degrees of freedom."""
    return 2 * n * n + 3 * n + 18 * (N + 1) + 34 * N
