"""Identify a robot from recordings, without accelerations: pseudo-inertias, rotor inertia and friction.

The momentum ledger is multiplied by smooth overlapping windows and integrated by parts
(`kernels/regressor.py`), which makes every window of every joint one linear equation. Rows of joints that
stand or reverse in a window are left out: they would bias friction. The rest is weighted least squares:
robust (Huber), by each joint's own noise, with a change of friction and offset of its own in every stretch of
time, and held to the CAD model by the divergence of `solver.py`; how strongly, the error on held-out
stretches decides.

Memory stays bounded: rows are built and summed stretch by stretch, once a round.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import eigh
from scipy.ndimage import convolve1d, minimum_filter1d

from monitor.commission.solver import BASIS, COLUMNS, ROWS, curvature, minimise, symmetric
from monitor.errors import SessionError
from monitor.kernels.dynamics import PRISMATIC
from monitor.kernels.ledger import WIDTHS
from monitor.kernels.regressor import TORQUE, weak_rows
from monitor.robot.pseudo_inertia import flaw
from monitor.robot.tree import TreeArrays
from monitor.setup.calibration import Model

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

# Prior sd of what the description says of a joint, wide on purpose; descriptions seldom know rotor inertia or
# friction. Rotor: what the rated torque brings to the rms velocity in that time [s]; viscous and Coulomb
# friction (at the rms velocity) and offset: shares of the rated torque.
_ROTOR_S, _FRICTION_SHARE, _OFFSET_SHARE = 0.02, 0.3, 0.1
# How friction changes from stretch to stretch: shares of viscous and Coulomb, and of rated torque.
_FRICTION_CHANGE, _OFFSET_CHANGE = 0.06, 0.008
# Start and floor of the noise of a row, shares of rated torque.
_FIRST_NOISE, _LEAST_NOISE = 1e-2, 1e-4
# Correlation of neighbouring rows is followed that far [s], and until it falls below this.
_CORRELATION_S, _UNCORRELATED = 1.0, 0.05
_MAD_TO_SD = 1.4826
_RESIDUAL_ROUNDS = 3
_NOISE_SETTLED = 0.05
# A step of time that much longer than the usual one is a gap.
_GAP = 1.5


class Recording(NamedTuple):
    """Fault-free samples in model order and units.

    t : float64[T]
        Robot clock [s], rising.
    q, v : float64[T,nq], float64[T,n]
        Positions and velocities; a floating base first, as in `Robot`.
    tau : float64[T,n]
        Motor torque at the joint; on the base rows what is known to act there (feet), else zero.
    usable : bool[T,n], optional
        Rows without unknown force. For a walker on the ground: the joints of swinging legs only.
    """

    t: Floats
    q: Floats
    v: Floats
    tau: Floats
    usable: Bools | None = None


@dataclass(frozen=True)
class FitOptions:
    """How to fit.

    Parameters
    ----------
    rated_torque : (n,) array
        Scale of the torque of each joint [N m or N]; of a floating base the first six are scales of its
        moments and forces, for example weight times length and weight.
    friction_velocity : (n,) array
        Width of the reversal `v0` in `coulomb tanh(v / v0)` [rad/s or m/s]; given, not fitted.
    window_s, hop_s : float
        Length and distance of the windows [s].
    smoothing_s : float
        Width of the zero-phase smoothing of all signals before anything is computed [s]; 0 for none.
    still : float
        A joint slower than this many friction velocities counts as standing or reversing.
    stretch_s : float
        Friction and offset may change from one such stretch to the next [s].
    weights : tuple of float
        Weights of the CAD model that are tried; 1 / weight is about the squared relative error of CAD.
    folds : int
        Groups of stretches, each left out once.
    huber : float
        Residuals beyond this many standard deviations count less (1.345: 95 % efficient on normal noise).
    rounds : int
        Of robust weighting, at most.
    """

    rated_torque: Floats
    friction_velocity: Floats
    window_s: float = 0.15
    hop_s: float = 0.05
    smoothing_s: float = 0.008
    still: float = 5.0
    stretch_s: float = 20.0
    weights: tuple[float, ...] = (0.1, 1.0, 10.0, 100.0, 1e3, 1e4)
    folds: int = 4
    huber: float = 1.345
    rounds: int = 8


class FittedModel(NamedTuple):
    """A fitted model, and what to think of it.

    model, sd : Model
        The parameters and their posterior standard deviations (zero for what was not fitted).
    prior_share : Model
        Share of each parameter's prior variance that is left: 1 where the data say nothing; nan: not fitted.
    information : float64[K]
        What the data say along K independent directions of the unknowns, over what the prior says, falling.
    rank : int
        Number of directions that the data determine rather than the prior.
    residual_rms, cad_rms : float64[n]
        Torque error of fit and CAD model over windows the fit had not seen [N m or N]; nan without rows.
    rows : int64[n]
        Windows used per joint.
    noise : float64[n]
        Standard deviation of a row, friction changes taken out [N m or N].
    weight : float
        Weight of the CAD model, from `heldout`.
    heldout : dict of float to float
        Squared normalised held-out error by weight, per row.
    """

    model: Model
    sd: Model
    prior_share: Model
    information: Floats
    rank: int
    residual_rms: Floats
    cad_rms: Floats
    rows: Ints
    noise: Floats
    weight: float
    heldout: dict[float, float]


def fit_model(
    arrays: TreeArrays,
    gravity: Floats,
    cad: Model,
    recordings: Sequence[Recording],
    options: FitOptions,
) -> FittedModel:
    """Fit inertias, rotor inertias and friction to recordings.

    Parameters
    ----------
    arrays : TreeArrays
        The robot; its own E is not used.
    gravity : (3,)
        Acceleration of gravity in world axes [m/s²].
    cad : Model
        What the description says. Bodies whose E is not that of a real body stay as they are, and so does
        the bend of friction.
    recordings : sequence of Recording
        Fault-free work; the more postures and speeds, the better.
    options : FitOptions
        How to fit.

    Raises
    ------
    SessionError
        If no window can be used, or only a single stretch of time.
    ValueError
        If arrays do not fit together, hold numbers that are not finite, or time does not rise.
    """
    rated = options.rated_torque
    if rated.shape != cad.armature.shape or not (rated > 0.0).all():
        raise ValueError(f"rated_torque is {rated}; expected {len(cad.armature)} positive numbers")
    for number, recording in enumerate(recordings):
        _check(f"recording {number}", recording, len(cad.armature))
    problem = _Problem(arrays, np.asarray(gravity, dtype=float), cad, recordings, options)
    sums, noise = _weighed(problem)
    folds = _folds(len(sums), options.folds)
    heldout = _heldout(problem, sums, folds)
    weight = min(heldout, key=heldout.__getitem__)
    total = _added(sums)
    x = problem.minimum(total, weight)
    residual_rms, cad_rms, rows = _errors(problem, sums, folds, weight)
    prior = curvature(x, np.zeros_like(total.H), weight, problem.bodies)
    sd, prior_sd = problem.deviations(prior + total.H), problem.deviations(prior)
    with np.errstate(invalid="ignore"):
        share = (sd / prior_sd) ** 2
    information = eigh(total.H, prior, eigvals_only=True)[::-1]
    return FittedModel(
        model=problem.model(x),
        sd=problem.spread(sd, 0.0),
        prior_share=problem.spread(share, np.nan),
        information=information,
        rank=int((information > 1.0).sum()),
        residual_rms=residual_rms,
        cad_rms=cad_rms,
        rows=rows,
        noise=noise,
        weight=weight,
        heldout=heldout,
    )


class _Stretch(NamedTuple):
    """Samples start to stop of one recording, without gap."""

    recording: Recording
    start: int
    stop: int


class _Rows(NamedTuple):
    """Equations `X x = z` of one stretch, x the unknowns; `joint` and `window` say whose they are."""

    X: Floats
    z: Floats
    joint: Ints
    window: Ints


class _Sums(NamedTuple):
    """Weighted sums of squares of the rows: `x'Hx - 2 b'x + c`, over `rows` rows."""

    H: Floats
    b: Floats
    c: float
    rows: int


class _Problem:
    """The unknowns x (K,), scaled so that the prior is of unit size: X of each body, then four per joint.

    What the equations are linear in is theta = theta0 + T x, theta0 the CAD model: ten numbers of each body
    with mass, then rotor, viscous, Coulomb and offset of all joints.
    """

    def __init__(
        self,
        arrays: TreeArrays,
        gravity: Floats,
        cad: Model,
        recordings: Sequence[Recording],
        options: FitOptions,
    ) -> None:
        self.arrays, self.gravity, self.cad, self.options = arrays, gravity, cad, options
        self.n = len(cad.armature)
        self.stretches = list(_stretches(recordings, options))
        if len(self.stretches) < 2:
            raise SessionError(
                "recordings", f"{len(self.stretches)} stretch of time longer than a window", "two or more",
                "Record longer: what is fitted to one stretch is judged by another.",
            )  # fmt: skip
        self.joints = np.unique(arrays.dof[arrays.kind <= PRISMATIC])
        self.massive = np.flatnonzero(cad.E[:, 3, 3] > 0.0)
        self.fitted = np.array([b for b in self.massive if not flaw(cad.E[b])], dtype=np.int64)
        self.bodies = len(self.fitted)
        m = len(self.joints)
        self.friction = slice(10 * self.bodies + m, None)
        self.L = np.linalg.cholesky(cad.E[self.fitted])
        own = np.concatenate([part[self.joints] for part in cad[1:5]])
        self.theta0 = np.concatenate([cad.E[self.massive][:, ROWS, COLUMNS].ravel(), own])
        self.scale = self._joint_scale(recordings)
        self.T = self._transform()
        self.lower = np.full(self.T.shape[1], -np.inf)
        self.lower[10 * self.bodies :][: 3 * m] = -(own / self.scale)[: 3 * m]

    def _joint_scale(self, recordings: Sequence[Recording]) -> Floats:
        """Return the prior sd of rotor, viscous, Coulomb and offset (4*joints,)."""
        squares = sum((recording.v**2).sum(axis=0) for recording in recordings)
        speed = np.sqrt(squares / sum(len(recording.t) for recording in recordings))
        speed = np.maximum(speed, self.options.friction_velocity)[self.joints]
        rated = self.options.rated_torque[self.joints]
        shares = (_ROTOR_S / speed, _FRICTION_SHARE / speed, _FRICTION_SHARE, _OFFSET_SHARE)
        return np.concatenate([share * rated for share in shares])

    def _transform(self) -> Floats:
        """Return T: `E = L (1 + X) L'` for each fitted body, its scale for each number of a joint."""
        first = 10 * len(self.massive)
        T = np.zeros((len(self.theta0), 10 * self.bodies + len(self.scale)))
        for k, (body, L) in enumerate(zip(self.fitted, self.L, strict=True)):
            at = 10 * int(np.searchsorted(self.massive, body))
            T[at : at + 10, 10 * k : 10 * k + 10] = (L @ BASIS @ L.T)[:, ROWS, COLUMNS].T
        T[first:, 10 * self.bodies :] = np.diag(self.scale)
        return T

    def minimum(self, sums: _Sums, weight: float) -> Floats:
        """Return the x that fits these sums best."""
        return minimise(sums.H, sums.b, weight, self.bodies, self.lower)

    def model(self, x: Floats) -> Model:
        """Return the model of the unknowns x."""
        E = self.cad.E.copy()
        grown = self.L @ (np.eye(4) + symmetric(x, self.bodies)) @ self.L.transpose(0, 2, 1)
        E[self.fitted] = 0.5 * (grown + grown.transpose(0, 2, 1))
        own = np.array(self.cad[1:5])
        theta = self.theta0[10 * len(self.massive) :] + self.scale * x[10 * self.bodies :]
        own[:, self.joints] = theta.reshape(4, -1)
        own[:3] = np.maximum(own[:3], 0.0)  # a bound that is met is met to rounding only
        armature, viscous, coulomb, offset = own
        return Model(E, armature, viscous, coulomb, offset, self.cad.bend)

    def deviations(self, precision: Floats) -> Floats:
        """Return the sd of each entry of theta where x has that inverse covariance (K,K)."""
        sd: Floats = np.sqrt(np.einsum("ij,ji->i", self.T, np.linalg.solve(precision, self.T.T)))
        return sd

    def spread(self, theta: Floats, missing: float) -> Model:
        """Return a number per entry of theta in the shape of a model, `missing` for what was not fitted."""
        E = np.full_like(self.cad.E, missing)
        for body in self.fitted:
            at = 10 * int(np.searchsorted(self.massive, body))
            E[body, ROWS, COLUMNS] = E[body, COLUMNS, ROWS] = theta[at : at + 10]
        own = np.full((4, self.n), missing)
        own[:, self.joints] = theta[10 * len(self.massive) :].reshape(4, -1)
        armature, viscous, coulomb, offset = own
        return Model(E, armature, viscous, coulomb, offset, np.full_like(self.cad.bend, missing))

    def change(self, x: Floats) -> Floats:
        """Return the sd of the change of friction and offset between stretches (3*joints,), scaled."""
        m, first = len(self.joints), 10 * len(self.massive)
        friction = (self.theta0[first:] + self.scale * x[10 * self.bodies :])[m : 3 * m]
        offset = _OFFSET_CHANGE * self.options.rated_torque[self.joints]
        sd: Floats = np.concatenate([_FRICTION_CHANGE * friction, offset]) / self.scale[m:]
        return sd

    def rows(self, stretch: _Stretch) -> _Rows:
        """Return the usable equations of a stretch."""
        t, q, v, tau, usable = _smoothed(stretch, self.options)
        for k, width in enumerate(WIDTHS):
            tau -= self.cad.bend[:, k] * np.tanh(v / (width * self.options.friction_velocity))
        first, last = _windows(t, self.options)
        A, own = self._weak(t, q, v, tau, first, last)
        window, joint = np.nonzero(self._kept(v, usable, first, last))
        theta = np.zeros((len(joint), len(self.theta0)))
        theta[:, : A.shape[2]] = A[window, joint]
        place = np.searchsorted(self.joints, joint)
        mine = np.isin(joint, self.joints)
        for k in range(TORQUE):
            theta[mine, A.shape[2] + k * len(self.joints) + place[mine]] = own[window, joint, k][mine]
        return _Rows(theta @ self.T, own[window, joint, TORQUE] - theta @ self.theta0, joint, window)

    def _weak(
        self, t: Floats, q: Floats, v: Floats, tau: Floats, first: Ints, last: Ints
    ) -> tuple[Floats, Floats]:
        """Return the columns A (W,n,10*bodies) of the inertias and own (W,n,5) of each joint, by window."""
        N, n, K, W = len(self.arrays.parent), self.n, 10 * len(self.massive), len(first)
        work = ((N + 1, 3, 3), (N + 1, 3), (N, 6), (N, 6), (N + 1, 6), (N, 10), (N, 12), (n, K), (n, K))
        filled = [np.empty(shape) for shape in (*work, (W, n, K), (W, n, TORQUE + 1))]
        weak_rows(
            *self.arrays, self.massive, self.gravity, self.options.friction_velocity,
            t, q, v, tau, first, last, *filled,
        )  # fmt: skip
        return filled[-2], filled[-1]

    def _kept(self, v: Floats, usable: Bools, first: Ints, last: Ints) -> Bools:
        """Return which rows (W,n) have no unusable sample, and no standstill or reversal of their joint."""
        bad = ~usable
        moving = np.abs(v) > self.options.still * self.options.friction_velocity
        turning = np.zeros_like(bad)
        turning[1:] = v[1:] * v[:-1] < 0.0
        bad[:, self.joints] |= (~moving | turning)[:, self.joints]
        counted = np.vstack([np.zeros((1, self.n), dtype=np.int64), np.cumsum(bad, axis=0)])
        kept: Bools = counted[last + 1] == counted[first]
        return kept


def _check(where: str, recording: Recording, n: int) -> None:
    """Refuse a recording whose arrays do not fit together."""
    t, q, v, tau, usable = recording
    T = len(t)
    wanted = {"v": (v.shape, (T, n)), "tau": (tau.shape, (T, n)), "q": (q.shape, (T, *q.shape[1:2]))}
    if usable is not None:
        wanted["usable"] = (usable.shape, (T, n))
    for name, (shape, expected) in wanted.items():
        if shape != expected:
            raise ValueError(f"{where}: {name} has shape {shape}; expected {expected}")
    for name, array in zip(("t", "q", "v", "tau"), recording[:4], strict=True):
        if not np.isfinite(array).all():
            raise ValueError(f"{where}: {name} holds numbers that are not finite")
    if T < 2 or not (np.diff(t) > 0.0).all():
        raise ValueError(f"{where}: t does not rise")


def _stretches(recordings: Sequence[Recording], options: FitOptions) -> Iterator[_Stretch]:
    """Yield stretches of about equal length, at least one per fold if time allows, none across a gap."""
    total = sum(recording.t[-1] - recording.t[0] for recording in recordings)
    longest = min(options.stretch_s, total / options.folds)
    for recording in recordings:
        steps = np.diff(recording.t)
        gaps = np.flatnonzero(steps > _GAP * np.median(steps)) + 1
        for start, stop in zip([0, *gaps], [*gaps, len(recording.t)], strict=True):
            t = recording.t[start:stop]
            count = max(1, round((t[-1] - t[0]) / longest))
            cuts = start + np.searchsorted(t, np.linspace(t[0], t[-1], count + 1)[1:-1])
            for a, b in zip([start, *cuts], [*cuts, stop], strict=True):
                if recording.t[b - 1] - recording.t[a] > options.window_s + options.smoothing_s:
                    yield _Stretch(recording, int(a), int(b))


def _smoothed(stretch: _Stretch, options: FitOptions) -> tuple[Floats, Floats, Floats, Floats, Bools]:
    """Return t, q, v, tau and usable of a stretch after a zero-phase average; its ends are lost.

    All signals, time as well, pass the same average: linear equations between them stay as true as they were.
    Joint velocities are then drawn towards the rates of the positions, see `_position_share`.
    """
    recording, part = stretch.recording, slice(stretch.start, stretch.stop)
    t, q, v, tau = (np.asarray(signal[part], dtype=float) for signal in recording[:4])
    usable = np.ones(v.shape, dtype=bool) if recording.usable is None else recording.usable[part].astype(bool)
    floating = q.shape[1] != v.shape[1]
    if floating:  # a quaternion and its negative are one attitude, but have no average
        turned = np.where((q[1:, 3:7] * q[:-1, 3:7]).sum(axis=1) < 0.0, -1.0, 1.0)
        q = q.copy()
        q[1:, 3:7] *= np.cumprod(turned)[:, None]
    half = int(0.5 * options.smoothing_s / np.median(np.diff(t)))
    share = _position_share(q[:, floating * 7 :], v[:, floating * 6 :], options.window_s)
    kernel = np.hanning(2 * half + 3)[1:-1]
    kernel /= kernel.sum()
    inside = slice(half, len(t) - half)
    t, q, v, tau = (
        np.ascontiguousarray(convolve1d(signal, kernel, axis=0)[inside]) for signal in (t, q, v, tau)
    )
    if floating:
        q[:, 3:7] /= np.linalg.norm(q[:, 3:7], axis=1, keepdims=True)
    joints = slice(floating * 6, None)
    v[:, joints] += share * (np.gradient(q[:, floating * 7 :], t, axis=0) - v[:, joints])
    return t, q, v, tau, minimum_filter1d(usable, 2 * half + 1, axis=0)[inside]


def _position_share(q: Floats, v: Floats, window_s: float) -> Floats:
    """Return by how much (joints,) rates of the positions serve better than the velocities.

    Noise of velocity bends the fit (it is in the columns too) and is most of what a window has of noise;
    encoders are usually far finer. Judged at the frequency of the window, by the noise in either signal.
    """
    q_noise, v_noise = _white_noise(q) * 2.0 * np.pi / window_s, _white_noise(v)
    power = q_noise**2 + v_noise**2
    share: Floats = np.divide(v_noise**2, power, out=np.zeros_like(power), where=power > 0.0)
    return share


def _white_noise(signal: Floats) -> Floats:
    """Return the sd of white noise on smooth columns, from their third differences (1, 3, 3, 1)."""
    sd: Floats = np.sqrt((np.diff(signal, 3, axis=0) ** 2).mean(axis=0) / 20.0)
    return sd


def _windows(t: Floats, options: FitOptions) -> tuple[Ints, Ints]:
    """Return first and last sample (W,) of each window."""
    starts = np.arange(t[0], t[-1] - options.window_s, options.hop_s)
    first = np.searchsorted(t, starts)
    last = np.searchsorted(t, starts + options.window_s, side="right") - 1
    enough = last > first + 1
    return first[enough], last[enough]


def _residual(
    rows: _Rows, x: Floats, noise: Floats, change: Floats, friction: slice, huber: float
) -> tuple[Floats, Floats]:
    """Return what x leaves of the rows after the most likely change of friction, and their robust weights.

    The change is found robustly too, or a contact would be taken for an offset of its whole stretch.
    """
    left = rows.z - rows.X @ x
    Y, sd = rows.X[:, friction] * change, noise[rows.joint]
    r = left
    for _ in range(_RESIDUAL_ROUNDS):
        weight = 1.0 / np.maximum(np.abs(r) / (huber * sd), 1.0)
        scaled = Y.T * (weight / sd**2)
        r = left - Y @ np.linalg.solve(np.eye(Y.shape[1]) + scaled @ Y, scaled @ left)
    return r, weight


def _summed(rows: _Rows, weight: Floats, change: Floats, friction: slice) -> _Sums:
    """Return the weighted sums of the rows, the change of friction of this stretch marginalised."""
    scaled = rows.X.T * weight
    H, b, c = scaled @ rows.X, scaled @ rows.z, float(weight @ rows.z**2)
    Y, y = H[:, friction] * change, b[friction] * change
    inner = np.eye(Y.shape[1]) + change[:, None] * Y[friction]
    half, known = np.linalg.solve(inner, Y.T), np.linalg.solve(inner, y)
    H = H - Y @ half
    return _Sums(0.5 * (H + H.T), b - Y @ known, c - float(y @ known), len(rows.z))


def _added(sums: Sequence[_Sums]) -> _Sums:
    return _Sums(
        np.sum([each.H for each in sums], axis=0),
        np.sum([each.b for each in sums], axis=0),
        sum(each.c for each in sums),
        sum(each.rows for each in sums),
    )


def _weighed(problem: _Problem) -> tuple[list[_Sums], Floats]:
    """Return the sums of each stretch under robust weights, and the noise (n,) of a row of each joint.

    A round weighs the rows by what the last one left; the first takes a share of the rated torque for noise.
    """
    options = problem.options
    x = np.zeros(problem.T.shape[1])
    noise, correlation = _FIRST_NOISE * options.rated_torque, np.ones(problem.n)
    for number in range(options.rounds):
        precision, change = 1.0 / (noise**2 * correlation), problem.change(x)
        sums, left = [], []
        for stretch in problem.stretches:
            rows = problem.rows(stretch)
            r, weight = _residual(
                rows, x, noise, change, problem.friction, options.huber if number else np.inf
            )
            sums.append(_summed(rows, weight * precision[rows.joint], change, problem.friction))
            left.append(_grid(rows, r, problem.n))
        if not sum(each.rows for each in sums):
            raise SessionError(
                "recordings", "no window in which a joint moves", "joints that move, longer than a window",
                "Record motion of every joint, without pauses, and at rising clock times.",
            )  # fmt: skip
        heldout = _heldout(problem, sums, _folds(len(sums), options.folds))
        x = problem.minimum(_added(sums), min(heldout, key=heldout.__getitem__))
        if number:  # what the CAD model leaves says nothing of the noise
            last = noise
            noise, correlation = _noise(left, options)
            if np.allclose(noise, last, rtol=_NOISE_SETTLED):
                break
    return sums, noise


def _grid(rows: _Rows, r: Floats, n: int) -> Floats:
    """Return the residuals by window and joint, nan where there is no row."""
    grid = np.full((rows.window[-1] + 1 if len(r) else 0, n), np.nan)
    grid[rows.window, rows.joint] = r
    return grid


def _noise(left: Sequence[Floats], options: FitOptions) -> tuple[Floats, Floats]:
    """Return the sd of a row of each joint, and by how much correlation multiplies the variance of a mean."""
    residuals = np.abs(np.concatenate(left))
    seen = np.isfinite(residuals).any(axis=0)
    noise = _LEAST_NOISE * options.rated_torque
    noise[seen] = np.maximum(noise[seen], _MAD_TO_SD * np.nanmedian(residuals[:, seen], axis=0))
    clipped = [np.clip(grid / noise, -options.huber, options.huber) for grid in left]
    return noise, _correlation(clipped, round(_CORRELATION_S / options.hop_s))


def _correlation(grids: Sequence[Floats], lags: int) -> Floats:
    """Return `1 + 2 sum of the autocorrelations` (n,) of residuals, followed until they vanish."""
    n = grids[0].shape[1]
    power = _mean_product(grids, 0)
    total, correlated = np.ones(n), power > 0.0
    for lag in range(1, lags + 1):
        share = np.divide(_mean_product(grids, lag), power, out=np.zeros(n), where=correlated)
        correlated &= share > _UNCORRELATED
        total += 2.0 * np.where(correlated, share, 0.0)
    return total


def _mean_product(grids: Sequence[Floats], lag: int) -> Floats:
    """Return the mean (n,) of the products of residuals that many windows apart; 0 where there are none."""
    products = [grid[: len(grid) - lag] * grid[lag:] for grid in grids if len(grid) > lag]
    total = sum((np.nansum(each, axis=0) for each in products), np.zeros(grids[0].shape[1]))
    count = sum((np.isfinite(each).sum(axis=0) for each in products), np.zeros(len(total), dtype=np.int64))
    mean: Floats = total / np.maximum(count, 1)
    return mean


def _folds(count: int, folds: int) -> list[Ints]:
    """Return groups of neighbouring stretches, by number."""
    return np.array_split(np.arange(count), min(folds, count))


def _left_out(
    problem: _Problem, sums: Sequence[_Sums], folds: Sequence[Ints], weight: float
) -> Iterator[tuple[Ints, Floats]]:
    """Yield each fold of stretches with the unknowns fitted to all others."""
    for fold in folds:
        others = [each for k, each in enumerate(sums) if k not in fold]
        yield fold, problem.minimum(_added(others), weight)


def _heldout(problem: _Problem, sums: Sequence[_Sums], folds: Sequence[Ints]) -> dict[float, float]:
    """Return the squared normalised error per row on stretches left out, by weight of the CAD model.

    It is infinite for a weight that lets such data push a body to the edge of what is none.
    """
    errors = {}
    for weight in problem.options.weights:
        error = 0.0
        try:
            for fold, x in _left_out(problem, sums, folds, weight):
                error += sum(float(x @ sums[k].H @ x - 2.0 * sums[k].b @ x) + sums[k].c for k in fold)
        except ArithmeticError:
            error = np.inf
        errors[weight] = error / sum(each.rows for each in sums)
    return errors


def _errors(
    problem: _Problem, sums: Sequence[_Sums], folds: Sequence[Ints], weight: float
) -> tuple[Floats, Floats, Ints]:
    """Return rms error (n,) of the fit on stretches left out, that of the CAD model, and their rows."""
    squares, rows = np.zeros((2, problem.n)), np.zeros(problem.n, dtype=np.int64)
    for fold, x in _left_out(problem, sums, folds, weight):
        for k in fold:
            each = problem.rows(problem.stretches[k])
            for square, r in zip(squares, (each.z - each.X @ x, each.z), strict=True):
                np.add.at(square, each.joint, r**2)
            np.add.at(rows, each.joint, 1)
    with np.errstate(invalid="ignore"):
        residual, cad = np.sqrt(squares / rows)
    return residual, cad, rows
