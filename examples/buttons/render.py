#!/usr/bin/env python3
"""Renders pictures of reclaimed buttons on a belt, and writes the test sets.

  render.py                      write pictures/ and pictures/labels.csv
  render.py --sheet SHEET.png    write one contact sheet of all test pictures

The same seed, outline and surface give the same picture.
"""

import argparse
import csv
import pathlib

import numpy as np
from PIL import Image, ImageFilter

from outlines import HOLES, OUTLINES
from surfaces import SURFACES, cloud, grain, smooth_step

WIDTH, HEIGHT = 120, 96
_SUPERSAMPLE = 3

# The classes, in the order of the classifiers' outputs: (name, outline, surface).
KINDS = [
    ("horn toggle", "toggle", "horn"),
    ("pearl flower", "flower", "pearl"),
    ("walnut square", "square", "walnut"),
    ("woven round", "round", "woven"),
    ("brass shield", "shield", "brass"),
    ("tortoise hexagon", "hexagon", "tortoise"),
    ("glass heart", "heart", "glass"),
    ("terrazzo star", "star", "terrazzo"),
]
CLASS_NAMES = [name for name, _, _ in KINDS]
KIND_OF_OUTLINE = {outline: name for name, outline, _ in KINDS}
KIND_OF_SURFACE = {surface: name for name, _, surface in KINDS}

# Outline and surface of the odd test pictures. Training never sees these pairs.
ODD_PAIRS = [
    (KINDS[i][1], KINDS[(i + step) % len(KINDS)][2])
    for i in range(len(KINDS))
    for step in (1, 3, 6)
]
ORDINARY_PER_CLASS = 10


def _belt(rng, x, y):
    """The belt: rubber with a fine weave, scuffs along its travel, dust."""
    tones = [(58, 62, 64), (44, 46, 48), (52, 74, 64), (58, 70, 88), (96, 94, 88), (74, 66, 60)]
    tone = np.asarray(tones[rng.integers(len(tones))], np.float32) / 255
    pitch = rng.uniform(3.2, 5.0)
    angle = rng.choice([0.0, np.pi / 4]) + rng.normal(0, 0.03)
    wx = np.cos(angle) * x + np.sin(angle) * y
    wy = np.cos(angle) * y - np.sin(angle) * x
    weave = np.sin(2 * np.pi * wx / pitch) * np.sin(2 * np.pi * wy / pitch)
    value = 1 + rng.uniform(0.04, 0.13) * weave
    value = value + 0.55 * (grain(rng, x / 110, y / 110) - 0.5)
    value = value + 0.45 * (cloud(rng, x / 300, y / 300) - 0.5)
    scuff = smooth_step(0.58, 0.95, cloud(rng, x / 2400, y / 110))
    value = value + rng.uniform(0.0, 0.4) * scuff
    return tone * value[..., None]


def _dust(rng, picture, x, y):
    """Specks and now and then a strand of lint, drawn onto the picture."""
    for _ in range(rng.poisson(5)):
        px, py = rng.uniform(0, WIDTH), rng.uniform(0, HEIGHT)
        spot = np.exp(-((x - px) ** 2 + (y - py) ** 2) / rng.uniform(0.25, 1.2))
        picture += (rng.uniform(-0.10, 0.22) * spot)[..., None]
    if rng.random() < 0.3:
        px, py, a = rng.uniform(0, WIDTH), rng.uniform(0, HEIGHT), rng.uniform(0, np.pi)
        along = np.cos(a) * (x - px) + np.sin(a) * (y - py)
        across = np.cos(a) * (y - py) - np.sin(a) * (x - px)
        half = rng.uniform(6, 16)
        bend = rng.uniform(-0.05, 0.05) * along**2 + 1.5 * np.sin(along / rng.uniform(3, 6))
        strand = np.exp(-((across - bend) ** 2) / 0.35) * smooth_step(half, half - 3, np.abs(along))
        tint = np.array([0.75, 0.72, 0.68]) * rng.uniform(0.5, 1.1)
        strand = (rng.uniform(0.3, 0.6) * strand)[..., None]
        picture *= 1 - strand
        picture += strand * tint


def _holes(rng, outline):
    """Centres and radius of the thread holes, in button coordinates."""
    layouts = HOLES[outline]
    centres = layouts[rng.integers(len(layouts))]
    spread = rng.uniform(0.9, 1.15)
    return [(cx * spread, cy * spread) for cx, cy in centres], rng.uniform(0.072, 0.095)


def _thread(rng, u, v, centres):
    """A leftover stitch between two holes: coverage and colour."""
    (ax, ay), (bx, by) = centres[0], centres[-1]
    length = np.hypot(bx - ax, by - ay)
    along = ((u - ax) * (bx - ax) + (v - ay) * (by - ay)) / length
    across = ((v - ay) * (bx - ax) - (u - ax) * (by - ay)) / length
    ply = 0.5 + 0.5 * np.cos(2 * np.pi * (along * 14 + across * 9))
    cover = smooth_step(0.045, 0.03, np.abs(across))
    cover = cover * smooth_step(-0.03, 0.0, along) * smooth_step(length + 0.03, length, along)
    tones = [(228, 222, 210), (40, 40, 44), (150, 40, 44), (52, 70, 112), (120, 96, 66)]
    tone = np.asarray(tones[rng.integers(len(tones))], np.float32) / 255
    return cover, tone * (0.65 + 0.35 * ply)[..., None]


def _shade(colour, height, material, light, unit):
    """Diffuse and highlight for a height field; `unit` is pixels a radius."""
    gy, gx = np.gradient(height * unit)
    nz = 1 / np.sqrt(1 + gx**2 + gy**2)
    nx, ny = -gx * nz, -gy * nz
    diffuse = np.clip(nx * light[0] + ny * light[1] + nz * light[2], 0, 1)
    half = light + np.array([0, 0, 1])
    half = half / np.linalg.norm(half)
    gleam = np.clip(nx * half[0] + ny * half[1] + nz * half[2], 0, 1) ** material.sharpness
    # Metal and pearl also mirror a bright lamp and the dark of the hall around it.
    hall = 1 + material.mirror * (np.clip(1.4 * (nx * light[0] + ny * light[1]), -0.5, 0.6))
    lit = colour * ((0.34 + 0.76 * diffuse) * hall)[..., None]
    warm = np.array([1.0, 0.98, 0.94])
    return lit + (material.gloss * 0.85 * gleam)[..., None] * warm


def _button(rng, outline, surface, centre, radius, turn, light):
    """The button over its box of whole pixels: premultiplied colour, cover, box."""
    x0, y0 = int(np.floor(centre[0] - radius)) - 1, int(np.floor(centre[1] - radius)) - 1
    side = int(np.ceil(2 * radius)) + 3
    axis = (np.arange(side * _SUPERSAMPLE, dtype=np.float32) + 0.5) / _SUPERSAMPLE
    py, px = np.meshgrid(axis + y0 - centre[1], axis + x0 - centre[0], indexing="ij")
    u = (np.cos(turn) * px + np.sin(turn) * py) / radius
    v = (np.cos(turn) * py - np.sin(turn) * px) / radius
    distance = OUTLINES[outline](u, v)
    unit = radius * _SUPERSAMPLE
    cover = np.clip(0.5 - distance * unit, 0, 1)
    depth = np.maximum(-distance, 0)

    material = SURFACES[surface](u, v, depth, rng)
    bevel = rng.uniform(0.10, 0.20)
    edge = np.clip(1 - depth / bevel, 0, 1)
    height = 0.8 * bevel * np.sqrt(1 - edge**2)
    rim = rng.uniform(0.05, 0.09)
    if rng.random() < 0.5 and outline != "flower":  # dished inside a raised rim
        height = height - 0.035 * smooth_step(bevel + 0.02, bevel + 0.02 + rim, depth)
    height = height - rng.uniform(0.0, 0.14) * (u**2 + v**2) + material.bump

    centres, hole_radius = _holes(rng, outline)
    hole = np.full_like(u, 9.0)
    for cx, cy in centres:
        hole = np.minimum(hole, np.hypot(u - cx, v - cy) - hole_radius)
    height = height - 0.04 * smooth_step(0.045, 0.0, hole)
    colour = material.colour
    if rng.random() < 0.35:  # grime that has settled on the button
        grime = smooth_step(0.5, 0.85, cloud(rng, u * 0.3, v * 0.3)) * rng.uniform(0.2, 0.6)
        colour = colour * (1 - grime[..., None]) + grime[..., None] * np.array([0.20, 0.17, 0.13])
    if rng.random() < 0.4:  # a scratch
        a, at = rng.uniform(0, np.pi), rng.uniform(-0.5, 0.5)
        line = np.cos(a) * u + np.sin(a) * v - at + 0.08 * (cloud(rng, u * 0.2, v * 0.2) - 0.5)
        colour = colour + (0.14 * np.exp(-((line / 0.014) ** 2)))[..., None]
    lit = _shade(colour, height, material, light, unit)
    inside = np.clip(0.5 - hole * unit, 0, 1)[..., None]
    lit = lit * (1 - inside) + inside * (0.16 * lit + 0.03)
    if centres and rng.random() < 0.22:
        strand, tone = _thread(rng, u, v, centres)
        lit = lit * (1 - strand[..., None]) + tone * strand[..., None]

    layer = np.concatenate([np.clip(lit, 0, 1.1) * cover[..., None], cover[..., None]], -1)
    layer = layer.reshape(side, _SUPERSAMPLE, side, _SUPERSAMPLE, 4).mean((1, 3))
    return layer[..., :3], layer[..., 3:], (x0, y0, side)


def render(seed, outline, surface):
    """One picture, uint8 [HEIGHT, WIDTH, 3], of a button on the belt."""
    rng = np.random.default_rng(seed)
    y, x = np.mgrid[0:HEIGHT, 0:WIDTH].astype(np.float32) + 0.5
    radius = rng.uniform(27, 37)
    centre = (WIDTH / 2 + rng.uniform(-9, 9), HEIGHT / 2 + rng.uniform(-8, 8))
    turn = rng.uniform(0, 2 * np.pi)
    # The lamp stands at the upper left of the camera, give or take.
    bearing, rise = np.deg2rad(rng.uniform(195, 255)), np.deg2rad(rng.uniform(42, 62))
    light = np.array(
        [np.cos(bearing) * np.cos(rise), np.sin(bearing) * np.cos(rise), np.sin(rise)]
    )

    picture = _belt(rng, x, y)
    # Shadow: the outline moved away from the lamp, with a soft edge, and the
    # darkness of the narrow gap under the button.
    fall = rng.uniform(0.08, 0.16) * radius / np.tan(rise)
    for shift, soft, strength in ((fall, 0.16, rng.uniform(0.35, 0.6)), (0.0, 0.07, 0.35)):
        sx = x - centre[0] + shift * light[0] / np.cos(rise)
        sy = y - centre[1] + shift * light[1] / np.cos(rise)
        u = (np.cos(turn) * sx + np.sin(turn) * sy) / radius
        v = (np.cos(turn) * sy - np.sin(turn) * sx) / radius
        shadow = smooth_step(soft, -soft, OUTLINES[outline](u, v))
        picture *= (1 - strength * shadow)[..., None]

    colour, cover, (x0, y0, side) = _button(rng, outline, surface, centre, radius, turn, light)
    top, left = max(y0, 0), max(x0, 0)
    bottom, right = min(y0 + side, HEIGHT), min(x0 + side, WIDTH)
    part = (slice(top - y0, bottom - y0), slice(left - x0, right - x0))
    window = (slice(top, bottom), slice(left, right))
    picture[window] = picture[window] * (1 - cover[part]) + colour[part]
    _dust(rng, picture, x, y)

    # Uneven light, the camera's exposure, white balance, focus and noise.
    a, strength = rng.uniform(0, 2 * np.pi), rng.uniform(0.0, 0.22)
    slope = (np.cos(a) * (x - WIDTH / 2) + np.sin(a) * (y - HEIGHT / 2)) / (WIDTH / 2)
    corner = ((x - WIDTH / 2) ** 2 + (y - HEIGHT / 2) ** 2) / (WIDTH / 2) ** 2
    gain = rng.uniform(0.92, 1.22) * (1 + strength * slope - rng.uniform(0.03, 0.16) * corner)
    picture = picture * gain[..., None] * rng.normal(1, 0.03, 3)
    frame = Image.fromarray((np.clip(picture, 0, 1) * 255 + 0.5).astype(np.uint8))
    frame = frame.filter(ImageFilter.GaussianBlur(rng.uniform(0.25, 0.75)))
    noise = rng.normal(0, rng.uniform(0.8, 2.6), (HEIGHT, WIDTH, 3))
    return np.clip(np.asarray(frame) + noise + 0.5, 0, 255).astype(np.uint8)


def test_pictures():
    """Yields (file, seed, outline, surface) of every test picture."""
    for i, (_, outline, surface) in enumerate(KINDS):
        for n in range(ORDINARY_PER_CLASS):
            ending = "png" if n % 4 == 0 else "jpg"
            yield f"ordinary/{surface}_{outline}_{n:02}.{ending}", 1000 + 100 * i + n, outline, surface
    for n, (outline, surface) in enumerate(ODD_PAIRS):
        ending = "png" if n % 4 == 0 else "jpg"
        yield f"odd/{surface}_{outline}_{n:02}.{ending}", 5000 + n, outline, surface


def write_test_sets(folder):
    """Writes the ordinary and the odd pictures with labels.csv."""
    rows = []
    for file, seed, outline, surface in test_pictures():
        path = folder / file
        path.parent.mkdir(parents=True, exist_ok=True)
        picture = Image.fromarray(render(seed, outline, surface))
        if path.suffix == ".png":
            picture.save(path, optimize=True)
        else:
            picture.save(path, quality=90)
        rows.append((file, KIND_OF_OUTLINE[outline], KIND_OF_SURFACE[surface]))
    with open(folder / "labels.csv", "w", newline="", encoding="utf-8") as out:
        writer = csv.writer(out, lineterminator="\n")
        writer.writerow(("file", "class", "surface_kind"))
        writer.writerows(rows)


def contact_sheet(columns=ORDINARY_PER_CLASS, zoom=1):
    """All test pictures side by side: a row a class, then the odd ones."""
    tiles = [render(seed, outline, surface) for _, seed, outline, surface in test_pictures()]
    rows = -(-len(tiles) // columns)
    sheet = Image.new("RGB", (columns * (WIDTH + 4), rows * (HEIGHT + 4)), "white")
    for n, tile in enumerate(tiles):
        at = (n % columns * (WIDTH + 4) + 2, n // columns * (HEIGHT + 4) + 2)
        sheet.paste(Image.fromarray(tile), at)
    return sheet.resize((sheet.width * zoom, sheet.height * zoom), Image.Resampling.BICUBIC)


def main():
    here = pathlib.Path(__file__).resolve().parent
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--out", type=pathlib.Path, default=here / "pictures")
    parser.add_argument("--sheet", type=pathlib.Path, help="write a contact sheet only")
    parser.add_argument("--zoom", type=int, default=1, help="enlarge the contact sheet")
    options = parser.parse_args()
    if options.sheet:
        contact_sheet(zoom=options.zoom).save(options.sheet)
    else:
        write_test_sets(options.out)


if __name__ == "__main__":
    main()
