"""Geodesics by Taylor series of the full Cartesian equations of motion, to any number of digits.

The second route for the tests of the exact engine.  It integrates Hamilton's equations of
H = g^{mn}(x) p_m p_n / 2 for three Cartesian coordinates and momenta and the chart's time, in
the chart in question, by Taylor series in proper time (affine parameter).  It uses no radial
equation, no turning point, no orbital plane, no Mino time and no integral but the rest mass, and
imports nothing from the package.  Steps after Jorba & Zou 2005, Exp. Math. 14, 99 (from memory).

Numbers are ``gmpy2.mpfr`` where gmpy2 is installed and ``mpmath.mpf`` otherwise (ten times
slower); results agree to the digits asked for.
"""

from __future__ import annotations

import importlib.util
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path
from typing import Any

import mp_metrics as metrics
import mp_series as series
import mpmath

HERE = Path(__file__).parent


LIGHT_SPEED = {
    "geometric": Fraction(1),
    "SI": Fraction(299_792_458),
    "astronomical": Fraction(299_792_458, 1000),
}


class Arithmetic:
    """Numbers of a given precision: from rationals, square roots, to text."""

    def __init__(self, digits: int, use_gmpy: bool | None = None) -> None:
        self.digits = digits
        self.bits = int(digits * 3.3219281) + 8
        found = importlib.util.find_spec("gmpy2") is not None
        self.fast = found if use_gmpy is None else use_gmpy
        mpmath.mp.prec = self.bits
        if self.fast:
            self.gmpy: Any = importlib.import_module("gmpy2")
            self.gmpy.get_context().precision = self.bits

    def number(self, value: Fraction | float) -> Any:
        q = Fraction(value)
        if self.fast:
            return self.gmpy.mpfr(q.numerator) / q.denominator
        return mpmath.mpf(q.numerator) / q.denominator

    def sqrt(self, x: Any) -> Any:
        return self.gmpy.sqrt(x) if self.fast else mpmath.sqrt(x)

    def text(self, x: Any, digits: int) -> str:
        if self.fast:
            x = mpmath.mpf(self.gmpy.mpq(x).numerator) / int(self.gmpy.mpq(x).denominator)
        return str(mpmath.nstr(x, digits, strip_zeros=False, min_fixed=-3, max_fixed=25))


@dataclass
class Phase:
    """Position, momentum, chart time and parameter of a particle."""

    x: list[Any]
    p: list[Any]
    t: Any
    parameter: Any


def dot(a: Sequence[Any], b: Sequence[Any]) -> Any:
    return a[0] * b[0] + a[1] * b[1] + a[2] * b[2]


class Geodesic:
    """One geodesic, from a start in file units to states at given elapsed clock times.

    Parameters are those of an orbit file; ``digits`` is the working precision and ``order`` the
    degree of the Taylor polynomials.
    """

    def __init__(
        self,
        *,
        position: Sequence[float],
        velocity: Sequence[float],
        chart: str = "areal",
        system: str = "geometric",
        gm: float = 1.0,
        particle: str = "massive",
        clock: str = "coordinate",
        digits: int = 50,
        order: int | None = None,
        use_gmpy: bool | None = None,
    ) -> None:
        self.chart, self.clock, self.massive = chart, clock, particle == "massive"
        self.arithmetic = a = Arithmetic(digits, use_gmpy)
        self.order = order if order is not None else int(0.9 * digits) + 4
        # Truncation below half the working precision's last digits, relative to each vector.
        self.tolerance = a.number(Fraction(1, 10**digits))
        c = LIGHT_SPEED[system]
        self.c, self.length = c, Fraction(gm) / c**2
        x = [a.number(Fraction(v) / self.length) for v in position]
        v = [a.number(Fraction(w) / c) for w in velocity]
        self.rho = a.sqrt(dot(x, x))
        p, self.p_t, self.velocity_used = self._momenta(x, v)
        zero = a.number(0)
        self.start = Phase(x, p, zero, zero)
        self.steps = 0

    def _momenta(self, x: list[Any], v: list[Any]) -> tuple[list[Any], Any, list[Any]]:
        """Lower the index of dx/d(parameter), normalised to rest mass 1 or to E = 1."""
        a = self.arithmetic
        u = 1 / self.rho
        g_tt, g_tn, alpha, beta = metrics.covariant(self.chart, u, a.sqrt(2 * u))
        n = [xi * u for xi in x]
        if not self.massive:
            # g_tt + 2 g_tn k (n.d) + k^2 (alpha d.d + beta (n.d)^2) = 0; larger root.
            mixed, square = g_tn * dot(n, v), alpha * dot(v, v) + beta * dot(n, v) ** 2
            root = a.sqrt(mixed * mixed - square * g_tt)
            # the square vanishes for radial light in Eddington-Finkelstein time
            size = -g_tt / (mixed + root) if mixed > 0 else (root - mixed) / square
            v = [size * vi for vi in v]
        radial = dot(n, v)
        lowered = [g_tn * n[i] + alpha * v[i] + beta * radial * n[i] for i in range(3)]
        lowered_t = g_tt + g_tn * radial
        rate = 1 / a.sqrt(-(lowered_t + dot(lowered, v))) if self.massive else -1 / lowered_t
        return [rate * w for w in lowered], rate * lowered_t, v

    def invariants(self) -> tuple[Any, list[Any]]:
        """``E`` and the angular momentum vector at the start (geometric units)."""
        x, p = self.start.x, self.start.p
        cross = [
            x[(i + 1) % 3] * p[(i + 2) % 3] - x[(i + 2) % 3] * p[(i + 1) % 3] for i in range(3)
        ]
        return -self.p_t, cross

    def expand(self, phase: Phase) -> tuple[list[Any], list[Any], Any]:
        """Taylor series of x, p, T about a phase-space point."""
        a, p_t = self.arithmetic, self.p_t
        tape: list[Any] = []
        x = [series.Variable(v) for v in phase.x]
        p = [series.Variable(v) for v in phase.p]
        for s in (*x, *p):
            s.tape = tape
        square = x[0] * x[0] + x[1] * x[1] + x[2] * x[2]
        root = a.sqrt(dot(phase.x, phase.x))
        u = series.Power(square, 1 / root, -1, 2)
        root_of_two_u = None
        if self.chart == "painleve-gullstrand":
            root_of_two_u = series.Power(square, a.sqrt(2 / root), -1, 4)
        (f_a, f_b, f_c, f_d), slopes = metrics.contravariant(self.chart, u, root_of_two_u)
        s = x[0] * p[0] + x[1] * p[1] + x[2] * p[2]
        pp = p[0] * p[0] + p[1] * p[1] + p[2] * p[2]
        pull = f_b * p_t + f_d * s
        force = (u * (u * u)) * (
            slopes[0] * (p_t * p_t)
            + (slopes[1] * (2 * p_t)) * s
            + slopes[2] * pp
            + slopes[3] * (s * s)
        )
        time = f_a * p_t + f_b * s
        x_dot = [f_c * p[i] + pull * x[i] for i in range(3)]
        p_dot = [force * x[i] / 2 - pull * p[i] for i in range(3)]
        t = series.Variable(phase.t)
        for k in range(self.order):
            for node in tape:
                node.extend()
            for variable, rate in zip((*x, *p, t), (*x_dot, *p_dot, time), strict=True):
                variable.c.append(rate.c[k] / (k + 1))
        return [s.c for s in x], [s.c for s in p], t.c

    def _step(self, x: list[Any], p: list[Any], t: Any) -> Any:
        """Largest parameter step at which the last terms vanish in the tolerance.

        The size of a momentum that passes through zero is what it gains over the step.
        """
        with mpmath.workprec(64):
            best = self._reach(x, mpmath.mpf(0), 0)
            gain = mpmath.mpf(0)
            if best is not None:
                gain = best * sum(abs(self._wide(c[1])) for c in p)
            for vector, extra, lowest in ((p, gain, 0), ([t], mpmath.mpf(0), 1)):
                h = self._reach(vector, extra, lowest)
                best = h if best is None or (h is not None and h < best) else best
            assert best is not None
            man, exp = mpmath.frexp(mpmath.mpf("0.9") * best)
        return self.arithmetic.number(Fraction(float(man)) * Fraction(2) ** int(exp))

    def _reach(self, vector: list[Any], extra: Any, lowest: int) -> Any:
        """Step for one vector of series, against the size of its coefficients ``lowest``."""
        size = extra + sum(abs(self._wide(c[lowest])) for c in vector)
        best = None
        for k in (self.order - 1, self.order):
            last = sum(abs(self._wide(c[k])) for c in vector)
            if last and size:
                ratio = self._wide(self.tolerance) * size / last
                h = ratio ** (mpmath.mpf(1) / (k - lowest))
                best = h if best is None or h < best else best
        return best

    def _wide(self, x: Any) -> Any:
        """A number as an mpf of few bits (float64 would underflow)."""
        if not self.arithmetic.fast:
            return x
        man, exp = x.as_mantissa_exp()
        return mpmath.ldexp(mpmath.mpf(int(man)), int(exp))

    def states(self, elapsed: Sequence[Fraction], max_steps: int = 20000) -> list[dict[str, Any]]:
        """States at elapsed clock times (file units, since the start), in the order given."""
        scaled = [e if self.system_free() else e * self.c / self.length for e in elapsed]
        targets = [self.arithmetic.number(e) for e in scaled]
        found: dict[int, dict[str, Any]] = {}
        for sign in (1, -1):
            ahead = [i for i in range(len(elapsed)) if (elapsed[i] >= 0) == (sign > 0)]
            ahead.sort(key=lambda i: abs(elapsed[i]))
            self._march(sign, ahead, targets, found, max_steps)
        return [found[i] for i in range(len(elapsed))]

    def system_free(self) -> bool:
        return self.length == 1 and self.c == 1

    def _march(
        self, sign: int, ahead: list[int], targets: list[Any], found: dict[int, Any], limit: int
    ) -> None:
        phase = self.start
        for _ in range(limit):
            if not ahead:
                return
            x, p, t = self.expand(phase)
            h = sign * self._step(x, p, t)
            end_t = series.evaluate(t, h)
            while ahead:
                target = targets[ahead[0]]
                reached = phase.parameter + h if self.clock == "proper" else end_t
                if sign * (reached - target) < 0:
                    break
                s = target - phase.parameter if self.clock == "proper" else self._invert(t, target)
                found[ahead.pop(0)] = self._state(x, t, s, phase.parameter)
            phase = Phase(
                [series.evaluate(c, h) for c in x],
                [series.evaluate(c, h) for c in p],
                end_t,
                phase.parameter + h,
            )
            self.steps += 1
        raise ArithmeticError(f"{limit} steps did not reach the times asked for")

    def _invert(self, t: list[Any], target: Any) -> Any:
        """Parameter at which the chart's time is the target: Newton on the polynomial."""
        slope = [k * t[k] for k in range(1, len(t))]
        s = (target - t[0]) / t[1]
        for _ in range(60):
            change = (series.evaluate(t, s) - target) / series.evaluate(slope, s)
            s -= change
            if abs(change) <= abs(s) * self.tolerance:
                break
        return s

    def _state(self, x: list[Any], t: list[Any], s: Any, base: Any) -> dict[str, Any]:
        slope = [k * t[k] for k in range(1, len(t))]
        rate = series.evaluate(slope, s)
        length, c = self.arithmetic.number(self.length), self.arithmetic.number(self.c)
        speeds = [series.evaluate([k * q[k] for k in range(1, len(q))], s) for q in x]
        return {
            "position": [series.evaluate(q, s) * length for q in x],
            "velocity": [w / rate * c for w in speeds],
            "parameter": (base + s) * (length / c if self.massive else length),
            "chart_time": series.evaluate(t, s) * length / c,
        }
