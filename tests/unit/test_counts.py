"""Operation counts against a scalar execution that counts every operation it does."""

from __future__ import annotations

import math

import pytest

from flyoff.estimators.linearised import Linearised
from flyoff.estimators.sigma_point import SigmaPoint
from flyoff.numerics import counts
from flyoff.numerics.counts import Counts
from flyoff.numerics.streams import Streams
from flyoff.problems.coordinated_turn import CoordinatedTurn


class Tally:
    def __init__(self):
        self.add = self.mul = self.div = self.sqrt = 0

    def counts(self):
        return Counts(self.add, self.mul, self.div, self.sqrt)


class Number:
    def __init__(self, tally, value):
        self.tally, self.value = tally, value

    def __sub__(self, other):
        self.tally.add += 1
        return Number(self.tally, self.value - other.value)

    def __add__(self, other):
        self.tally.add += 1
        return Number(self.tally, self.value + other.value)

    def __mul__(self, other):
        self.tally.mul += 1
        return Number(self.tally, self.value * other.value)

    def __truediv__(self, other):
        self.tally.div += 1
        return Number(self.tally, self.value / other.value)

    def root(self):
        self.tally.sqrt += 1
        return Number(self.tally, math.sqrt(self.value))


def matrix(tally, d):
    return [
        [Number(tally, (d + 1.0 if i == j else 0.0) + 0.1 * (i + j)) for j in range(d)]
        for i in range(d)
    ]


@pytest.mark.parametrize("d", [1, 2, 3, 5, 8])
def test_cholesky_and_substitution(d):
    tally = Tally()
    a = matrix(tally, d)
    low = [[None] * d for _ in range(d)]
    for j in range(d):
        s = a[j][j]
        for k in range(j):
            s = s - low[j][k] * low[j][k]
        low[j][j] = s.root()
        for i in range(j + 1, d):
            s = a[i][j]
            for k in range(j):
                s = s - low[i][k] * low[j][k]
            low[i][j] = s / low[j][j]
    assert tally.counts() == counts.cholesky(d)

    tally.__init__()
    for _ in range(3):
        b = [Number(tally, 1.0) for _ in range(d)]
        for j in range(d):
            for k in range(j):
                b[j] = b[j] - low[j][k] * b[k]
            b[j] = b[j] / low[j][j]
    assert tally.counts() == counts.triangular_solve(d, 3)


def test_products():
    tally = Tally()
    a, b = matrix(tally, 4), matrix(tally, 4)
    for i in range(4):
        for j in range(3):
            s = a[i][0] * b[0][j]
            for k in range(1, 4):
                s = s + a[i][k] * b[k][j]
    assert tally.counts() == counts.product(4, 4, 3)
    # d^3/3 to leading order (G. Golub, C. Van Loan, Matrix Computations, section 4.2.5)
    assert counts.cholesky(300).total == pytest.approx(300**3 / 3, rel=0.02)


def test_a_tape_counts_what_it_does():
    casadi = pytest.importorskip("casadi")
    from flyoff.numerics.tape import Tape

    x = casadi.SX.sym("x", 3)
    y = casadi.sin(x[0]) * x[1] + x[2] / x[1] - casadi.sqrt(x[2])
    assert Tape({"x": x}, [y]).counts() == Counts(add=2, mul=1, div=1, sqrt=1, transcendental=1)


def test_estimators_cost_what_an_expert_expects():
    """Sigma points cost 1.3 to 3.3 times the linearised filter (compiled, same problem)."""
    model = CoordinatedTurn().filter_model()
    streams = Streams(1, "test", "x", range(2))
    rate = {"radar": 1.0}
    ekf = Linearised().bind(model, streams).operations(rate).total
    short = Linearised(form="short").bind(model, streams).operations(rate).total
    ukf = SigmaPoint().bind(model, streams).operations(rate).total
    once = SigmaPoint(redraw=False).bind(model, streams).operations(rate).total
    assert 1.3 < ukf / ekf < 3.3
    assert short < ekf
    assert once < ukf
    assert Linearised().bind(model, streams).operations({"radar": 0.5}).total < ekf
