"""The whole orbit at one working precision: pivot, legs, periods, and the state at a time."""

from __future__ import annotations

from dataclasses import dataclass

from flint import arb, fmpq

from truefall.reference.exact.flow import Flow
from truefall.reference.exact.leg import BeyondEnd, Leg, LegEnd
from truefall.reference.exact.region import Border, MoreBits, Region, find_region
from truefall.reference.exact.start import Motion

__all__ = ["BeyondEnd", "Instant", "MoreBits", "Solution"]

_BORDER_END = {
    Border.TURN: LegEnd.TURN,
    Border.CIRCLE: LegEnd.CIRCLE,
    Border.INFINITY: LegEnd.INFINITY,
    Border.EDGE: LegEnd.HORIZON,
}


@dataclass(frozen=True)
class Instant:
    """The orbit at one instant, in balls, GM = c = 1.

    ``u = 1/r``, ``w = -dr/dtau``, ``gap = 1 - 2u``, ``rate = d(chart time)/ds``; ``azimuth``,
    ``chart`` and ``tau`` are counted from the start.
    """

    u: arb
    w: arb
    gap: arb
    rate: arb
    azimuth: arb
    chart: arb
    tau: arb


@dataclass(frozen=True)
class Period:
    """Mino time, readings of both clocks over one radial period, and the part before the pivot."""

    s: arb
    clocks: dict[str, arb]
    before: dict[str, arb]


class Solution:
    """Exact solution of one start; use inside ``ctx.workprec(precision)``.

    Raises
    ------
    MoreBits
        If the precision does not separate the turning points.
    """

    def __init__(self, motion: Motion, chart: str, precision: int) -> None:
        self.flow = Flow(motion, chart, precision)
        self.circular = motion.circular
        self.period: Period | None = None
        if self.circular:
            return
        self.region: Region = find_region(self.flow)
        self.flow.limit_width(self.region.lower_u)
        self.legs = self._legs()
        self._place_start()
        if self.region.lower is Border.TURN and self.region.upper is Border.TURN:
            self.period = self._period()

    # -- building ----------------------------------------------------------------------------
    def _legs(self) -> dict[int, Leg]:
        flow, region = self.flow, self.region
        if flow.motion.inward == 0:
            at_lower = region.lower is Border.TURN and region.lower_u is flow.u0
        else:
            at_lower = region.lower is Border.TURN and region.upper is not Border.TURN
        at_upper = region.upper is Border.TURN and not at_lower
        pivot = region.lower_u if at_lower else region.upper_u if at_upper else None
        if pivot is None:
            return {
                delta: self._leg(delta, flow.u0, delta * flow.w0, delta * flow.motion.inward)
                for delta in (1, -1)
            }
        direction = 1 if at_lower else -1
        future = self._leg(1, pivot, arb(0), direction)
        # Static charts run the same both ways; in the ingoing ones the past leg meets the
        # past horizon and its clock runs differently.
        past = future if not flow.ingoing else self._leg(-1, pivot, arb(0), direction)
        return {1: future, -1: past}

    def _leg(self, delta: int, u: arb, v: arb, direction: int) -> Leg:
        region = self.region
        border = region.upper if direction > 0 else region.lower
        if border is Border.HOLE:
            falls_in = self.flow.ingoing and delta > 0
            end = LegEnd.CENTRE if falls_in else LegEnd.HORIZON
        else:
            end = _BORDER_END[border]
        end_u = region.upper_u if direction > 0 else region.lower_u
        return Leg(self.flow, delta=delta, u=u, v=v, direction=direction, end=end, end_u=end_u)

    def _place_start(self) -> None:
        """Mino time and clock readings of the start, counted from the pivot."""
        flow = self.flow
        zero = arb(0)
        self.s_start = zero
        self.start = {"chart": zero, "tau": zero}
        leg = self.legs[1]
        if flow.motion.inward == 0 or not leg.turning:
            return
        delta = flow.motion.inward * leg.direction
        place = self.legs[delta].find_start(delta)
        self.s_start = delta * place.y
        self.start = {name: delta * reading for name, reading in place.clocks.items()}

    def _period(self) -> Period:
        for leg in self.legs.values():
            leg.complete()
        after = self.legs[1].joints[-1]
        before = self.legs[-1].joints[-1]
        half = after.y + after.piece.point(arb(0)).y
        clocks = {n: after.right[n] + before.right[n] for n in after.right}
        return Period(2 * half, clocks, dict(before.right))

    # -- reading -----------------------------------------------------------------------------
    def at(self, clock: str, elapsed: fmpq) -> Instant:
        """The orbit when ``clock`` ("chart" or "tau") shows ``elapsed`` since the start.

        Raises
        ------
        BeyondEnd
            If the orbit ends before; its ``time`` is counted from the start.
        """
        if self.circular:
            return self._on_circle(clock, arb(elapsed))
        if elapsed == 0:
            return self._at_start()
        reading = self.start[clock] + arb(elapsed)
        turns = 0
        if self.period is not None:
            share = (reading + self.period.before[clock]) / self.period.clocks[clock]
            turns = int(share.mid().floor().mid().fmpz())
            reading -= turns * self.period.clocks[clock]
        delta = 1 if reading.mid() >= 0 else -1
        leg = self.legs[delta]
        try:
            place = leg.locate(clock, delta * reading)
        except BeyondEnd as error:
            raise BeyondEnd(delta * error.time - self.start[clock], error.end) from error
        point = place.point
        w = delta * point.v
        regular = leg.regular and not place.at_horizon
        shown = {n: delta * place.clocks[n] - self.start[n] for n in place.clocks}
        s = delta * place.y - self.s_start
        if self.period is not None and turns:
            s += turns * self.period.s
            shown = {n: shown[n] + turns * self.period.clocks[n] for n in shown}
        shown[clock] = arb(elapsed)
        return Instant(
            u=point.u,
            w=w,
            gap=point.gap,
            rate=self.flow.rate("chart", point.u, w, point.gap, regular),
            azimuth=self.flow.momentum * s,
            chart=shown["chart"],
            tau=shown["tau"],
        )

    def _at_start(self) -> Instant:
        flow, zero = self.flow, arb(0)
        u, w = flow.u0, flow.w0
        gap = 1 - 2 * u
        regular = flow.ingoing and flow.motion.inward > 0
        return Instant(u, w, gap, flow.rate("chart", u, w, gap, regular), zero, zero, zero)

    def _on_circle(self, clock: str, elapsed: arb) -> Instant:
        flow = self.flow
        u, w = flow.u0, arb(0)
        gap = 1 - 2 * u
        rates = {n: flow.rate(n, u, w, gap, regular=False) for n in ("chart", "tau")}
        s = elapsed / rates[clock]
        shown = {n: rates[n] * s for n in rates}
        shown[clock] = elapsed
        return Instant(u, w, gap, rates["chart"], flow.momentum * s, shown["chart"], shown["tau"])

    def end(self, clock: str, delta: int) -> tuple[arb, LegEnd] | None:
        """Where the orbit ends towards the future (+1) or past (-1), since the start."""
        if self.circular or self.period is not None:
            return None
        leg = self.legs[delta]
        reading = leg.end_reading(clock)
        if reading is None:
            return None
        return delta * reading - self.start[clock], leg.end
