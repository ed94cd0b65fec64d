"""Commissioning behind one function: model and band from recordings of fault-free work."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from monitor.commission.band import BandFit, fit_band, without_limits
from monitor.commission.drive import Samples, free_rows
from monitor.commission.fit import FitOptions, FittedModel, Recording, fit_model
from monitor.commission.friction import bent
from monitor.commission.trunk import weighed
from monitor.errors import ConfigError
from monitor.setup.build import Setup, apart, build
from monitor.setup.calibration import Band, Calibration, Model, default_band
from monitor.setup.config import Config

Floats = NDArray[np.float64]

# How much friction changes from day to day: shares of Coulomb and viscous friction, and of rated torque.
_COULOMB_CHANGE, _VISCOUS_CHANGE, _OFFSET_CHANGE = 0.06, 0.06, 0.008
# Times between samples may differ by so many periods before one counts as lost.
_JITTER = 0.5


class Report(NamedTuple):
    """What a calibration rests on: the fit of the model and that of the band and its limits."""

    model: FittedModel
    band: BandFit


def calibrate(
    config: Config,
    sessions_for_model: Sequence[Samples],
    sessions_for_band: Sequence[Samples],
    wanted_s: float | None = None,
) -> tuple[Calibration, Report]:
    """Return model and band of the robot that made fault-free recordings.

    Parameters
    ----------
    config : Config
        The robot; a calibration it names is left aside.
    sessions_for_model, sessions_for_band : sequence of Samples
        Different ones: how far a model is off shows on what it was not fitted to.
    wanted_s : float, optional
        Mean time between false alarms [s of motion]; default: `watch.false_alarm_s`.

    Raises
    ------
    ConfigError
        The torque on the wire leaves a part out that the fit needs, or rotors are coupled.
    SessionError
        The recordings do not move the robot, or do not say which feet carry it.
    """
    plain = build(_uncalibrated(config))
    _check_supported(config)
    fitted = fit_model(
        plain.tree.arrays,
        np.array(config.robot.gravity_vector),
        plain.model,
        [recording(plain, samples) for samples in sessions_for_model],
        FitOptions(plain.params["rated"][0, : plain.sizes.n], plain.params["friction_velocity"][0]),
    )
    setup = _with_model(plain, fitted.model)
    setup = _with_model(plain, bent(setup.with_band(without_limits(setup.band)), sessions_for_model))
    if setup.sizes.base:
        setup = _with_model(plain, weighed(setup.with_band(without_limits(setup.band)), sessions_for_model))
    band = fit_band(setup, sessions_for_band, wanted_s or config.watch.false_alarm_s)
    return Calibration(setup.model, band.band), Report(fitted, band)


def recording(setup: Setup, samples: Samples) -> Recording:
    """Return samples in the order, signs and units of the model, late torques beside their motion.

    Raises
    ------
    SessionError
        As `free_rows`.
    """
    params, sizes = setup.params[0], setup.sizes
    q = samples.q @ params["to_q"].T + params["q_zero"]
    v = samples.qd @ params["to_q"].T
    tau = samples.tau @ params["to_tau"].T
    if sizes.base:
        base_q, base_v = _base(samples.base)
        q, v = np.hstack([base_q, q]), np.hstack([base_v, v])
    last = np.arange(sizes.D - 1, len(q))  # the newest sample in the delay line
    state = last - int(params["state_lag"])
    late = np.column_stack([tau[last - lag, i] for i, lag in enumerate(params["tau_lag"])])
    span_ns = samples.t_ns[last] - samples.t_ns[last - (sizes.D - 1)]
    whole = span_ns < (sizes.D - 1 + _JITTER) * params["period_ns"]
    return Recording(
        t=1e-9 * (samples.t_ns[state] - samples.t_ns[0]),
        q=q[state],
        v=v[state],
        tau=np.hstack([np.zeros((len(late), sizes.base)), late]),
        usable=(free_rows(setup, samples)[state] != 0) & whole[:, None],
    )


def _base(base: Floats) -> tuple[Floats, Floats]:
    """Return pose (T,7) and velocity (T,6; body axes, angular first) of the base."""
    quat = base[:, 3:7] / np.linalg.norm(base[:, 3:7], axis=1, keepdims=True)
    w, x, y, z = quat.T
    R = np.array(
        [
            [1 - 2 * (y * y + z * z), 2 * (x * y - w * z), 2 * (x * z + w * y)],
            [2 * (x * y + w * z), 1 - 2 * (x * x + z * z), 2 * (y * z - w * x)],
            [2 * (x * z - w * y), 2 * (y * z + w * x), 1 - 2 * (x * x + y * y)],
        ]
    )
    linear = np.einsum("ijt,ti->tj", R, base[:, 7:10])
    return np.hstack([base[:, :3], quat]), np.hstack([base[:, 10:13], linear])


def _uncalibrated(config: Config) -> Config:
    return config.model_copy(update={"robot": config.robot.model_copy(update={"calibration": ""})})


def _check_supported(config: Config) -> None:
    if config.robot.coupling:
        raise ConfigError(
            f"{config.path}: robot.coupling",
            "coupled transmissions",
            "motors that drive a joint each: the rotors of coupled ones are not identified",
        )
    for i, joint in enumerate(config.robot.joint):
        if joint.gravity_compensated:
            raise ConfigError(
                f"{config.path}: robot.joint[{i}] {joint.name!r}.gravity_compensated",
                "true",
                "torque with gravity in it: without, masses cannot be identified",
                "Let the robot report the whole torque while it is commissioned.",
            )


def _with_model(plain: Setup, model: Model) -> Setup:
    return build(_uncalibrated(plain.config), Calibration(model, _first_band(plain, model)))


def _first_band(plain: Setup, model: Model) -> Band:
    """Return the band to begin with: wide, friction tracked as far as it usually changes."""
    rated = plain.params["rated"][0, : plain.sizes.n]
    changes = [_COULOMB_CHANGE * model.coulomb, _VISCOUS_CHANGE * model.viscous, _OFFSET_CHANGE * rated]
    band = replace(default_band(rated, model.coulomb, model.viscous), track_sd=np.column_stack(changes))
    return apart(plain.tree, plain.config, band)
