"""Marker shapes: one for each species, so that a curve is never told by its colour alone."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

COLOURS = 8
"""Classes c0 to c7 of the style sheet hold the palette of Okabe and Ito (2008)."""


def _polygon(corners: Sequence[tuple[float, float]]) -> Callable[[float, float, float], str]:
    def draw(x: float, y: float, r: float) -> str:
        return "M" + "L".join(f"{x + r * dx:.1f} {y + r * dy:.1f}" for dx, dy in corners) + "Z"

    return draw


def _circle(x: float, y: float, r: float) -> str:
    return f"M{x - r:.1f} {y:.1f}a{r:.1f} {r:.1f} 0 1 0 {2 * r:.1f} 0a{r:.1f} {r:.1f} 0 1 0 {-2 * r:.1f} 0Z"


def _star(points: int, inner: float) -> list[tuple[float, float]]:
    corners = []
    for i in range(2 * points):
        angle, length = math.pi * i / points - math.pi / 2, 1.3 if i % 2 == 0 else inner
        corners.append((length * math.cos(angle), length * math.sin(angle)))
    return corners


_PLUS = [(-0.4, -1.1), (0.4, -1.1), (0.4, -0.4), (1.1, -0.4), (1.1, 0.4), (0.4, 0.4), (0.4, 1.1), (-0.4, 1.1),
         (-0.4, 0.4), (-1.1, 0.4), (-1.1, -0.4), (-0.4, -0.4)]  # fmt: skip

SHAPES: tuple[tuple[str, Callable[[float, float, float], str]], ...] = (
    ("circle", _circle),
    ("square", _polygon([(-0.9, -0.9), (0.9, -0.9), (0.9, 0.9), (-0.9, 0.9)])),
    ("triangle", _polygon([(0.0, -1.2), (1.15, 0.85), (-1.15, 0.85)])),
    ("diamond", _polygon([(0.0, -1.3), (1.1, 0.0), (0.0, 1.3), (-1.1, 0.0)])),
    ("triangle downwards", _polygon([(0.0, 1.2), (1.15, -0.85), (-1.15, -0.85)])),
    ("plus", _polygon(_PLUS)),
    ("star", _polygon(_star(5, 0.55))),
    ("cross", _polygon([((a - b) * 0.75, (a + b) * 0.75) for a, b in _PLUS])),
)


def colour_class(position: int) -> str:
    """Class of the position-th species in the style sheet."""
    return f"c{position % COLOURS}"


def shape(position: int) -> tuple[str, Callable[[float, float, float], str]]:
    """Name and path of the position-th species' marker; 64 species pass before a pair of both repeats."""
    return SHAPES[(position + position // COLOURS) % len(SHAPES)]
