"""Which stretch of radius an orbit lives on, what bounds it, and what it is called."""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum

from flint import arb, fmpq

from truefall.reference.exact.field import Exact, is_zero, sign, to_ball
from truefall.reference.exact.flow import Flow

__all__ = ["Border", "MoreBits", "Region", "find_region"]


class MoreBits(ArithmeticError):
    """The working precision does not settle the question; try again with more."""


class Border(Enum):
    """What bounds the stretch of ``u = 1/r`` that the orbit moves on."""

    TURN = "turning point"
    CIRCLE = "unstable circle"
    INFINITY = "infinity"
    HOLE = "the hole"
    EDGE = "past edge of the ingoing chart"


@dataclass(frozen=True)
class Region:
    """Borders towards smaller and larger ``u``, turning points as balls, and the class."""

    lower: Border
    upper: Border
    lower_u: arb | None
    upper_u: arb | None
    name: str


def _outermost_root(flow: Flow) -> arb:
    """The real root farthest from ``u = 1/6``, which is always well separated.

    With ``u = 1/6 + t`` the potential is ``2 L^2 (t^3 + p t + q)``.  The roots sum to zero, so
    the largest in size has the sign of ``-q`` and the others lie on the other side; Newton's
    method comes down to it from ``sqrt|p| + cbrt|q|`` without overshooting.
    """
    m2 = flow.momentum2
    p = flow.mu / m2 - arb(1) / 12
    q = flow.excess / (2 * m2) + flow.mu / (6 * m2) - arb(1) / 108
    sign_q = 1 if q > 0 else -1
    bound = (abs(p).upper().sqrt() + abs(q).upper().root(3)).upper()
    t = (-sign_q * bound).mid()
    pm, qm = p.mid(), q.mid()
    for _ in range(200):
        step = ((t * t * t + pm * t + qm) / (3 * t * t + pm)).mid()
        t = (t - step).mid()
        if abs(step) <= abs(t) * arb((1, 2 - flow.precision)):
            break
    residual = t * t * t + p * t + q
    slope = 3 * t * t + p
    spread = (4 * abs(residual / slope).upper() + abs(t) * arb((1, -flow.precision))).upper()
    ball = t + spread * arb(0, 1)
    slope = 3 * ball * ball + p
    if slope.contains(0):
        raise MoreBits("the outermost root of the radial cubic is not isolated")
    image = t - residual / slope
    if not ball.contains(image):
        raise MoreBits("the outermost root of the radial cubic is not enclosed")
    return arb(1) / 6 + image


def _real_roots(flow: Flow) -> list[arb]:
    """The simple real roots of the radial potential in ascending order.

    One root by Newton's method, the others from the quadratic that is left; how many are real
    is decided exactly by the sign of the discriminant.
    """
    m = flow.motion
    a, b, c, d = 2 * m.momentum_squared, -m.momentum_squared, 2 * m.mu, m.energy_squared - m.mu
    discriminant = (
        18 * a * b * c * d - 4 * b * b * b * d + b * b * c * c - 4 * a * c * c * c
        - 27 * a * a * d * d
    )  # fmt: skip
    lead, middle, linear = 2 * flow.momentum2, -flow.momentum2, arb(2 * flow.mu)
    if is_zero(d):  # parabolic, or light at infinity's edge: u = 0 is a root
        first, rest1, rest0 = arb(0), middle, linear
    else:
        first = _outermost_root(flow)
        rest1 = middle + lead * first
        rest0 = linear + rest1 * first
        if abs(first) > 0.1:  # the other way round nothing cancels in weak fields
            rest0 = -flow.excess / first
            rest1 = (rest0 - linear) / first
    if sign(discriminant) < 0:
        return [first]
    inner = rest1 * rest1 - 4 * lead * rest0
    if not inner > 0:
        raise MoreBits("two turning points are not told apart")
    half = -(rest1 + (inner.sqrt() if rest1 > 0 else -inner.sqrt())) / 2
    roots = [first, half / lead, rest0 / half]
    return sorted(roots, key=lambda r: r.mid())


def _neighbours(flow: Flow, roots: list[arb]) -> tuple[arb | None, arb | None]:
    """The turning points next to the start, below and above."""
    u0 = flow.u0
    lower: arb | None = None
    upper: arb | None = None
    if flow.motion.inward == 0:
        hits = [k for k, r in enumerate(roots) if r.overlaps(u0)]
        if len(hits) != 1:
            raise MoreBits("the start's turning point is not told from the other")
        k = hits[0]
        others = list(roots)
        others[k] = u0
        if flow.slope(u0).contains(0):
            raise MoreBits("the force at the turning point is not resolved")
        if flow.slope(u0) > 0:
            return u0, (others[k + 1] if k + 1 < len(others) else None)
        return (others[k - 1] if k else None), u0
    close = [r for r in roots if r.overlaps(u0)]
    slope = flow.slope(u0)
    if len(close) > 1 or (close and slope.contains(0)):
        raise MoreBits("the start is not told from a turning point")
    for root in roots:
        # the potential is positive at the start: its slope says on which side a root so close lies
        below = root < u0 or (root.overlaps(u0) and slope > 0)
        if below:
            lower = root
        elif upper is None:
            upper = root
    return lower, upper


def _class_name(flow: Flow, lower: Border, upper: Border) -> str:
    if flow.momentum.is_zero():
        return "radial"
    if lower in (Border.CIRCLE,) or upper is Border.CIRCLE:
        return "asymptotic" if flow.mu else "critical"
    if lower is Border.TURN:
        if upper is Border.TURN:
            return "bound"
        return "plunge" if flow.mu else "trapped"
    if lower is Border.EDGE:
        return "plunge"
    return "flyby" if upper is Border.TURN else "capture"


def _with_double_root(flow: Flow) -> tuple[Border, Border, arb | None]:
    """Borders for constants whose cubic has a double root, all decided exactly."""
    m = flow.motion
    circle = m.double_root
    if circle is None:
        raise ValueError("the radial cubic has no double root")
    third: Exact = (fmpq(1) - 4 * circle) / 2
    place = sign(m.inverse_radius - circle)
    stable = sign(circle - fmpq(1, 6)) < 0
    if stable:
        return Border.TURN, Border.HOLE, to_ball(third)
    if place > 0:
        return Border.CIRCLE, Border.HOLE, None
    if sign(third) > 0:
        return Border.TURN, Border.CIRCLE, to_ball(third)
    return Border.INFINITY, Border.CIRCLE, None


def find_region(flow: Flow) -> Region:
    """Borders and class of the orbit.

    Raises
    ------
    MoreBits
        If the working precision does not separate the turning points.
    """
    m = flow.motion
    lower_u: arb | None = None
    upper_u: arb | None = None
    if m.energy_sign <= 0:
        lower, upper = Border.EDGE, Border.HOLE
    elif is_zero(m.momentum_squared):
        upper = Border.HOLE
        bound = sign(m.energy_squared - m.mu) < 0
        lower = Border.TURN if bound else Border.INFINITY
        lower_u = (flow.u0 if m.inward == 0 else -flow.excess / 2) if bound else None
    elif m.double_root is not None:
        lower, upper, lower_u = _with_double_root(flow)
        if m.inward == 0 and lower is Border.TURN:
            lower_u = flow.u0
    else:
        lower_u, upper_u = _neighbours(flow, _real_roots(flow))
        lower, upper = Border.TURN, Border.HOLE if upper_u is None else Border.TURN
        if lower_u is None or not lower_u > 0:
            if lower_u is not None and lower_u.contains(0) and not lower_u.is_zero():
                raise MoreBits("a turning point is not told from infinity")
            lower, lower_u = Border.INFINITY, None
    return Region(lower, upper, lower_u, upper_u, _class_name(flow, lower, upper))
