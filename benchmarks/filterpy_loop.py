"""The rival: a strong loop over filterpy, frozen. Do not speed it up or slow it down.

One run at a time, as a careful user of the library would write it: models in scalar `math` (much
faster than NumPy on single numbers), Jacobians by hand, residuals and means that wrap the bearing.
The problem is coordinated-turn: position (2), velocity (2), turn rate; range and bearing radar.
"""

import math

import numpy as np
from filterpy.kalman import ExtendedKalmanFilter, MerweScaledSigmaPoints, UnscentedKalmanFilter

TWO_PI = 2 * math.pi


def move(x, dt):
    px, py, vx, vy, w = x
    a = w * dt
    if abs(a) < 1e-8:
        s, c, sn, cs = dt, 0.5 * a * dt, a, 1.0
    else:
        sn, cs = math.sin(a), math.cos(a)
        s, c = sn / w, (1 - cs) / w
    return np.array(
        [px + s * vx - c * vy, py + c * vx + s * vy, cs * vx - sn * vy, sn * vx + cs * vy, w]
    )


def move_jacobian(x, dt):
    _, _, vx, vy, w = x
    a = w * dt
    if abs(a) < 1e-4:
        s, c, sn, cs = dt * (1 - a * a / 6), 0.5 * a * dt, a, 1.0
        ds, dc = -w * dt**3 / 3, dt * dt / 2
    else:
        sn, cs = math.sin(a), math.cos(a)
        s, c = sn / w, (1 - cs) / w
        ds, dc = (dt * cs - s) / w, (dt * sn - c) / w
    return np.array(
        [
            [1, 0, s, -c, ds * vx - dc * vy],
            [0, 1, c, s, dc * vx + ds * vy],
            [0, 0, cs, -sn, dt * (-sn * vx - cs * vy)],
            [0, 0, sn, cs, dt * (cs * vx - sn * vy)],
            [0, 0, 0, 0, 1.0],
        ]
    )


def see(x):
    return np.array([math.hypot(x[0], x[1]), math.atan2(x[1], x[0])])


def see_jacobian(x):
    px, py = x[0], x[1]
    r2 = px * px + py * py
    r = math.sqrt(r2)
    return np.array([[px / r, py / r, 0, 0, 0], [-py / r2, px / r2, 0, 0, 0]])


def wrapped_residual(a, b):
    y = a - b
    y[1] = (y[1] + math.pi) % TWO_PI - math.pi
    return y


def run_ekf(starts, cov, readings, q, r, dt):
    """Filter every run; starts (M, 5), readings (M, T, 2). Returns final means (M, 5)."""
    out = []
    for x0, zs in zip(starts, readings, strict=True):
        kf = ExtendedKalmanFilter(5, 2)
        kf.x, kf.P, kf.Q, kf.R = x0.copy(), cov.copy(), q, r
        for z in zs:
            kf.F = move_jacobian(kf.x, dt)
            x = move(kf.x, dt)
            kf.predict()
            kf.x = x
            kf.update(z, see_jacobian, see, residual=wrapped_residual)
        out.append(kf.x)
    return np.array(out)


def run_ukf(starts, cov, readings, q, r, dt, alpha=0.5, beta=2.0, kappa=0.0):
    """Filter every run with the scaled set; points are drawn again before the update."""

    def mean_z(points, wm):
        b0 = points[0, 1]
        d = (points[:, 1] - b0 + math.pi) % TWO_PI - math.pi
        return np.array([wm @ points[:, 0], b0 + wm @ d])

    out = []
    for x0, zs in zip(starts, readings, strict=True):
        points = MerweScaledSigmaPoints(5, alpha, beta, kappa)
        kf = UnscentedKalmanFilter(
            5, 2, dt, see, move, points, z_mean_fn=mean_z, residual_z=wrapped_residual
        )
        kf.x, kf.P, kf.Q, kf.R = x0.copy(), cov.copy(), q, r
        for z in zs:
            kf.predict()
            kf.sigmas_f = points.sigma_points(kf.x, kf.P)
            kf.update(z)
        out.append(kf.x)
    return np.array(out)
