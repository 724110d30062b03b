"""A run's curves as a very small picture for lists: no axes, one line a species, each over its own points."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from django.utils.html import escape
from django.utils.safestring import SafeString, mark_safe
from numpy.typing import NDArray

from kinetics_db.web.marks import colour_class

Floats = NDArray[np.float64]

WIDTH, HEIGHT, EDGE = 120, 40, 2
MOST_LINES = 8
MOST_CORNERS = 160
"""Of all lines together, so that fifty pictures on a page stay small."""
LONGEST_TITLE = 80


def thumbnail(title: str, lines: Sequence[tuple[int, Floats, Floats]]) -> SafeString:
    """The lines as an <svg> of 120 x 40 with a title; a note instead where there are no values.

    Parameters
    ----------
    title : what is drawn, for those who do not see it
    lines : position (colour), times shape (n,), values shape (n,); one unit of each throughout, NaN is 'no value'
    """
    known = [(position, *_known(times, values)) for position, times, values in lines]
    drawn = [line for line in known if line[1].size]
    if not drawn:
        return _svg(title, f'<path class="axis" d="M{EDGE} {HEIGHT - EDGE}H{WIDTH - EDGE}"/>')
    drawn = sorted(drawn, key=lambda line: -float(np.ptp(line[2])))[:MOST_LINES]
    each = max(MOST_CORNERS // len(drawn), 2)
    first, last = min(float(t.min()) for _, t, _ in drawn), max(float(t.max()) for _, t, _ in drawn)
    low = min(0.0, *(float(v.min()) for _, _, v in drawn))
    high = max(float(v.max()) for _, _, v in drawn)
    across = (WIDTH - 2 * EDGE) / ((last - first) or 1.0)
    up = (HEIGHT - 2 * EDGE) / ((high - low) or 1.0)
    paths = []
    for position, times, values in drawn:
        chosen = _thinned(times.size, each)
        x = (EDGE + (times[chosen] - first) * across).round().astype(int).tolist()
        y = (HEIGHT - EDGE - (values[chosen] - low) * up).round(1).tolist()
        corners = "L".join(f"{a} {b:g}" for a, b in zip(x, y, strict=True))
        # A line of one point has no length; a round end makes it a dot.
        paths.append(f'<path class="{colour_class(position)}" d="M{corners}{"h0" if len(x) == 1 else ""}"/>')
    return _svg(title, "".join(paths))


def _known(times: Floats, values: Floats) -> tuple[Floats, Floats]:
    finite = np.isfinite(times) & np.isfinite(values)
    return times[finite], values[finite]


def _thinned(size: int, most: int) -> NDArray[np.intp] | slice:
    return slice(None) if size <= most else np.linspace(0, size - 1, most).round().astype(np.intp)


def _svg(title: str, inside: str) -> SafeString:
    short = title if len(title) <= LONGEST_TITLE else title[: LONGEST_TITLE - 1] + "…"
    text = escape("".join(c if c.isprintable() else " " for c in short))
    return mark_safe(  # noqa: S308  the title is escaped, the rest are numbers
        f'<svg class="thumb" viewBox="0 0 {WIDTH} {HEIGHT}" width="{WIDTH}" height="{HEIGHT}" role="img">'
        f"<title>{text}</title>{inside}</svg>"
    )
