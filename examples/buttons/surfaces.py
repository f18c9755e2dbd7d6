"""Surfaces of buttons: what they are made of.

Each surface function takes button coordinates (u, v), the depth below the outline
(0 at the edge, growing inwards) and a random generator, and returns a `Material`.
All colours are display values between 0 and 1.
"""

import dataclasses

import numpy as np

_TILE = 256


@dataclasses.dataclass
class Material:
    colour: np.ndarray  # [H, W, 3]
    bump: np.ndarray  # [H, W], height in units of the button's radius
    gloss: float  # strength of the highlight
    sharpness: float  # exponent of the highlight
    mirror: float = 0.0  # how much the colour itself follows the slope (metal)


def _spectral_tile(seed, slope):
    """Periodic noise with amplitude falling as frequency**-slope, in [0, 1]."""
    rng = np.random.default_rng(seed)
    fy = np.fft.fftfreq(_TILE)[:, None]
    fx = np.fft.rfftfreq(_TILE)[None, :]
    frequency = np.hypot(fx, fy)
    frequency[0, 0] = 1
    spectrum = np.fft.rfft2(rng.standard_normal((_TILE, _TILE))) * frequency**-slope
    spectrum[0, 0] = 0
    tile = np.fft.irfft2(spectrum, s=(_TILE, _TILE))
    return np.clip(0.5 + 0.2 * tile / tile.std(), 0, 1).astype(np.float32)


def _chip_tile(seed, cells=12):
    """Periodic cells around jittered points: a number a cell, and edge distance."""
    rng = np.random.default_rng(seed)
    jitter = rng.uniform(0.1, 0.9, (cells, cells, 2))
    value = rng.uniform(0, 1, (cells, cells)).astype(np.float32)
    axis = (np.arange(_TILE) + 0.5) / _TILE * cells
    y, x = np.meshgrid(axis, axis, indexing="ij")
    cy, cx = np.floor(y).astype(int), np.floor(x).astype(int)
    distances, owners = [], []
    for dy in (-1, 0, 1):
        for dx in (-1, 0, 1):
            iy, ix = (cy + dy) % cells, (cx + dx) % cells
            py = cy + dy + jitter[iy, ix, 0]
            px = cx + dx + jitter[iy, ix, 1]
            distances.append(np.hypot(y - py, x - px))
            owners.append(value[iy, ix])
    distances, owners = np.stack(distances), np.stack(owners)
    order = np.argsort(distances, axis=0)
    nearest = np.take_along_axis(owners, order[:1], 0)[0]
    two = np.take_along_axis(distances, order[:2], 0)
    return nearest, (two[1] - two[0]).astype(np.float32)


# Tiles are shared by all pictures; each picture reads them at its own offset.
_CLOUDS = [_spectral_tile(seed, 1.6) for seed in range(3)]
_GRAINS = [_spectral_tile(100 + seed, 0.8) for seed in range(3)]
_CHIPS = [_chip_tile(200 + seed) for seed in range(3)]


def _read(tile, x, y):
    """Bilinear, periodic look-up; one unit of x or y is one whole tile."""
    x, y = x * _TILE, y * _TILE
    ix, iy = np.floor(x).astype(np.int64), np.floor(y).astype(np.int64)
    fx, fy = (x - ix).astype(np.float32), (y - iy).astype(np.float32)
    x0, x1 = ix % _TILE, (ix + 1) % _TILE
    y0, y1 = iy % _TILE * _TILE, (iy + 1) % _TILE * _TILE
    flat = tile.ravel()
    top = flat[y0 + x0] * (1 - fx) + flat[y0 + x1] * fx
    bottom = flat[y1 + x0] * (1 - fx) + flat[y1 + x1] * fx
    return top * (1 - fy) + bottom * fy


def cloud(rng, x, y):
    """Soft noise in [0, 1]: large shapes with some detail."""
    ox, oy = rng.uniform(0, 1, 2)
    return _read(_CLOUDS[rng.integers(len(_CLOUDS))], x + ox, y + oy)


def grain(rng, x, y):
    """Rough noise in [0, 1]: much fine detail."""
    ox, oy = rng.uniform(0, 1, 2)
    return _read(_GRAINS[rng.integers(len(_GRAINS))], x + ox, y + oy)


def smooth_step(low, high, x):
    t = np.clip((x - low) / (high - low), 0, 1)
    return t * t * (3 - 2 * t)


def ramp(t, stops):
    """Colour at t in [0, 1] along evenly spaced colours given as 0..255."""
    stops = np.asarray(stops, np.float32) / 255
    at = np.linspace(0, 1, len(stops))
    return np.stack([np.interp(t, at, stops[:, c]) for c in range(3)], -1)


def _turn(rng, u, v, spread):
    """Coordinates turned by a random angle within +-spread radians."""
    a = rng.uniform(-spread, spread)
    return np.cos(a) * u + np.sin(a) * v, np.cos(a) * v - np.sin(a) * u


def horn(u, v, depth, rng):
    x, y = _turn(rng, u, v, 0.35)
    warp = cloud(rng, x * 0.18, y * 0.18) - 0.5
    streak = cloud(rng, x * 0.05, y * 0.55 + 0.30 * warp)
    fine = grain(rng, x * 0.04, y * 0.8 + 0.2 * warp)
    fade = rng.uniform(-0.35, 0.35) * x
    t = 0.5 + 1.5 * (streak - 0.5) + 0.5 * (fine - 0.5) + fade + rng.uniform(-0.12, 0.15)
    stops = [
        [(34, 23, 18), (86, 58, 38), (158, 116, 74), (216, 188, 142), (236, 222, 190)],
        [(30, 28, 27), (72, 64, 58), (132, 118, 102), (190, 178, 156), (228, 220, 202)],
        [(48, 24, 12), (110, 62, 28), (176, 120, 64), (214, 172, 110), (238, 214, 168)],
    ][rng.integers(3)]
    return Material(ramp(np.clip(t, 0, 1), stops), 0.010 * streak, 0.50, 40)


def pearl(u, v, depth, rng):
    x, y = _turn(rng, u, v, np.pi)
    warp = cloud(rng, x * 0.22, y * 0.22)
    sheet = cloud(rng, x * 0.10 + 0.2 * warp, y * 0.30)
    phase = 1.6 * warp + 1.3 * sheet + 0.35 * x + rng.uniform(0, 1)
    base = [(186, 184, 174), (172, 176, 182), (190, 172, 164), (138, 145, 156)]
    colour = np.asarray(base[rng.integers(len(base))], np.float32) / 255
    wave = np.cos(2 * np.pi * (phase[..., None] + np.array([0.0, 0.36, 0.62])))
    ripple = np.sin(2 * np.pi * (2.1 * phase + 1.4 * sheet))
    colour = colour + rng.uniform(0.07, 0.12) * wave + 0.045 * ripple[..., None]
    return Material(colour, 0.012 * warp, 0.62, 22, 0.22)


def walnut(u, v, depth, rng):
    x, y = _turn(rng, u, v, 0.25)
    oy, ox = rng.uniform(-1.6, 1.6), rng.uniform(-2.5, 2.5)
    warp = cloud(rng, x * 0.12, y * 0.20) - 0.5
    ring = np.hypot((x - ox) * 0.28, y - oy + 0.5 * warp) * rng.uniform(3.0, 4.6)
    saw = ring - np.floor(ring)
    late = smooth_step(0.35, 0.92, saw) * (1 - smooth_step(0.94, 1.0, saw))
    pores = grain(rng, x * 0.06, y * 1.1)
    pore = smooth_step(0.62, 0.80, pores)
    t = 0.78 - 0.52 * late - 0.30 * pore + 0.35 * (pores - 0.5)
    stops = [
        [(46, 29, 20), (92, 61, 42), (138, 98, 70)],
        [(104, 66, 34), (166, 118, 70), (206, 164, 112)],
        [(84, 38, 24), (142, 76, 48), (184, 116, 78)],
        [(140, 104, 66), (196, 160, 114), (226, 198, 156)],
    ][rng.integers(4)]
    return Material(ramp(np.clip(t, 0, 1), stops), -0.02 * pore - 0.012 * late, 0.12, 12)


def woven(u, v, depth, rng):
    x, y = _turn(rng, u, v, np.pi / 4)
    count = rng.uniform(2.3, 3.2)
    x = x * count + 0.05 * (cloud(rng, u, v) - 0.5) + rng.uniform(0, 1)
    y = y * count + rng.uniform(0, 1)
    cx, cy = np.floor(x), np.floor(y)
    fx, fy = x - cx - 0.5, y - cy - 0.5
    over = (cx + cy) % 2 == 0  # strand along x lies on top here
    across = np.where(over, fy, fx)
    along = np.where(over, fx, fy)
    height = np.sqrt(np.clip(1 - (2.1 * across) ** 2, 0, 1)) * (1 - 1.1 * along**2)
    fibre = grain(rng, along * 0.08 + cx * 0.31, across * 0.5 + cy * 0.23)
    pairs = [
        [(150, 98, 56), (128, 80, 44)],
        [(86, 56, 40), (106, 74, 54)],
        [(64, 78, 104), (150, 154, 158)],
        [(128, 46, 44), (104, 34, 36)],
        [(58, 62, 60), (82, 86, 82)],
        [(176, 158, 124), (150, 130, 98)],
    ]
    pair = np.asarray(pairs[rng.integers(len(pairs))], np.float32) / 255
    colour = np.where(over[..., None], pair[0], pair[1])
    shade = 0.32 + 0.78 * height + 0.55 * (fibre - 0.5)
    return Material(colour * shade[..., None], 0.07 * height, 0.16, 10)


def brass(u, v, depth, rng):
    r, angle = np.hypot(u, v), np.arctan2(v, u)
    brushed = grain(rng, angle / (2 * np.pi), r * 0.9)
    patina = smooth_step(0.52, 0.75, cloud(rng, u * 0.25, v * 0.25))
    edge = rng.uniform(0.17, 0.22)
    rope = np.exp(-(((depth - edge) / 0.045) ** 2))
    beads = 0.5 + 0.5 * np.cos(angle * rng.integers(22, 30))
    metals = [
        ((202, 164, 84), (92, 84, 52)),
        ((186, 134, 62), (70, 54, 34)),
        ((188, 186, 178), (92, 92, 90)),
        ((196, 128, 92), (84, 70, 56)),
    ]
    metal, stain = metals[rng.integers(len(metals))]
    metal = np.asarray(metal, np.float32) / 255
    stain = np.asarray(stain, np.float32) / 255
    amount = (rng.uniform(0.1, 0.7) * patina)[..., None]
    colour = metal * (1 - amount) + stain * amount
    colour = colour * (0.88 + 0.34 * (brushed - 0.4))[..., None]
    colour = colour * (1 - 0.28 * rope * (1 - beads))[..., None]
    return Material(colour, 0.055 * rope * (0.4 + 0.6 * beads), 0.55, 26, 0.9)


def tortoise(u, v, depth, rng):
    x, y = _turn(rng, u, v, np.pi)
    warp = cloud(rng, x * 0.15, y * 0.15) - 0.5
    blot = 0.75 * cloud(rng, x * 0.30 + 0.3 * warp, y * 0.42) + 0.25 * cloud(rng, x, y)
    haze = cloud(rng, x * 0.3, y * 0.3)
    cut = np.quantile(blot[depth > 0], rng.uniform(0.35, 0.65))  # share of dark blotches
    dark = smooth_step(cut - 0.06, cut + 0.13, blot)
    amber = [
        [(132, 66, 20), (194, 116, 38), (230, 172, 84)],
        [(124, 48, 20), (180, 86, 34), (218, 140, 70)],
        [(150, 98, 36), (206, 158, 72), (236, 204, 130)],
    ][rng.integers(3)]
    brown = np.array([44, 23, 14], np.float32) / 255
    colour = ramp(0.95 - 0.5 * haze - 0.25 * dark, amber)
    colour = colour * (1 - 0.88 * dark[..., None]) + 0.88 * brown * dark[..., None]
    colour = colour * (0.86 + 0.5 * np.clip(depth, 0, 0.28))[..., None]
    return Material(colour, np.zeros_like(u), 0.75, 55)


def glass(u, v, depth, rng):
    tones = [
        (168, 26, 40), (190, 88, 26), (24, 118, 70), (18, 108, 122),
        (30, 74, 158), (92, 48, 136), (150, 40, 96), (186, 140, 36), (96, 140, 150),
    ]  # fmt: skip
    tone = np.asarray(tones[rng.integers(len(tones))], np.float32) / 255
    tone = np.clip(tone * rng.normal(1, 0.08, 3), 0.03, 1)
    swirl = cloud(rng, u * 0.14, v * 0.14)
    # Light enters on one side and gathers on the other.
    a = rng.uniform(0, 2 * np.pi)
    far = np.clip(0.5 + 0.5 * (np.cos(a) * u + np.sin(a) * v), 0, 1)
    thin = 1 - smooth_step(0.0, 0.34, depth)
    light = 0.42 + 0.70 * far**1.5 + 0.5 * (swirl - 0.5) + 0.45 * thin * far
    colour = tone * light[..., None]
    # The brightest parts wash out, as coloured glass does against the light.
    wash = np.clip(light - 0.85, 0, 1)[..., None]
    colour = colour + wash * (0.30 + 0.45 * tone)
    bubble = smooth_step(0.74, 0.80, grain(rng, u * 0.16, v * 0.16))
    colour = colour + (0.12 * bubble)[..., None]
    return Material(colour, 0.006 * swirl, 1.2, 70)


def terrazzo(u, v, depth, rng):
    value, edge = _CHIPS[rng.integers(len(_CHIPS))]
    x, y = _turn(rng, u, v, np.pi)
    scale, (ox, oy) = rng.uniform(0.30, 0.42), rng.uniform(0, 1, 2)
    wobble = 0.02 * cloud(rng, x * 0.5, y * 0.5)
    x, y = x * scale + ox + wobble, y * scale + oy
    ix, iy = (np.floor(t * _TILE).astype(np.int64) % _TILE for t in (x, y))
    which, gap = value[iy, ix], edge[iy, ix]
    palettes = [
        [(226, 220, 208), (168, 70, 52), (52, 86, 92), (206, 158, 74), (60, 56, 54)],
        [(204, 206, 204), (40, 44, 50), (120, 128, 130), (242, 240, 236), (96, 84, 78)],
        [(236, 214, 200), (190, 96, 92), (96, 122, 96), (244, 240, 232), (84, 70, 84)],
        [(70, 74, 80), (214, 208, 198), (150, 120, 86), (120, 150, 156), (188, 92, 70)],
    ]
    palette = np.asarray(palettes[rng.integers(len(palettes))], np.float32) / 255
    chip = smooth_step(0.08, 0.15, gap) * (which > 0.08)
    kind = 1 + np.minimum((np.clip(which - 0.08, 0, 1) / 0.92 * 4).astype(int), 3)
    colour = palette[0] * (1 - chip[..., None]) + palette[kind] * chip[..., None]
    speck = grain(rng, u * 0.6, v * 0.6)
    return Material(colour * (0.9 + 0.24 * (speck - 0.5))[..., None], 0.004 * chip, 0.28, 30)


SURFACES = {
    "horn": horn,
    "pearl": pearl,
    "walnut": walnut,
    "woven": woven,
    "brass": brass,
    "tortoise": tortoise,
    "glass": glass,
    "terrazzo": terrazzo,
}
