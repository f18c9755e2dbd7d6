"""Outlines of buttons as signed distance functions.

Each function takes arrays x (right) and y (down) in button coordinates, where
the button fits the unit circle, and returns a distance that is negative inside.
Distances are exact or slightly too short, which only softens a bevel.
The heart, hexagon and star follow the well-known closed forms of folding the
plane along the figure's axes of symmetry (common practice, written from memory).
"""

import numpy as np


def _smooth_max(a, b, radius):
    """Larger of a and b, with the corner between them rounded."""
    h = np.clip(0.5 + 0.5 * (a - b) / radius, 0, 1)
    return b + (a - b) * h + radius * h * (1 - h)


def round_disc(x, y):
    return np.hypot(x, y) - 0.88


def square(x, y):
    corner = 0.17
    dx = np.abs(x) - (0.74 - corner)
    dy = np.abs(y) - (0.74 - corner)
    outside = np.hypot(np.maximum(dx, 0), np.maximum(dy, 0))
    return outside + np.minimum(np.maximum(dx, dy), 0) - corner


def toggle(x, y):
    """A short rod, thicker in the middle."""
    half_width = 0.36 - 0.13 * np.square(x)
    return np.hypot(np.maximum(np.abs(x) - 0.74, 0), y) - half_width


def flower(x, y):
    """Five petals around a core."""
    sector = 2 * np.pi / 5
    angle = np.arctan2(y, x)
    folded = np.abs((angle + sector / 2) % sector - sector / 2)
    r = np.hypot(x, y)
    petal = np.hypot(r * np.cos(folded) - 0.56, r * np.sin(folded)) - 0.38
    return np.minimum(petal, r - 0.5)


def shield(x, y):
    """Straight top, two curved flanks that meet in a point below."""
    top = -(y + 0.80)
    flank = np.hypot(np.abs(x) + 0.72, y + 0.42) - 1.50
    side = np.abs(x) - 0.76
    return _smooth_max(_smooth_max(top, side, 0.10), flank, 0.08)


def hexagon(x, y):
    kx, ky, kz = -np.sqrt(3) / 2, 0.5, 1 / np.sqrt(3)
    corner = 0.06
    apothem = 0.80 - corner
    x, y = np.abs(x), np.abs(y)
    fold = 2 * np.minimum(kx * x + ky * y, 0)
    x, y = x - fold * kx, y - fold * ky
    x = x - np.clip(x, -kz * apothem, kz * apothem)
    y = y - apothem
    return np.hypot(x, y) * np.sign(y) - corner


def heart(x, y):
    scale = 1.48
    x, y = np.abs(x) / scale, (0.78 - y) / scale
    # Upper lobes where x + y > 1, otherwise the corner at the bottom.
    lobe = np.hypot(x - 0.25, y - 0.75) - np.sqrt(2) / 4
    half = 0.5 * np.maximum(x + y, 0)
    tip = np.sqrt(np.minimum(x**2 + (y - 1) ** 2, (x - half) ** 2 + (y - half) ** 2))
    corner = 0.03
    return (np.where(x + y > 1, lobe, tip * np.sign(x - y)) - corner) * scale


def star(x, y):
    """Five points, blunt enough to pass a buttonhole."""
    corner = 0.11
    outer, inner = 0.97 - corner, 0.50 - corner
    sector = 2 * np.pi / 5
    angle = np.arctan2(x, -y)
    folded = np.abs((angle + sector / 2) % sector - sector / 2)
    r = np.hypot(x, y)
    px, py = r * np.cos(folded), r * np.sin(folded)
    # Distance to the edge from the tip to the notch between two points.
    ex = inner * np.cos(sector / 2) - outer
    ey = inner * np.sin(sector / 2)
    along = np.clip(((px - outer) * ex + py * ey) / (ex**2 + ey**2), 0, 1)
    distance = np.hypot(px - outer - along * ex, py - along * ey)
    side = np.sign((px - outer) * ey - py * ex)
    return distance * side - corner


OUTLINES = {
    "toggle": toggle,
    "flower": flower,
    "square": square,
    "round": round_disc,
    "shield": shield,
    "hexagon": hexagon,
    "heart": heart,
    "star": star,
}

# How each outline is sewn on: possible layouts of thread holes, as centres in
# button coordinates. An empty layout is a button with a shank underneath.
_PAIR = [(-0.19, 0.0), (0.19, 0.0)]
_QUAD = [(-0.17, -0.17), (0.17, -0.17), (-0.17, 0.17), (0.17, 0.17)]
HOLES = {
    "toggle": [[(-0.30, 0.0), (0.30, 0.0)]],
    "flower": [_PAIR, _QUAD],
    "square": [_QUAD, _QUAD, _PAIR],
    "round": [_QUAD, _PAIR, []],
    "shield": [_PAIR, []],
    "hexagon": [_QUAD, _PAIR],
    "heart": [_PAIR, _PAIR, _QUAD],
    "star": [_PAIR, _QUAD],
}
