"""The filters of filterpy on a project recording: an outside reference, one run at a time.

Which of its classes are trusted (version 2.0.0), and how they are used here:

* `KalmanFilter`, `ExtendedKalmanFilter`: as they are, Joseph form. A reading without some of its
  components is an update with the rows of H and R that are left.
* `UnscentedKalmanFilter`: points are drawn again from the current mean and covariance before each
  update, because two updates after one prediction would otherwise share stale points and can end
  with an indefinite covariance. Angles are averaged about a reference and differences wrap.
* Not used: `CubatureKalmanFilter`, which does not draw points again after adding Q, so it is not
  the Kalman filter on a linear model (its variance is a tenth off at constant velocity), and takes
  the spread of its points by plain differences whatever residual it is given.

The library is given the traced model at single points: what is compared is the filter, not the
model. Sigma points of the scaled and the symmetric rule are the library's own.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any, Literal, Protocol

import numpy as np

from flyoff.estimators.point_rules.unscented import Scaled, Symmetric
from flyoff.estimators.points import PointRule, PointSet
from flyoff.models.model import Model, Sensor
from flyoff.numerics.spaces import Array, StateSpace
from flyoff.recordings import Recording

__all__ = ["ReferenceStep", "extended", "kalman", "most_readings", "unscented", "why_not"]

Late = Literal["apply", "drop", "replay"]


@dataclass(frozen=True)
class ReferenceStep:
    """The library's answer after all updates of a step.

    Attributes
    ----------
    k : int, 1 to T
    mean : (n, M), NaN in runs in which the library has raised
    cov : (n, n, M)
    sound : (M,), runs that are finite with a positive definite covariance
    """

    k: int
    mean: Array
    cov: Array
    sound: Array


def why_not(model: Model, recording: Recording | None = None, late: Late = "replay") -> str | None:
    """None, or why the library cannot represent the model, or the recording under `late`."""
    for b in model.space.blocks:
        if b.ambient != b.tangent:
            return f"the state holds the rotation `{b.name}`; the library's states are vectors"
    for sensor in model.sensors.values():
        for b in sensor.space.blocks:
            if b.ambient != b.tangent:
                return f"`{sensor.name}` measures a rotation; the library's readings are vectors"
    for r in recording.readings if recording is not None and late == "replay" else ():
        if (r.arrivals > r.steps).any():
            return f"readings of `{r.sensor}` arrive late and are replayed; the library cannot"
    return None


def most_readings(recording: Recording, late: Late = "replay") -> int:
    """The largest number of readings that are used at one step."""
    names = [r.sensor for r in recording.readings]
    return max(map(len, _arrivals(recording, names, late).values()), default=0)


def kalman(model: Model, recording: Recording, late: Late = "replay") -> Iterator[ReferenceStep]:
    """`KalmanFilter` on a linear model, step by step; affine parts are fed as inputs.

    Parameters
    ----------
    recording : of any number of runs M
    late : `apply` uses a late reading on arrival, `drop` leaves it out

    Raises
    ------
    ValueError
        Where `why_not` has a reason, or the model is not linear.
    """
    if not model.linear:
        raise ValueError("KalmanFilter needs a linear model")
    return _walk(lambda x, p: _Plain(_Single(model), x, p), model, recording, late)


def extended(model: Model, recording: Recording, late: Late = "replay") -> Iterator[ReferenceStep]:
    """`ExtendedKalmanFilter` with the traced Jacobians, step by step; arguments as `kalman`.

    Raises
    ------
    ValueError
        Where `why_not` has a reason.
    """
    return _walk(lambda x, p: _Extended(_Single(model), x, p), model, recording, late)


def unscented(
    model: Model,
    recording: Recording,
    rule: PointRule,
    redraw: bool = True,
    late: Late = "replay",
) -> Iterator[ReferenceStep]:
    """`UnscentedKalmanFilter` with the points of a rule, step by step; arguments as `kalman`.

    Parameters
    ----------
    rule : scaled and symmetric rules become the library's own points, any other is carried over
    redraw : whether points are drawn again before each update; False uses the propagated ones

    Raises
    ------
    ValueError
        Where `why_not` has a reason, or for several readings at a step without redrawing: the
        library measures the deviations of the points from the corrected mean.
    """
    if not redraw and most_readings(recording, late) > 1:
        raise ValueError("several readings at one step need points drawn again")
    points = _points(rule, model.space)
    return _walk(
        lambda x, p: _Unscented(_Single(model), x, p, points, redraw), model, recording, late
    )


# -- one run ---------------------------------------------------------------------------------------


class _Run(Protocol):
    """One library filter on one run."""

    kf: Any

    def predict(self, u: Array, dt: float) -> None: ...

    def update(self, sensor: Sensor, z: Array, u: Array, keep: Array) -> None: ...


class _Single:
    """The traced model at one state: plain arrays (n,), (n, n), (m,), (m, n), (m, m)."""

    def __init__(self, model: Model) -> None:
        self.model, self.space = model, model.space

    def step(self, x: Array, u: Array, dt: float) -> Array:
        return self.model.step(x[:, None], u[:, None], dt)[:, 0]

    def jacobian(self, x: Array, u: Array, dt: float) -> Array:
        return self.model.linearise(x[:, None], u[:, None], dt)[1][..., 0]

    def noise(self, x: Array, u: Array, dt: float) -> Array:
        return self.model.added_noise(x[:, None], u[:, None], dt)[..., 0].copy()

    def measure(self, sensor: Sensor, x: Array, u: Array) -> Array:
        return self.model.measure(sensor, x[:, None], u[:, None])[:, 0]

    def measure_jacobian(self, sensor: Sensor, x: Array, u: Array) -> Array:
        return sensor.linearise(x[:, None], u[:, None], self.model.parameters)[1][..., 0]

    def measure_noise(self, sensor: Sensor, x: Array, u: Array, keep: Array) -> Array:
        r = sensor.covariance(x[:, None], u[:, None], self.model.parameters)[..., 0]
        return r[np.ix_(keep, keep)]

    def wrapped(self, x: Array) -> Array:
        """The library adds a correction to an angle without wrapping."""
        return x if self.space.flat else self.space.retract(x, np.zeros_like(x))


class _Part:
    """Residual and mean of some components of a space, angles the shortest way."""

    def __init__(self, space: StateSpace, keep: Array) -> None:
        self.space, self.keep = space, keep

    def _whole(self, part: Array) -> Array:
        out = np.zeros(self.space.n)
        out[self.keep] = part
        return out

    def residual(self, a: Array, b: Array) -> Array:
        return self.space.local(self._whole(b), self._whole(a))[self.keep]

    def mean_about(self, reference: Array) -> Callable[[Array, Array], Array]:
        def mean(points: Array, weights: Array) -> Array:
            turn = weights @ np.array([self.residual(p, reference) for p in points])
            return self.space.retract(self._whole(reference), self._whole(turn))[self.keep]

        return mean


class _Plain:
    """A linear model has neither angles nor rotations, tracing sees to that."""

    def __init__(self, at: _Single, x: Array, cov: Array) -> None:
        from filterpy.kalman import KalmanFilter

        self.at, self.kf = at, KalmanFilter(len(x), 1)
        self.kf.x, self.kf.P = x, cov

    def predict(self, u: Array, dt: float) -> None:
        x, zero = self.kf.x, np.zeros_like(self.kf.x)
        self.kf.predict(
            u=self.at.step(zero, u, dt),
            B=np.eye(len(x)),
            F=self.at.jacobian(x, u, dt),
            Q=self.at.noise(x, u, dt),
        )

    def update(self, sensor: Sensor, z: Array, u: Array, keep: Array) -> None:
        x = self.kf.x
        h = self.at.measure_jacobian(sensor, x, u)[keep]
        z = (z - self.at.measure(sensor, np.zeros_like(x), u))[keep]
        self.kf.update(z, R=self.at.measure_noise(sensor, x, u, keep), H=h)


class _Extended:
    def __init__(self, at: _Single, x: Array, cov: Array) -> None:
        from filterpy.kalman import ExtendedKalmanFilter

        self.at, self.kf = at, ExtendedKalmanFilter(len(x), 1)
        self.kf.x, self.kf.P = x, cov

    def predict(self, u: Array, dt: float) -> None:
        x = self.kf.x
        self.kf.F, self.kf.Q = self.at.jacobian(x, u, dt), self.at.noise(x, u, dt)
        self.kf.predict()
        # its own mean is F x: the user puts the nonlinear one
        self.kf.x = self.at.step(x, u, dt)

    def update(self, sensor: Sensor, z: Array, u: Array, keep: Array) -> None:
        self.kf.update(
            z[keep],
            lambda x: self.at.measure_jacobian(sensor, x, u)[keep],
            lambda x: self.at.measure(sensor, x, u)[keep],
            R=self.at.measure_noise(sensor, self.kf.x, u, keep),
            residual=_Part(sensor.space, keep).residual,
        )
        self.kf.x = self.at.wrapped(self.kf.x)


class _Unscented:
    def __init__(self, at: _Single, x: Array, cov: Array, points: Any, redraw: bool) -> None:
        from filterpy.kalman import UnscentedKalmanFilter

        self.at, self.redraw, self.points = at, redraw, points
        space = at.space
        self.state = None if space.flat else _Part(space, np.ones(space.n, bool))
        self.kf = UnscentedKalmanFilter(
            len(x),
            1,
            1.0,
            None,
            None,
            points,
            residual_x=self.state and self.state.residual,
        )
        self.kf.x, self.kf.P = x, cov

    def predict(self, u: Array, dt: float) -> None:
        x = self.kf.x
        self.kf.Q = self.at.noise(x, u, dt)
        if self.state is not None:
            self.kf.x_mean = self.state.mean_about(self.at.step(x, u, dt))

        def move(s: Array, dt: float) -> Array:
            return self.at.step(s, u, dt)

        if not self.redraw:
            self.kf.compute_process_sigmas(dt, move)
            moved = self.kf.sigmas_f.copy()
        self.kf.predict(dt, fx=move)
        if not self.redraw:
            self.kf.sigmas_f = moved

    def update(self, sensor: Sensor, z: Array, u: Array, keep: Array) -> None:
        kf = self.kf
        if self.redraw:
            kf.sigmas_f = self.points.sigma_points(kf.x, kf.P)
        kf.z_mean, kf.residual_z = None, np.subtract
        if not sensor.space.flat:
            part = _Part(sensor.space, keep)
            kf.z_mean = part.mean_about(self.at.measure(sensor, kf.x, u)[keep])
            kf.residual_z = part.residual
        kf.update(
            z[keep],
            R=self.at.measure_noise(sensor, kf.x, u, keep),
            hx=lambda s: self.at.measure(sensor, s, u)[keep],
        )
        kf.x = self.at.wrapped(kf.x)


# -- points ----------------------------------------------------------------------------------------


class _Carried:
    """A `PointSet` in the form the library asks for: rows are points."""

    def __init__(self, unit: PointSet, space: StateSpace) -> None:
        self.unit, self.space = unit, space
        self.Wm, self.Wc = unit.mean_weights, unit.cov_weights

    def num_sigmas(self) -> int:
        return len(self.Wm)

    def sigma_points(self, x: Array, cov: Array) -> Array:
        deviations = np.linalg.cholesky(cov) @ self.unit.points
        return self.space.retract(x[:, None], deviations).T


def _points(rule: PointRule, space: StateSpace) -> Any:
    from filterpy.kalman import JulierSigmaPoints, MerweScaledSigmaPoints

    def subtract(x: Array, y: Array) -> Array:
        return space.retract(x, -y)

    if isinstance(rule, Scaled):
        return MerweScaledSigmaPoints(space.d, rule.alpha, rule.beta, rule.kappa, subtract=subtract)
    if isinstance(rule, Symmetric):
        kappa = 3.0 - space.d if rule.kappa == "gaussian" else rule.kappa
        return JulierSigmaPoints(space.d, kappa, subtract=subtract)
    return _Carried(rule.points(space.d), space)


# -- all runs --------------------------------------------------------------------------------------


def _arrivals(
    recording: Recording, order: list[str], late: Late
) -> dict[int, list[tuple[int, int, Array]]]:
    """Readings by arrival step: (stamp, index of the sensor, z (m, M)), sorted."""
    table: dict[int, list[tuple[int, int, Array]]] = {}
    for r in recording.readings:
        for stamp, arrival, z in zip(r.steps, r.arrivals, r.values, strict=True):
            if arrival == stamp or late != "drop":
                entry = (int(stamp), order.index(r.sensor), z)
                table.setdefault(int(arrival), []).append(entry)
    for due in table.values():
        due.sort(key=lambda entry: entry[:2])
    return table


def _walk(
    make: Callable[[Array, Array], _Run], model: Model, recording: Recording, late: Late
) -> Iterator[ReferenceStep]:
    why = why_not(model, recording, late)
    if why is not None:
        raise ValueError(why)
    return _steps(make, model, recording, late)


def _steps(
    make: Callable[[Array, Array], _Run], model: Model, recording: Recording, late: Late
) -> Iterator[ReferenceStep]:
    names = list(model.sensors)
    arrivals = _arrivals(recording, names, late)
    mean, cov = (np.array(a) for a in recording.prior.moments())
    n, count = mean.shape
    cov = np.array(np.broadcast_to(cov, (n, n, count)))
    runs = [make(mean[:, i].copy(), cov[..., i].copy()) for i in range(count)]
    raised = np.zeros(count, bool)
    for k in range(1, recording.steps + 1):
        mean, cov = np.full((n, count), np.nan), np.full((n, n, count), np.nan)
        sound = np.zeros(count, bool)
        for i, run in enumerate(runs):
            if raised[i]:
                continue
            u = recording.inputs[k - 1][:, i]
            try:
                run.predict(u, recording.dt)
                for _, index, z in arrivals.get(k, []):
                    keep = ~np.isnan(z[:, i])
                    if keep.any():
                        run.update(model.sensors[names[index]], z[:, i], u, keep)
            except (np.linalg.LinAlgError, ValueError) as failure:
                # the library meets a covariance without a factor by raising
                expected = isinstance(failure, np.linalg.LinAlgError)
                if not expected and "infs or NaNs" not in str(failure):
                    raise
                raised[i] = True
                continue
            mean[:, i], cov[..., i] = run.kf.x, run.kf.P
            sound[i] = _sound(run.kf.x, run.kf.P)
        yield ReferenceStep(k, mean, cov, sound)


def _sound(mean: Array, cov: Array) -> bool:
    if not (np.isfinite(mean).all() and np.isfinite(cov).all()):
        return False
    try:
        np.linalg.cholesky(cov)
    except np.linalg.LinAlgError:
        return False
    return True
