#!/usr/bin/env python3
"""Makes pictures of every kind, and what Pillow and torchvision make of them.

    make_picture_cases.py FOLDER [--random N] [--seed S]

FOLDER receives the pictures, `results.bin` and `cases.txt`, which picture_test.cc and
preprocess_test.cc read, one case a line:

    decode PICTURE ORIENTATION HEIGHT WIDTH OFFSET
    resize PICTURE INTERPOLATION HEIGHT WIDTH OFFSET
    preprocess PICTURE RESIZE INTERPOLATION CROP CHANNELS SCALED C HEIGHT WIDTH OFFSET

RESIZE is `none`, `shorter:N` or `exact:HxW`, CROP is `none` or `HxW`, SCALED is `plain` or
`imagenet`. At OFFSET of results.bin lies what is expected: RGB bytes, or the tensor [1, C, h, w] as
little-endian float32.

Without --random it makes the set that the repository holds in tests/data/pictures. With --random it
makes N pictures of random sizes and as many resizes and preprocessings instead; point
LEADSMAN_PICTURE_CASES at the folder and run the tests.

Needs Pillow, numpy, torch and torchvision; also a C compiler and libjpeg for make_jpeg.c, which
writes what Pillow's JPEG writer does not offer.
"""

import argparse
import io
import pathlib
import random
import tempfile

import numpy as np
import torch
import torchvision
from PIL import Image, ImageOps

from picture_kinds import (Libjpeg, bmp_kinds, jpeg_kinds, pattern, pillow_jpeg, png, png_chunk,
                           png_kinds, pnm_kinds, tiff)

INTERPOLATIONS = {
    "nearest": Image.Resampling.NEAREST,
    "bilinear": Image.Resampling.BILINEAR,
    "bicubic": Image.Resampling.BICUBIC,
}
MEAN = (0.485, 0.456, 0.406)
STD = (0.229, 0.224, 0.225)


class Cases:
    def __init__(self, folder):
        self.folder = pathlib.Path(folder)
        self.folder.mkdir(parents=True, exist_ok=True)
        self.lines = []
        self.results = bytearray()

    def write(self, name, data):
        (self.folder / name).write_bytes(data)

    def expect(self, data):
        """Returns where the data lie in results.bin."""
        offset = len(self.results)
        self.results += data
        return offset

    def expect_picture(self, picture):
        assert picture.mode == "RGB", picture.mode
        offset = self.expect(np.asarray(picture).tobytes())
        return f"{picture.height} {picture.width} {offset}"

    def open(self, name):
        picture = Image.open(self.folder / name)
        picture.load()
        return picture

    def decode(self, name, orientation="as_stored"):
        picture = self.open(name)
        if orientation == "exif":
            picture = ImageOps.exif_transpose(picture)
        expected = self.expect_picture(picture.convert("RGB"))
        self.lines.append(f"decode {name} {orientation} {expected}")

    def resize(self, name, interpolation, height, width):
        picture = self.open(name).convert("RGB")
        expected = self.expect_picture(
            picture.resize((width, height), INTERPOLATIONS[interpolation]))
        self.lines.append(f"resize {name} {interpolation} {expected}")

    def preprocess(self, name, resize, interpolation, crop, channels, scaled):
        picture = self.open(name).convert("RGB")
        kind = getattr(torchvision.transforms.InterpolationMode, interpolation.upper())
        steps = torchvision.transforms
        if resize.startswith("shorter:"):
            picture = steps.Resize(int(resize[8:]), interpolation=kind)(picture)
        elif resize.startswith("exact:"):
            size = [int(v) for v in resize[6:].split("x")]
            picture = steps.Resize(size, interpolation=kind)(picture)
        if crop != "none":
            picture = steps.CenterCrop([int(v) for v in crop.split("x")])(picture)
        if channels == "GREY":
            picture = picture.convert("L")
        tensor = steps.ToTensor()(picture)
        if channels == "BGR":
            tensor = tensor.flip(0)
        if scaled == "imagenet":
            count = tensor.shape[0]
            tensor = steps.Normalize(MEAN[:count], STD[:count])(tensor)
        sizes = " ".join(str(size) for size in tensor.shape)
        offset = self.expect(tensor.numpy().astype("<f4").tobytes())
        self.lines.append(f"preprocess {name} {resize} {interpolation} {crop} {channels} {scaled} "
                          f"{sizes} {offset}")

    def close(self):
        self.write("results.bin", self.results)
        self.write("cases.txt", "".join(line + "\n" for line in self.lines).encode())


def stored(cases, libjpeg):
    rgb = pattern(23, 17, 1)
    for name, data in png_kinds(rgb).items():
        cases.write(name + ".png", data)
        cases.decode(name + ".png")
    for name, data in bmp_kinds(rgb).items():
        cases.write(name + ".bmp", data)
        cases.decode(name + ".bmp")
    for name, data in pnm_kinds(rgb).items():
        cases.write(name, data)
        cases.decode(name)
    for name, data in jpeg_kinds(pattern(27, 21, 2), libjpeg).items():
        cases.write(name + ".jpg", data)
        cases.decode(name + ".jpg")
    for w, h in ((1, 1), (1, 19), (17, 1), (2, 2), (16, 16)):
        cases.write(f"jpeg_{w}x{h}.jpg", pillow_jpeg(pattern(w, h, 3), subsampling=2))
        cases.decode(f"jpeg_{w}x{h}.jpg")

    small = pattern(7, 5, 4)
    for orientation in range(1, 9):
        name = f"exif_{orientation}.png"
        block = png_chunk(b"eXIf", tiff(orientation, big_endian=orientation % 2 == 0))
        cases.write(name, png(small.astype(np.int64), 8, 2, extra=block))
        cases.decode(name, "exif")
    for orientation, big_endian, kind in ((6, False, 3), (8, True, 3), (3, False, 4)):
        name = f"exif_{orientation}.jpg"
        block = b"Exif\0\0" + tiff(orientation, big_endian, kind)
        cases.write(name, pillow_jpeg(small, subsampling=0, exif=block))
        cases.decode(name, "exif")
        cases.decode(name, "as_stored")

    sources = {"scene.png": (37, 29), "tall.png": (2, 61), "wide.png": (67, 1), "dot.png": (1, 1)}
    for number, (name, (width, height)) in enumerate(sources.items()):
        cases.write(name, png(pattern(width, height, 20 + number).astype(np.int64), 8, 2))
    for interpolation in INTERPOLATIONS:
        for height, width in ((29, 37), (29, 12), (9, 37), (13, 11), (40, 50), (1, 1), (3, 64)):
            cases.resize("scene.png", interpolation, height, width)
        cases.resize("tall.png", interpolation, 7, 9)
        cases.resize("wide.png", interpolation, 5, 8)
        cases.resize("dot.png", interpolation, 4, 3)

    for arguments in (("tall.png", "none", "bilinear", "none", "RGB", "plain"),
                      ("scene.png", "shorter:16", "bilinear", "12x12", "RGB", "imagenet"),
                      ("scene.png", "shorter:15", "bicubic", "12x13", "BGR", "imagenet"),
                      ("scene.png", "shorter:40", "bicubic", "10x9", "RGB", "imagenet"),
                      ("scene.png", "exact:9x14", "nearest", "none", "RGB", "plain"),
                      ("scene.png", "exact:9x14", "bilinear", "15x10", "RGB", "imagenet"),
                      ("scene.png", "none", "bilinear", "30x8", "GREY", "plain"),
                      ("scene.png", "none", "bilinear", "12x11", "GREY", "imagenet"),
                      ("tall.png", "shorter:3", "bilinear", "8x8", "RGB", "imagenet"),
                      ("wide.png", "shorter:2", "bicubic", "5x6", "RGB", "plain"),
                      ("png_rgba8.png", "shorter:11", "bilinear", "11x11", "RGB", "imagenet")):
        cases.preprocess(*arguments)


def scattered(cases, libjpeg, count, seed):
    rng = random.Random(seed)

    def side(most):
        return rng.choice((1, 2, 3, rng.randint(1, 40), rng.randint(1, most)))

    for number in range(count):
        width, height = side(700), side(700)
        rgb = pattern(width, height, seed * 1000 + number)
        name = f"random_{number}.png"
        out = io.BytesIO()
        Image.fromarray(rgb).save(out, "PNG")
        cases.write(name, out.getvalue())
        cases.decode(name)
        sampling = rng.choice(("1x1", "2x1", "1x2", "2x2", "4x1"))
        coding = rng.choice(("baseline", "progressive", "scans"))
        jpeg = f"random_{number}.jpg"
        cases.write(jpeg, libjpeg(rgb, "rgb", "ycc", sampling, rng.choice((0, 0, 1, 7)), coding))
        cases.decode(jpeg)
        interpolation = rng.choice(list(INTERPOLATIONS))
        cases.resize(name, interpolation, side(500), side(500))
        # What grows beyond reason in the long direction is left out.
        shorter = rng.randint(1, 60)
        if shorter * max(width, height) / min(width, height) < 4000:
            cases.preprocess(name, f"shorter:{shorter}", interpolation,
                             rng.choice(("none", f"{side(80)}x{side(80)}")),
                             rng.choice(("RGB", "BGR", "GREY")), rng.choice(("plain", "imagenet")))


def main():
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("folder")
    parser.add_argument("--random", type=int, default=0, metavar="N")
    parser.add_argument("--seed", type=int, default=1)
    arguments = parser.parse_args()
    cases = Cases(arguments.folder)
    with tempfile.TemporaryDirectory() as folder:
        libjpeg = Libjpeg(folder)
        if arguments.random:
            scattered(cases, libjpeg, arguments.random, arguments.seed)
        else:
            stored(cases, libjpeg)
    cases.close()
    print(f"{len(cases.lines)} cases; Pillow {Image.__version__}, torchvision "
          f"{torchvision.__version__}, torch {torch.__version__}, numpy {np.__version__}")


if __name__ == "__main__":
    main()
