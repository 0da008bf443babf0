"""What the charts over time draw: bars and lines of each order, ready for JSON."""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scheduler.model.impact import displacement
from scheduler.model.ragged import Array
from scheduler.model.state import imbalance
from scheduler.plan import Plan
from scheduler.report.clock_axis import ClockAxis, outline
from scheduler.report.palette import AT_CAP, AUCTION, AUCTION_AT_CAP, CLOSED, FREE
from scheduler.report.ticks import ticks
from scheduler.rivals import evenly_timed, volume_proportional

_BINDS = 1e-4  # as near as a solver comes to a cap
_CAPS_PIXELS = 360.0  # all marks of caps side by side
_BAR = 0.7  # of the bucket's width
_HATCHES = np.array([[FREE, AT_CAP], [AUCTION, AUCTION_AT_CAP]])


def at_cap(plan: Plan) -> NDArray[np.bool_]:
    """(M,) slices that their cap binds; rounding leaves these less than a lot below it."""
    shares, book = plan.figures.flow, plan.book
    result: NDArray[np.bool_] = (plan.figures.shares > 0.0) & (
        shares > (1.0 - _BINDS) * book.arrays.cap - book.lot[book.layout.owner]
    )
    return result


class Lines:
    """The bars and lines of a plan's orders; imbalance and displacement as the market sees them.

    Line points stand at time zero and at the end of each stage, `ClockAxis.path`.
    """

    def __init__(self, plan: Plan) -> None:
        self.plan, self.figures, self.book = plan, plan.figures, plan.book

    def axis(self, order: int) -> ClockAxis:
        return ClockAxis.of(self.book.grids[order])

    def of(self, order: int, axis: ClockAxis) -> dict[str, Any]:
        """Everything drawn of one order over time, by name."""
        return {**self._bars(order, axis), **self._paths(order, axis)}

    def _span(self, order: int) -> slice:
        layout = self.book.layout
        return slice(int(layout.first[order]), int(layout.last[order]) + 1)

    def _bars(self, order: int, axis: ClockAxis) -> dict[str, Any]:
        """One entry a bucket that trades. `pace`: the slice in step with expected volume."""
        span, trading = self._span(order), axis.grid.open
        shares, cap = self.figures.shares[span][trading], self.book.arrays.cap[span][trading]
        volume = axis.grid.volume[trading] * self.book.arrays.market.adv[order]
        scale = float(shares.sum() / volume.sum()) if volume.sum() > 0.0 else 1.0
        top = 1.08 * max(float(shares.max()), scale * float(volume.max()))
        auction = axis.grid.auction[trading]
        binding = self._at_cap[span][trading]
        hatch = _HATCHES[auction.astype(int), binding.astype(int)]
        return {
            "shares": shares.tolist(),
            "volume": volume.tolist(),
            "pace": (scale * volume).tolist(),
            "cap": [value if value <= top else None for value in cap.tolist()],
            "cap_size": max(2.0, min(12.0, _CAPS_PIXELS / len(shares))),
            "has_cap": bool((cap <= top).any()),
            "hatch": hatch.tolist(),
            "has_at_cap": bool((hatch == AT_CAP).any()),
            "has_auction": bool((hatch == AUCTION).any()),
            "has_auction_at_cap": bool((hatch == AUCTION_AT_CAP).any()),
            "share_range": [0.0, top],
            "volume_range": [0.0, top / scale if scale > 0.0 else 1.0],
        }

    def _paths(self, order: int, axis: ClockAxis) -> dict[str, Any]:
        span, book = self._span(order), self.book
        quantity, side = (
            book.arrays.quantity[order],
            float(book.rows["side"].to_numpy(dtype=float)[order]),
        )
        bps = 1e4 / self.figures.notional[order]
        cost = bps * np.cumsum(self.figures.stage_cost[span])
        std = bps * np.sqrt(np.cumsum(self._stage_variance[span]))
        tilt, moved = (side * values[span] for values in self._market_state)
        first_tilt, first_moved = (side * values[order] for values in self._at_zero)
        ceiling = book.arrays.ceiling[span]
        asked = np.flatnonzero(np.isfinite(ceiling))
        upper, lower = (axis.path(0.0, (cost + sign * std).tolist()) for sign in (1.0, -1.0))
        return {
            **{
                name: axis.path(quantity, (quantity - np.cumsum(shares[span])).tolist())
                for name, shares in self._schedules.items()
            },
            "finish_x": axis.right[asked].tolist(),
            "finish": ceiling[asked].tolist(),
            "has_finish": len(asked) > 0,
            "cost": axis.path(0.0, cost.tolist()),
            "std": axis.path(0.0, std.tolist()),
            "band": outline(upper, lower),
            "imbalance": axis.path(first_tilt, tilt.tolist()),
            "moved": axis.path(first_moved, moved.tolist()),
        }

    @cached_property
    def _at_cap(self) -> NDArray[np.bool_]:
        return at_cap(self.plan)

    @cached_property
    def _schedules(self) -> dict[str, Array]:
        return {
            "left": self.figures.shares,
            "left_evenly": evenly_timed(self.book),
            "left_by_volume": volume_proportional(self.book),
        }

    @cached_property
    def _stage_variance(self) -> Array:
        base, own = self.figures.stage_variance
        result: Array = base + own
        return result

    @cached_property
    def _market_state(self) -> tuple[Array, Array]:
        """Z/L and displacement in bps after each stage, in the order's own direction, (M,)."""
        orders, layout = self.book.arrays, self.book.layout
        _, after = imbalance(layout, orders.stages.theta, self.figures.flow, orders.initial)
        market = orders.market.take(layout.owner)
        return after / market.relaxation_volume, 1e4 * displacement(market, after)

    @cached_property
    def _at_zero(self) -> tuple[Array, Array]:
        """The same at time zero, (N,)."""
        orders = self.book.arrays
        moved = 1e4 * displacement(orders.market, orders.initial)
        return orders.initial / orders.market.relaxation_volume, moved


def axis_data(axis: ClockAxis) -> dict[str, Any]:
    """What all orders on one axis share: positions, times in words, ticks and pauses."""
    trading = axis.grid.open
    width = (axis.right - axis.left)[trading]
    path_x = axis.path(0.0, axis.right.tolist())
    tick_x, tick_text = ticks(axis)
    return {
        "centre": (0.5 * (axis.left + axis.right))[trading].tolist(),
        "full_width": width.tolist(),
        "bar_width": (_BAR * width).tolist(),
        "bucket": axis.spans(),
        "path_x": path_x,
        "path_time": axis.path_times(),
        "band_x": outline(path_x, path_x),
        "x_range": [-0.01 * axis.length, 1.01 * axis.length],
        "x_title": f"local time, {axis.grid.timezone}",
        "tick_x": tick_x,
        "tick_text": tick_text,
        "pauses": pauses(axis),
    }


def pauses(axis: ClockAxis) -> list[dict[str, Any]]:
    """Pale strips over closed periods."""
    closed = np.flatnonzero(~axis.grid.open)
    return [_strip(axis.left[stage], axis.right[stage]) for stage in closed]


def _strip(left: float, right: float) -> dict[str, Any]:
    """A pale strip over a closed period."""
    return {
        "type": "rect",
        "xref": "x",
        "yref": "paper",
        "x0": float(left),
        "x1": float(right),
        "y0": 0,
        "y1": 1,
        "line": {"width": 0},
        "fillcolor": CLOSED,
        "layer": "below",
    }
