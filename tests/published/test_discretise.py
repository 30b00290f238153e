"""Process-noise discretisation and inertial noise units against printed numbers.

C. Van Loan, IEEE TAC 23(3):395-404, 1978; R. Singer, IEEE Trans. AES 6(4):473-483, 1970;
Y. Bar-Shalom, X. R. Li, T. Kirubarajan, Wiley 2001, ch. 6; IEEE Std 952-1997 (formulas from
memory; numbers by matrix exponential and direct integration). Tolerance 1e-7 relative.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from flyoff.numerics import algebra
from flyoff.numerics.discretise import (
    block_diagonal,
    diagonal,
    van_loan,
    white_acceleration,
    white_jerk,
)
from flyoff.options import UNITS, convert, suffix_units

TOLERANCE = 1e-7
ACCELERATION = np.array([[0.228666667, 0.49], [0.49, 1.4]])  # q = 2, T = 0.7
JERK = np.array(  # q = 1, T = 0.7
    [
        [0.0084035, 0.0300125, 0.057166667],
        [0.0300125, 0.114333333, 0.245],
        [0.057166667, 0.245, 0.7],
    ]
)
SINGER = np.array(  # alpha = 0.5 1/s, sigma^2 = 9, T = 1
    [
        [0.34453047, 0.81711227, 0.92123637],
        [0.81711227, 2.09675512, 2.78672619],
        [0.92123637, 2.78672619, 5.68908503],
    ]
)


def test_white_acceleration():
    np.testing.assert_allclose(white_acceleration(2.0, 0.7), ACCELERATION, rtol=TOLERANCE)


def test_white_jerk():
    np.testing.assert_allclose(white_jerk(1.0, 0.7), JERK, rtol=TOLERANCE)


def test_van_loan_of_white_acceleration():
    a = np.array([[0.0, 1.0], [0.0, 0.0]])
    phi, q = van_loan(a, np.array([[0.0], [1.0]]), np.array([[2.0]]), 0.7)
    np.testing.assert_allclose(phi, [[1, 0.7], [0, 1]], atol=1e-14)
    np.testing.assert_allclose(q, ACCELERATION, rtol=TOLERANCE)
    np.testing.assert_allclose(q, white_acceleration(2.0, 0.7), rtol=1e-13)


def test_van_loan_of_white_jerk():
    a = np.diag([1.0, 1.0], 1)
    phi, q = van_loan(a, np.array([[0.0], [0.0], [1.0]]), np.array([[1.0]]), 0.7)
    np.testing.assert_allclose(phi, [[1, 0.7, 0.245], [0, 1, 0.7], [0, 0, 1]], atol=1e-14)
    np.testing.assert_allclose(q, JERK, rtol=TOLERANCE)
    np.testing.assert_allclose(q, white_jerk(1.0, 0.7), rtol=1e-13)


def test_van_loan_of_the_singer_model():
    # white noise of density 2 alpha sigma^2 drives the acceleration (Singer 1970)
    alpha, variance = 0.5, 9.0
    a = np.array([[0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [0.0, 0.0, -alpha]])
    g = np.array([[0.0], [0.0], [1.0]])
    phi, q = van_loan(a, g, np.array([[2 * alpha * variance]]), 1.0)
    np.testing.assert_allclose(q, SINGER, rtol=TOLERANCE)
    np.testing.assert_array_equal(q, q.T)
    assert phi[0, 2] == pytest.approx(0.4261226389, rel=TOLERANCE)
    assert phi[1, 2] == pytest.approx(0.7869386806, rel=TOLERANCE)
    assert phi[2, 2] == pytest.approx(0.6065306597, rel=TOLERANCE)


def test_van_loan_with_two_correlated_noises():
    # an integral by Simpson's rule over the noise-free response: derived
    a = np.array([[0.0, 1.0], [-2.0, -0.3]])
    g = np.array([[0.2, 0.0], [0.5, 1.0]])
    density = np.array([[0.5, 0.1], [0.1, 0.3]])
    dt, panels = 0.4, 200
    values, vectors = np.linalg.eig(a)

    def response(t: float) -> np.ndarray:
        return (vectors * np.exp(values * t) @ np.linalg.inv(vectors)).real

    weights = np.ones(panels + 1)
    weights[1:-1:2], weights[2:-1:2] = 4, 2
    want = np.zeros((2, 2))
    for t, w in zip(np.linspace(0, dt, panels + 1), weights, strict=True):
        m = response(t) @ g
        want += w * dt / panels / 3 * m @ density @ m.T
    phi, q = van_loan(a, g, density, dt)
    np.testing.assert_allclose(phi, response(dt), rtol=1e-12)
    np.testing.assert_allclose(q, want, rtol=1e-10)


def test_block_diagonal_of_blocks():
    rows = block_diagonal(white_acceleration(2.0, 0.7), diagonal(3.0, 4.0))
    want = np.zeros((4, 4))
    want[:2, :2] = ACCELERATION
    want[2, 2], want[3, 3] = 3, 4
    np.testing.assert_allclose(rows, want, rtol=TOLERANCE)


def test_coordinated_turn_functions():
    # 3 deg/s for 1 s: sin(wT)/w and (1 - cos wT)/w
    angle = math.radians(3.0)
    assert float(algebra.sinc(angle)) == pytest.approx(0.999543137, rel=TOLERANCE)
    assert float(algebra.cosc(angle)) == pytest.approx(0.026173958, rel=TOLERANCE)


def test_angle_random_walk():
    # 0.1 deg/sqrt(h) is 2.908882e-5 rad/sqrt(s); at 100 Hz 2.908882e-4 rad/s a sample (IEEE 952)
    density = convert("0.1 deg/sqrt(h)", "rad/s/sqrt(Hz)")
    assert density == pytest.approx(2.908882e-5, rel=TOLERANCE)
    assert math.degrees(density * math.sqrt(convert("1 h", "s"))) == pytest.approx(0.1, rel=1e-12)
    assert density * math.sqrt(convert("100 Hz", "Hz")) == pytest.approx(2.908882e-4, rel=TOLERANCE)


def test_acceleration_noise_density():
    # 100 ug/sqrt(Hz) is 9.80665e-4 m/s^2/sqrt(Hz), or 0.058840 m/s/sqrt(h)
    density = convert("100 ug/sqrt(Hz)", "m/s^2/sqrt(Hz)")
    assert density == pytest.approx(9.80665e-4, rel=TOLERANCE)
    assert density * math.sqrt(convert("1 h", "s")) == pytest.approx(0.058840, abs=5e-7)


def test_rate_bias():
    assert convert("1 deg/h", "rad/s") == pytest.approx(4.848137e-6, rel=TOLERANCE)


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        # derived
        ("1 deg/s/sqrt(Hz)", "deg/sqrt(h)", math.pi / 180),
        ("60 deg/sqrt(h)", "rad/s/sqrt(Hz)", math.pi / 180),
        ("1 g", "m/s^2", 9.80665),
        ("1000 ug", "m/s^2", 9.80665e-3),
        ("36 km/h", "m/s", 10.0),
        ("50 uT", "T", 5e-5),
        ("-1e-3 rad", "deg", -1e-3),
    ],
)
def test_other_units(text, unit, value):
    assert convert(text, unit) == pytest.approx(value, rel=1e-14)


@pytest.mark.parametrize("text", ["3 m", "3 deg/s", "3", "deg", "3 furlong", "", "nan deg"])
def test_wrong_units_are_refused(text):
    with pytest.raises(ValueError, match="angle"):
        convert(text, "deg")


def test_every_key_suffix_names_one_unit():
    suffixes = suffix_units()
    assert sorted(suffixes.values()) == sorted(u for u in UNITS if u != "1")
    assert suffixes["deg_sqrth"] == "deg/sqrt(h)"
