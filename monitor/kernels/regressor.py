"""The momentum ledger as linear equations in what the robot is made of: no accelerations, no derivatives.

`p`, `C'v` and `g` are linear in the pseudo-inertia E of every body. For an axis i on the path to the body,
`p_i = tr(hat(S_i) E hat(V)')`, `(C'v)_i = tr(hat(Sd_i) E hat(V)')`, `g_i = -a'(hat(S_i) E)[:, 3]`: the
momentum route of `dynamics`, read in the frame of the body, where E is constant. The ten numbers of E come in
the order `xx xy xz yy yz zz` of Sigma, `x y z` of h, m; an off-diagonal number stands for both its places.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from monitor.kernels.dynamics import outward
from monitor.kernels.jit import inlined, kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Columns that belong to a joint alone: rotor inertia, viscous, Coulomb, offset; then the torque.
ROTOR, VISCOUS, COULOMB, OFFSET, TORQUE = 0, 1, 2, 3, 4


@inlined
def columns(
    parent: Ints, dof: Ints, body: Ints, gravity: Floats,
    R_W: Floats, p_W: Floats, S: Floats, Sd: Floats, V: Floats, P: Floats, U: Floats,
) -> None:  # fmt: skip
    """Fill P and U (n,10*bodies) with the columns of `p` and of `g - C'v`, after `outward`.

    `body` (bodies) lists the axes that carry the bodies in question. Rotor inertia is not among the columns.
    """
    for d in range(P.shape[0]):
        for c in range(P.shape[1]):
            P[d, c] = 0.0
            U[d, c] = 0.0
    for k in range(body.shape[0]):
        b = body[k]
        c = 10 * k
        p0, p1, p2 = p_W[b, 0], p_W[b, 1], p_W[b, 2]
        r00, r01, r02 = R_W[b, 0, 0], R_W[b, 0, 1], R_W[b, 0, 2]
        r10, r11, r12 = R_W[b, 1, 0], R_W[b, 1, 1], R_W[b, 1, 2]
        r20, r21, r22 = R_W[b, 2, 0], R_W[b, 2, 1], R_W[b, 2, 2]
        a0 = r00 * gravity[0] + r10 * gravity[1] + r20 * gravity[2]
        a1 = r01 * gravity[0] + r11 * gravity[1] + r21 * gravity[2]
        a2 = r02 * gravity[0] + r12 * gravity[1] + r22 * gravity[2]
        # The twist of the body in its own frame.
        w0, w1, w2 = V[b, 0], V[b, 1], V[b, 2]
        u0, u1, u2 = V[b, 3] + w1 * p2 - w2 * p1, V[b, 4] + w2 * p0 - w0 * p2, V[b, 5] + w0 * p1 - w1 * p0
        W0, W1, W2 = (
            r00 * w0 + r10 * w1 + r20 * w2,
            r01 * w0 + r11 * w1 + r21 * w2,
            r02 * w0 + r12 * w1 + r22 * w2,
        )
        L0, L1, L2 = (
            r00 * u0 + r10 * u1 + r20 * u2,
            r01 * u0 + r11 * u1 + r21 * u2,
            r02 * u0 + r12 * u1 + r22 * u2,
        )
        i = b
        while i >= 0:
            d = dof[i]
            w0, w1, w2 = S[i, 0], S[i, 1], S[i, 2]
            u0, u1, u2 = S[i, 3] + w1 * p2 - w2 * p1, S[i, 4] + w2 * p0 - w0 * p2, S[i, 5] + w0 * p1 - w1 * p0
            s0 = r00 * w0 + r10 * w1 + r20 * w2
            s1 = r01 * w0 + r11 * w1 + r21 * w2
            s2 = r02 * w0 + r12 * w1 + r22 * w2
            s3 = r00 * u0 + r10 * u1 + r20 * u2
            s4 = r01 * u0 + r11 * u1 + r21 * u2
            s5 = r02 * u0 + r12 * u1 + r22 * u2
            _spread(d, c, s0, s1, s2, s3, s4, s5, W0, W1, W2, L0, L1, L2, 1.0, P)
            U[d, c + 6] -= a1 * s2 - a2 * s1
            U[d, c + 7] -= a2 * s0 - a0 * s2
            U[d, c + 8] -= a0 * s1 - a1 * s0
            U[d, c + 9] -= a0 * s3 + a1 * s4 + a2 * s5
            w0, w1, w2 = Sd[i, 0], Sd[i, 1], Sd[i, 2]
            u0, u1, u2 = (
                Sd[i, 3] + w1 * p2 - w2 * p1,
                Sd[i, 4] + w2 * p0 - w0 * p2,
                Sd[i, 5] + w0 * p1 - w1 * p0,
            )
            s0 = r00 * w0 + r10 * w1 + r20 * w2
            s1 = r01 * w0 + r11 * w1 + r21 * w2
            s2 = r02 * w0 + r12 * w1 + r22 * w2
            s3 = r00 * u0 + r10 * u1 + r20 * u2
            s4 = r01 * u0 + r11 * u1 + r21 * u2
            s5 = r02 * u0 + r12 * u1 + r22 * u2
            _spread(d, c, s0, s1, s2, s3, s4, s5, W0, W1, W2, L0, L1, L2, -1.0, U)
            i = parent[i]


@inlined
def _spread(
    d: int, c: int, s0: float, s1: float, s2: float, s3: float, s4: float, s5: float,
    W0: float, W1: float, W2: float, L0: float, L1: float, L2: float, sign: float, out: Floats,
) -> None:  # fmt: skip
    """Add the ten coefficients of E in `sign tr(hat(s) E hat(V)')`, V = (W; L), to row d from column c."""
    out[d, c] += sign * (s1 * W1 + s2 * W2)
    out[d, c + 1] -= sign * (s0 * W1 + s1 * W0)
    out[d, c + 2] -= sign * (s0 * W2 + s2 * W0)
    out[d, c + 3] += sign * (s0 * W0 + s2 * W2)
    out[d, c + 4] -= sign * (s1 * W2 + s2 * W1)
    out[d, c + 5] += sign * (s0 * W0 + s1 * W1)
    out[d, c + 6] += sign * (L1 * s2 - L2 * s1 + s4 * W2 - s5 * W1)
    out[d, c + 7] += sign * (L2 * s0 - L0 * s2 + s5 * W0 - s3 * W2)
    out[d, c + 8] += sign * (L0 * s1 - L1 * s0 + s3 * W1 - s4 * W0)
    out[d, c + 9] += sign * (s3 * L0 + s4 * L1 + s5 * L2)


@inlined
def _phi(k: int, t: Floats, first: int, last: int) -> float:
    """Return the window in the middle between samples k and k+1; zero outside of it."""
    if k < first or k >= last:
        return 0.0
    x = (0.5 * (t[k] + t[k + 1]) - t[first]) / (t[last] - t[first])
    return math.sin(math.pi * x) ** 2


@kernel
def weak_rows(
    parent: Ints, kind: Ints, dof: Ints, multiplier: Floats, offset: Floats,
    R_PJ: Floats, p_PJ: Floats, axis: Floats, E: Floats, body: Ints, gravity: Floats, v0: Floats,
    t: Floats, q: Floats, v: Floats, tau: Floats, first: Ints, last: Ints,
    R_W: Floats, p_W: Floats, S: Floats, Sd: Floats, V: Floats, Ic: Floats, Bc: Floats, P: Floats, U: Floats,
    A: Floats, own: Floats,
) -> None:  # fmt: skip
    """Fill the equations of W windows, each from sample first to last (W), rising; divided to torques.

    Every step of the ledger, `p_k+1 - p_k = (u_k + u_k+1) dt / 2`, is multiplied by sin² of the window at its
    middle and summed; the window vanishes at both ends, so the differences move from p to the window.
    t (T), q (T,nq), v, tau (T,n). A (W,n,10*bodies) holds the columns of E, own (W,n,5) those of `ROTOR` to
    `OFFSET` and the torque itself: `A E + own[:4] x = own[TORQUE]`. Friction is `x tanh(v/v0)`, v0 (n).
    """
    W, n = A.shape[0], A.shape[1]
    for k in range(W):
        for d in range(n):
            for c in range(A.shape[2]):
                A[k, d, c] = 0.0
            for c in range(5):
                own[k, d, c] = 0.0
    ended, begun = 0, 0
    for s in range(t.shape[0]):
        while begun < W and first[begun] <= s:
            begun += 1
        while ended < begun and last[ended] < s:
            ended += 1
        if ended == begun:
            continue
        outward(
            parent, kind, dof, multiplier, offset, R_PJ, p_PJ, axis, E, q[s], v[s], R_W, p_W, S, Sd, V, Ic, Bc
        )
        columns(parent, dof, body, gravity, R_W, p_W, S, Sd, V, P, U)
        for k in range(ended, begun):
            before, after = _phi(s - 1, t, first[k], last[k]), _phi(s, t, first[k], last[k])
            y = before - after
            z = 0.0
            if s > first[k]:
                z += 0.5 * before * (t[s] - t[s - 1])
            if s < last[k]:
                z += 0.5 * after * (t[s + 1] - t[s])
            for d in range(n):
                for c in range(A.shape[2]):
                    A[k, d, c] += y * P[d, c] + z * U[d, c]
                own[k, d, 0] += y * v[s, d]
                own[k, d, 1] += z * v[s, d]
                own[k, d, 2] += z * math.tanh(v[s, d] / v0[d])
                own[k, d, 3] += z
                own[k, d, 4] += z * tau[s, d]
    for k in range(W):
        for d in range(n):
            scale = 1.0 / own[k, d, 3]
            for c in range(A.shape[2]):
                A[k, d, c] *= scale
            for c in range(5):
                own[k, d, c] *= scale
