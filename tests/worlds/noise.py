"""What sensors make of a recording: pure functions, so that one simulation serves many noise levels."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from tests.worlds.arm import Recording

Floats = NDArray[np.float64]


def quantised(values: ArrayLike, step: ArrayLike) -> Floats:
    """Return values rounded to multiples of `step` (broadcast), as an encoder reads them; 0 leaves them."""
    values, step = np.broadcast_arrays(np.asarray(values, dtype=float), np.asarray(step, dtype=float))
    safe = np.where(step > 0.0, step, 1.0)
    return np.where(step > 0.0, np.round(values / safe) * safe, values)


def with_noise(
    recording: Recording,
    seed: int,
    encoder_step: ArrayLike = 0.0,
    velocity_sd: ArrayLike = 0.0,
    torque_sd: ArrayLike = 0.0,
    link_torque_sd: ArrayLike = 0.0,
) -> Recording:
    """Return the recording as sensors would report it; the truth (qdd, tau_ext, friction) stays.

    Parameters
    ----------
    recording : Recording
        Exact arrays.
    seed : int
        Of the noise.
    encoder_step : (n,) array_like
        Step of the positions [rad].
    velocity_sd, torque_sd : (n,) array_like
        Standard deviation of white noise on velocities [rad/s] and torques [Nm].
    link_torque_sd : (n,) array_like
        The same of the torque sensors at the links [Nm].
    """
    rng = np.random.default_rng(seed)
    shape = recording.q.shape
    return replace(
        recording,
        q=quantised(recording.q, encoder_step),
        qd=recording.qd + np.asarray(velocity_sd) * rng.standard_normal(shape),
        tau=recording.tau + np.asarray(torque_sd) * rng.standard_normal(shape),
        tau_link=recording.tau_link + np.asarray(link_torque_sd) * rng.standard_normal(shape),
    )
