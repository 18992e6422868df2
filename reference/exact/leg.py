"""A leg: the orbit from a pivot (turning point or start) onward in one direction of time.

Pieces are added as they are needed.  A leg ends at another turning point, winds onto a circle,
reaches a horizon where the chart stops, runs to infinity, or falls to ``r = 0``.
"""

from __future__ import annotations

from bisect import bisect_left
from dataclasses import dataclass, field
from enum import Enum
from typing import TypeAlias

from flint import arb

from truefall.reference.exact.approach import Approach
from truefall.reference.exact.centre import Centre
from truefall.reference.exact.disc import TooSmall
from truefall.reference.exact.fall import Fall
from truefall.reference.exact.field import to_ball
from truefall.reference.exact.flow import CLOCKS, Flow
from truefall.reference.exact.infinity import Infinity
from truefall.reference.exact.segment import NotCovered, Point, Taylor

__all__ = ["BeyondEnd", "Leg", "LegEnd", "Place"]

Piece: TypeAlias = "Taylor | Approach | Centre | Fall"

_MAX_PIECES = 20_000
#: Share of a piece's half-width at which the next one takes over.
_HANDOVER = 0.96875
_HALVINGS = 60
_TRIES = (0.85, 0.6, 0.35, 0.15, 0.0)


class LegEnd(Enum):
    """Where a leg leads."""

    TURN = "turning point"
    CIRCLE = "unstable circle"
    HORIZON = "horizon that the chart's time never reaches"
    INFINITY = "infinity"
    CENTRE = "r = 0"


class BeyondEnd(ArithmeticError):
    """The clock never shows that value on this leg; ``time`` encloses its last reading."""

    def __init__(self, time: arb, end: LegEnd) -> None:
        super().__init__(end.value)
        self.time, self.end = time, end


@dataclass
class _Joint:
    """A piece with the readings that make it continue its predecessor."""

    piece: Piece
    y: arb
    clocks: dict[str, arb]
    last: arb  # parameter at which the next piece takes over
    right: dict[str, arb] = field(default_factory=dict)


@dataclass(frozen=True)
class Place:
    """A point of a leg: state, Mino distance from the pivot, readings of both clocks."""

    point: Point
    y: arb
    clocks: dict[str, arb]
    at_horizon: bool


class Leg:
    """One leg of an orbit.

    Parameters
    ----------
    flow : Flow
    delta : int
        +1 into the future of the pivot, -1 into its past.
    u, v : arb
        The pivot; ``v = du/dy = delta w``, zero at a turning point.
    direction : int
        Sign of ``du/dy`` just after the pivot.
    end : LegEnd
    end_u : arb or None
        Where the leg ends, for a turning point.
    """

    def __init__(
        self,
        flow: Flow,
        *,
        delta: int,
        u: arb,
        v: arb,
        direction: int,
        end: LegEnd,
        end_u: arb | None = None,
    ) -> None:
        self.flow, self.delta, self.direction, self.end = flow, delta, direction, end
        self.turning = bool(v.is_zero())
        # w >= 0 along the leg: the forms that pass the future horizon.
        self.regular = delta * direction > 0
        self.closed = False
        self.fall_step = 0.05
        self.final = self._final_piece(end_u)
        self.joints: list[_Joint] = []
        self.rights: dict[str, list[arb]] = {name: [] for name in CLOCKS}
        zero = {name: arb(0) for name in CLOCKS}
        first = self._taylor(u, v)
        self._push(first, arb(0), arb(0), zero)

    def _taylor(self, u: arb, v: arb, *, at_horizon: bool = False) -> Taylor:
        return Taylor(
            self.flow, u, v, delta=self.delta, regular=self.regular, at_horizon=at_horizon
        )

    def _final_piece(self, end_u: arb | None) -> Piece | None:
        if self.end is LegEnd.TURN:
            if end_u is None:
                raise ValueError("a leg to a turning point needs that point")
            return self._taylor(end_u, arb(0))
        if self.end is LegEnd.CIRCLE:
            return Approach(self.flow, delta=self.delta, side=-self.direction, regular=self.regular)
        if self.end is LegEnd.CENTRE:
            return Centre(self.flow)
        if self.end is LegEnd.INFINITY and self._leaves_infinity_late():
            return Infinity(self.flow)
        if self.end is LegEnd.HORIZON:
            v = self.direction * abs(self.flow.energy)
            return self._taylor(arb(1) / 2, v, at_horizon=True)
        return None

    def _leaves_infinity_late(self) -> bool:
        """Ingoing light leaves infinity at a finite Eddington-Finkelstein time."""
        chart, light = self.flow.chart, not self.flow.mu
        return chart == "eddington-finkelstein" and light and self.regular and self.delta < 0

    # -- growing -----------------------------------------------------------------------------
    def _push(
        self,
        piece: Piece,
        at: arb,
        y: arb,
        clocks: dict[str, arb],
        *,
        last: arb | None = None,
    ) -> None:
        """Append a piece whose parameter ``at`` continues the readings ``y`` and ``clocks``."""
        joint = _Joint(
            piece,
            y - piece.point(at).y,
            {name: clocks[name] - piece.clock(name, at) for name in CLOCKS},
            self._takeover(piece) if last is None else last,
        )
        self.joints.append(joint)
        if isinstance(piece, Approach):
            return
        for name in CLOCKS:
            if isinstance(piece, Taylor) and piece.endless(name):
                continue
            joint.right[name] = joint.clocks[name] + piece.clock(name, joint.last)
            self.rights[name].append(joint.right[name].mid())

    def _takeover(self, piece: Piece) -> arb:
        """Where the next piece takes over: well inside, and before any turning point.

        ``v`` has at most one zero on a piece (:meth:`Flow.limit_width`), so its sign at the far
        end tells whether the stretch up to there is monotone.
        """
        if not isinstance(piece, Taylor):
            return arb(_HANDOVER * piece.h)
        last = _HANDOVER * piece.h
        for _ in range(_HALVINGS):
            if piece.v_at(arb(last)) * self.direction > 0:
                return arb(last)
            last *= 0.6
        raise NotCovered("the piece turns back at once")

    def extend(self) -> bool:
        """Add one piece; False if the leg is complete."""
        if self.closed:
            return False
        if len(self.joints) > _MAX_PIECES:
            raise ArithmeticError("the leg needs more pieces than allowed")
        joint = self.joints[-1]
        piece = joint.piece
        if isinstance(piece, Approach | Centre):
            raise TypeError("nothing follows a final piece")
        x_end = joint.last
        u_join = piece.point(x_end).u.mid()
        x_join = (
            piece.find_u(u_join, guess=x_end) if isinstance(piece, Taylor) else piece.find_u(u_join)
        )
        y = joint.y + piece.point(x_join).y
        clocks = {name: joint.clocks[name] + piece.clock(name, x_join) for name in CLOCKS}
        if self._join_final(u_join, y, clocks):
            return True
        if self.end is LegEnd.CENTRE and u_join > 0.55:
            return self._fall_on(u_join, y, clocks)
        if isinstance(piece, Fall):
            raise TypeError("a fall leads to the centre")
        for share in _TRIES:
            centre = self._ahead(piece, u_join, share)
            if centre is None:
                continue
            v = self.direction * self.flow.radial_potential(centre).sqrt()
            if not v.is_finite() or v.contains(0):
                continue
            try:
                follower = self._taylor(centre, v)
                at = arb(0) if share == 0.0 else follower.find_u(u_join)
                self._push(follower, at, y, clocks)
            except (NotCovered, TooSmall):
                continue
            return True
        raise NotCovered("no further piece could be placed")

    def _fall_on(self, u_join: arb, y: arb, clocks: dict[str, arb]) -> bool:
        """Add a piece below the horizon, centred as far ahead as it still reaches back."""
        z_join = 1 / u_join.sqrt()
        for share in _TRIES:
            centre = (z_join * (1 - share * self.fall_step)).mid()
            try:
                follower = Fall(self.flow, centre)
                self._push(follower, follower.find_u(u_join), y, clocks)
            except (NotCovered, TooSmall):
                continue
            self.fall_step = follower.h
            return True
        raise NotCovered("no further piece could be placed")

    def _ahead(self, piece: Taylor, u_join: arb, share: float) -> arb | None:
        """An exact ``u`` some way beyond the junction, on the same monotone stretch."""
        if share == 0.0:
            return u_join
        x = piece.h * (1 + share)
        v = piece.poly_v(arb(x)).mid()
        if not v * self.direction > 0:
            return None
        u = piece.poly_u(arb(x)).mid()
        if not u > 0 or not (u - u_join) * self.direction > 0:
            return None
        if isinstance(self.final, Taylor):
            limit = self.final.poly_u[0].mid()
            if not (limit - u) * self.direction > 0:
                return None
        return u

    def _join_final(self, u: arb, y: arb, clocks: dict[str, arb]) -> bool:
        final = self.final
        if final is None or isinstance(final, Fall):
            return False
        try:
            if not isinstance(final, Taylor):
                if not final.covers_u(u):
                    return False
                self._push(final, final.find_u(u), y, clocks, last=arb(0))
            else:
                # E = 0 meets the horizon like a turning point
                side = -1 if final.poly_v[0].is_zero() else 0
                at = final.find_u(u, side)
                if not at < 0:
                    return False
                self._push(final, at, y, clocks, last=arb(0))
        except NotCovered:
            return False
        self.closed = True
        return True

    # -- reading -----------------------------------------------------------------------------
    def place(self, index: int, x: arb) -> Place:
        joint = self.joints[index]
        point = joint.piece.point(x)
        clocks = {name: joint.clocks[name] + joint.piece.clock(name, x) for name in CLOCKS}
        at_horizon = isinstance(joint.piece, Taylor) and joint.piece.at_horizon
        return Place(point, joint.y + point.y, clocks, at_horizon)

    def locate(self, name: str, target: arb) -> Place:
        """The point at which a clock, counted from the pivot, shows ``target >= 0``.

        Raises
        ------
        BeyondEnd
            If the leg ends before.
        """
        rights = self.rights[name]
        middle = target.mid()
        for _ in range(_MAX_PIECES):
            if rights and middle <= rights[-1]:
                break
            if len(rights) < len(self.joints):  # the last piece runs on for ever in this clock
                break
            if not self.extend():
                self._refuse_or_edge(name, target)
                break
        index = min(bisect_left(rights, middle), len(self.joints) - 1)
        joint = self.joints[index]
        x = joint.piece.find_clock(name, target - joint.clocks[name])
        return self.place(index, x)

    def _refuse_or_edge(self, name: str, target: arb) -> None:
        last = self.joints[-1].right[name]
        if self.end is not LegEnd.TURN and not target < last:
            raise BeyondEnd(last, self.end)

    def end_reading(self, name: str) -> arb | None:
        """The clock's reading where the leg ends, or None if it never ends in this clock."""
        if self.final is None or self.end in (LegEnd.TURN, LegEnd.CIRCLE):
            return None
        self.complete()
        return self.joints[-1].right.get(name)

    def complete(self) -> None:
        """Grow the leg to its final piece (legs that end at a turning point or a horizon)."""
        for _ in range(_MAX_PIECES):
            if not self.extend():
                return

    def find_start(self, delta: int) -> Place:
        """The place of the orbit's start on a leg that begins at a turning point.

        ``delta`` is the direction of time in which the start follows the pivot; a leg of a
        static chart serves both.
        """
        u0, flow = self.flow.u0, self.flow
        for _ in range(_MAX_PIECES):
            joint = self.joints[-1]
            if isinstance(joint.piece, Approach) or self.closed:
                break
            beyond = (joint.piece.point(joint.last).u - u0) * self.direction
            if beyond > 0:
                break
            self.extend()
        index = len(self.joints) - 1
        piece = self.joints[index].piece
        if isinstance(piece, Centre | Fall):
            return self.place(index, piece.find_u(u0))
        circle = flow.motion.double_root
        if isinstance(piece, Approach):
            if circle is None:
                raise ValueError("no circle belongs to these constants")
            offset = to_ball(flow.motion.inverse_radius - circle)
            return self.place(index, piece.find_u(u0, offset))
        v0 = delta * flow.w0
        side = 0
        if index == 0 and self.turning:
            side = 1
        elif self.end is LegEnd.TURN and self.closed:
            side = -1
        # Near a turning point v pins the place down, elsewhere u does: take the tighter.
        found: list[Place] = []
        for by_u in (True, False):
            try:
                place = self.place(index, piece.find_u(u0, side) if by_u else piece.find_v(v0))
            except NotCovered:
                continue
            if place.point.u.overlaps(u0) and place.point.v.overlaps(v0):
                found.append(place)
        if not found:
            raise NotCovered("the start was not found on its leg")
        return min(found, key=lambda place: place.y.rad())
