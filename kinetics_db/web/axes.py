"""Axes of plots: where the ticks stand and what is written at them."""

from __future__ import annotations

import math
from dataclasses import dataclass

from kinetics_db.engine.shown_numbers import PAGE, plain


@dataclass(frozen=True)
class Axis:
    """A linear axis from ``low`` to ``high`` (values) laid over ``start`` to ``end`` (drawing units)."""

    low: float
    high: float
    start: float
    end: float
    ticks: tuple[float, ...]

    def place(self, value: float) -> float:
        """Where a value stands in the drawing."""
        return self.start + (value - self.low) / (self.high - self.low) * (self.end - self.start)

    def label(self, tick: float) -> str:
        """A tick's number, with as many decimals as the distance of the ticks asks for."""
        step = self.ticks[1] - self.ticks[0] if len(self.ticks) > 1 else abs(tick) or 1.0
        decimals = max(0, -math.floor(math.log10(step) + 1e-9))
        if decimals > 5 or abs(tick) >= 1e6:
            return plain(tick, digits=3)
        text = f"{tick:.{decimals}f}"
        return text.replace("-", PAGE.minus) if float(text) else f"{0:.{decimals}f}"


def axis(low: float, high: float, start: float, end: float, *, about: int = 5) -> Axis:
    """An axis that covers low to high and ends at a tick where that wastes little room."""
    if not high > low:
        spread = abs(low) * 0.1 or 1.0
        low, high = low - spread, high + spread
    step = nice_step((high - low) / about)
    first, last = math.floor(low / step + 1e-9), math.ceil(high / step - 1e-9)
    if low < first * step + 0.6 * step:
        low = first * step
    if high > last * step - 0.6 * step:
        high = last * step
    inside = (i * step for i in range(first, last + 1))
    ticks = tuple(t for t in inside if low - 1e-9 * step <= t <= high + 1e-9 * step)
    return Axis(low, high, start, end, ticks)


def nice_step(rough: float) -> float:
    """The smallest of 1, 2 and 5 times a power of ten that is not below ``rough``."""
    power = 10.0 ** math.floor(math.log10(rough))
    return next(factor * power for factor in (1.0, 2.0, 5.0, 10.0) if factor * power >= rough * (1 - 1e-9))
