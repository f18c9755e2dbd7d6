"""Builds the bytes of PNG, BMP, PNM and JPEG pictures of every kind (make_picture_cases.py)."""

import io
import pathlib
import struct
import subprocess
import zlib

import numpy as np
from PIL import Image


def pattern(width, height, seed):
    """Slopes, an edge, saturated patches and noise: what rounding and ringing show on."""
    rng = np.random.default_rng(seed)
    y, x = np.mgrid[0:height, 0:width].astype(np.float64)
    across, down = x / max(width - 1, 1), y / max(height - 1, 1)
    red = 255 * across
    green = 255 * down * (1 - 0.5 * across)
    blue = 127 + 127 * np.sin(9 * across + 5 * down)
    picture = np.stack([red, green, blue], axis=2)
    picture += rng.normal(0, 12, picture.shape)
    picture[(across + down) > 1.3] = (250, 4, 8)
    picture[(across < 0.25) & (down > 0.6)] = (2, 250, 245)
    return np.clip(np.rint(picture), 0, 255).astype(np.uint8)


# PNG by hand: Pillow writes few of the kinds that it reads.


def png_chunk(name, data):
    return struct.pack(">I", len(data)) + name + data + struct.pack(">I", zlib.crc32(name + data))


def png_rows(samples, depth):
    """samples: [h, w, channels] integers. Yields the packed bytes of each row."""
    height, width, channels = samples.shape
    for row in samples.reshape(height, width * channels):
        if depth == 16:
            yield row.astype(">u2").tobytes()
        elif depth == 8:
            yield row.astype(np.uint8).tobytes()
        else:
            bits = (row[:, None] >> np.arange(depth - 1, -1, -1)) & 1
            yield np.packbits(bits.astype(np.uint8).reshape(-1)).tobytes()


def png_filtered(samples, depth):
    """Each row with the next of the five filters, in turn."""
    step = max(1, samples.shape[2] * depth // 8)
    before, out = None, bytearray()
    for number, row in enumerate(png_rows(samples, depth)):
        kind = number % 5
        above = before if before is not None else bytes(len(row))
        line = bytearray()
        for i, value in enumerate(row):
            left = row[i - step] if i >= step else 0
            corner = above[i - step] if i >= step else 0
            guess = left + above[i] - corner
            paeth = min((left, above[i], corner), key=lambda v: abs(guess - v))
            line.append((value - (0, left, above[i], (left + above[i]) // 2, paeth)[kind]) & 255)
        out += bytes([kind]) + line
        before = row
    return bytes(out)


ADAM7 = ((0, 0, 8, 8), (4, 0, 8, 8), (0, 4, 4, 8), (2, 0, 4, 4), (0, 2, 2, 4), (1, 0, 2, 2),
         (0, 1, 1, 2))


def png(samples, depth, colour, palette=None, extra=b"", interlaced=False, pieces=1):
    height, width, _ = samples.shape
    raw = b""
    if interlaced:
        for x, y, x_step, y_step in ADAM7:
            part = samples[y::y_step, x::x_step]
            if part.size:
                raw += png_filtered(part, depth)
    else:
        raw = png_filtered(samples, depth)
    data = zlib.compress(raw, 9)
    cut = -(-len(data) // pieces)
    header = struct.pack(">IIBBBBB", width, height, depth, colour, 0, 0, int(interlaced))
    out = b"\x89PNG\r\n\x1a\n" + png_chunk(b"IHDR", header)
    if palette is not None:
        out += png_chunk(b"PLTE", bytes(palette))
    out += extra
    for start in range(0, len(data), cut):
        out += png_chunk(b"IDAT", data[start:start + cut])
    return out + png_chunk(b"IEND", b"")


# BMP by hand, for the layouts that Pillow only reads.


def bmp(rows, width, height, bits, header=40, compression=0, masks=b"", palette=b"", colours=0,
        top_down=False):
    body = b"".join(row + bytes(-len(row) % 4) for row in (rows if top_down else rows[::-1]))
    if header == 12:
        info = struct.pack("<IHHHH", 12, width, height, 1, bits)
    else:
        info = struct.pack("<IiiHHIIiiII", 40, width, -height if top_down else height, 1, bits,
                           compression, len(body), 2835, 2835, colours, 0)
        if header > 40:
            info = struct.pack("<I", header) + (info[4:] + masks).ljust(header - 4, b"\0")
            masks = b""
    start = 14 + len(info) + len(masks) + len(palette)
    return (b"BM" + struct.pack("<IHHI", start + len(body), 0, 0, start) + info + masks + palette +
            body)


def bmp_kinds(rgb):
    height, width, _ = rgb.shape
    bgr = rgb[:, :, ::-1]
    alpha = np.full((height, width, 1), 77, np.uint8)
    wide = [row.tobytes() for row in np.concatenate([bgr, alpha], axis=2)]
    value = rgb.astype(np.uint32)
    packed555 = (value[:, :, 0] >> 3) << 10 | (value[:, :, 1] >> 3) << 5 | value[:, :, 2] >> 3
    packed565 = (value[:, :, 0] >> 3) << 11 | (value[:, :, 1] >> 2) << 5 | value[:, :, 2] >> 3
    rows555 = [row.astype("<u2").tobytes() for row in packed555]
    rows565 = [row.astype("<u2").tobytes() for row in packed565]
    index = (rgb[:, :, 0] // 8).astype(np.uint8)
    ramp = np.stack([np.arange(256) * 7 % 256, np.arange(256) * 3 % 256, np.arange(256), ] +
                    [np.zeros(256)], axis=1).astype(np.uint8)
    bits1 = [np.packbits(row > 120).tobytes() for row in rgb[:, :, 1]]
    nibbles = [bytes((row[i] >> 4) << 4 | (row[i + 1] >> 4 if i + 1 < width else 0)
                     for i in range(0, width, 2)) for row in rgb[:, :, 1]]

    def mask(*values):
        return struct.pack("<%dI" % len(values), *values)

    return {
        "bmp_24": bmp([row.tobytes() for row in bgr], width, height, 24),
        "bmp_24_top_down": bmp([row.tobytes() for row in bgr], width, height, 24, top_down=True),
        "bmp_24_os2": bmp([row.tobytes() for row in bgr], width, height, 24, header=12),
        "bmp_32": bmp(wide, width, height, 32),
        "bmp_32_rgba_masks": bmp([row.tobytes() for row in np.concatenate([rgb, alpha], axis=2)],
                                 width, height, 32, header=108, compression=3,
                                 masks=mask(0xFF, 0xFF00, 0xFF0000, 0xFF000000)),
        "bmp_32_xbgr_masks": bmp([row.tobytes() for row in np.concatenate([alpha, bgr], axis=2)],
                                 width, height, 32, compression=3,
                                 masks=mask(0xFF000000, 0xFF0000, 0xFF00)),
        "bmp_16_555": bmp(rows555, width, height, 16),
        "bmp_16_565": bmp(rows565, width, height, 16, compression=3,
                          masks=mask(0xF800, 0x7E0, 0x1F)),
        "bmp_8": bmp([row.tobytes() for row in index], width, height, 8,
                     palette=ramp.tobytes()),
        "bmp_8_few": bmp([row.tobytes() for row in index], width, height, 8, colours=20,
                         palette=ramp[:20].tobytes()),
        "bmp_8_os2": bmp([row.tobytes() for row in index], width, height, 8, header=12,
                         palette=ramp[:, :3].tobytes()),
        "bmp_4": bmp(nibbles, width, height, 4, palette=ramp[5:21].tobytes(), colours=16),
        "bmp_1": bmp(bits1, width, height, 1, palette=ramp[40:42].tobytes(), colours=2),
        "bmp_1_black_white": bmp(bits1, width, height, 1, colours=2,
                                 palette=bytes([0, 0, 0, 0, 255, 255, 255, 0])),
    }


def png_kinds(rgb):
    rng = np.random.default_rng(11)
    height, width, _ = rgb.shape
    alpha = rng.integers(0, 256, (height, width, 1))
    value = rgb.astype(np.int64)
    grey = value[:, :, 1:2]
    deep = value * 256 + rng.integers(0, 256, value.shape)
    deep_alpha = alpha * 256 + 9
    dim = rng.integers(0, 700, (height, width, 1))
    palette = rng.integers(0, 256, 768).astype(np.uint8).tobytes()
    index = value[:, :, 0:1]
    clear = png_chunk(b"tRNS", bytes([0, 128, 255, 3]))
    kinds = {}
    for depth in (1, 2, 4, 8):
        kinds[f"png_grey{depth}"] = png(grey >> (8 - depth), depth, 0)
        kinds[f"png_palette{depth}"] = png(index >> (8 - depth), depth, 3,
                                           palette[:3 << depth])
    kinds["png_grey16"] = png(dim, 16, 0)
    kinds["png_rgb8"] = png(value, 8, 2, pieces=4)
    kinds["png_rgb8_clear"] = png(value, 8, 2, extra=png_chunk(b"tRNS", bytes([0, 2, 0, 250, 0, 245])))
    kinds["png_rgb16"] = png(deep, 16, 2)
    kinds["png_grey_alpha8"] = png(np.concatenate([grey, alpha], axis=2), 8, 4)
    kinds["png_grey_alpha16"] = png(np.concatenate([deep[:, :, :1], deep_alpha], axis=2), 16, 4)
    kinds["png_rgba8"] = png(np.concatenate([value, alpha], axis=2), 8, 6)
    kinds["png_rgba16"] = png(np.concatenate([deep, deep_alpha], axis=2), 16, 6)
    kinds["png_palette8_clear"] = png(index, 8, 3, palette, extra=clear)
    kinds["png_palette8_few"] = png(index, 8, 3, palette[:60])
    kinds["png_palette2_clear"] = png(index >> 6, 2, 3, palette[:12], extra=clear)
    kinds["png_interlaced_rgb8"] = png(value, 8, 2, interlaced=True)
    kinds["png_interlaced_grey1"] = png(grey >> 7, 1, 0, interlaced=True)
    kinds["png_interlaced_palette4"] = png(index >> 4, 4, 3, palette[:48], interlaced=True)
    kinds["png_interlaced_rgba16"] = png(np.concatenate([deep, deep_alpha], axis=2), 16, 6,
                                         interlaced=True)
    for w, h in ((1, 1), (1, 9), (5, 1), (3, 2)):
        kinds[f"png_interlaced_{w}x{h}"] = png(value[:h, :w], 8, 2, interlaced=True)
    return kinds


def pnm_kinds(rgb):
    height, width, _ = rgb.shape
    grey = rgb[:, :, 1].astype(np.int64)
    size = b"%d %d\n" % (width, height)
    bits = grey > 120

    def text(values):
        return b"\n".join(b" ".join(b"%d" % v for v in row) for row in values)

    return {
        "pnm_p1.pbm": b"P1\n# bits\n" + size + b"\n".join(
            b"".join(b"1" if v else b"0" for v in row) for row in bits),
        "pnm_p2.pgm": b"P2\n" + size + b"255\n" + text(grey),
        "pnm_p2_deep.pgm": b"P2\n" + size + b"1000\n" + text(grey * 3),
        "pnm_p3.ppm": b"P3\n" + size + b"100 # percent\n" + text(
            rgb.reshape(height, -1).astype(np.int64) * 100 // 255),
        "pnm_p4.pbm": b"P4 " + size + np.packbits(bits, axis=1).tobytes(),
        "pnm_p5.pgm": b"P5\n#grey\n" + size + b"255\n" + grey.astype(np.uint8).tobytes(),
        "pnm_p5_60.pgm": b"P5\n" + size + b"60\n" + (grey // 4).astype(np.uint8).tobytes(),
        "pnm_p5_deep.pgm": b"P5\n" + size + b"65535\n" + (grey * 2).astype(">u2").tobytes(),
        "pnm_p5_300.pgm": b"P5\n" + size + b"300\n" + grey.astype(">u2").tobytes(),
        "pnm_p6.ppm": b"P6 " + size + b"255\n" + rgb.tobytes(),
        "pnm_p6_deep.ppm": b"P6 " + size + b"4095\n" + (
            rgb.astype(np.int64) * 16).astype(">u2").tobytes(),
    }


# JPEG.


def pillow_jpeg(rgb, mode="RGB", **options):
    out = io.BytesIO()
    Image.fromarray(rgb).convert(mode).save(out, "JPEG", quality=90, **options)
    return out.getvalue()


class Libjpeg:
    def __init__(self, folder):
        self.program = str(pathlib.Path(folder) / "make_jpeg")
        source = pathlib.Path(__file__).with_name("make_jpeg.c")
        subprocess.run(["cc", "-O1", str(source), "-ljpeg", "-o", self.program], check=True)

    def __call__(self, pixels, space, stored, sampling, restart=0, coding="baseline"):
        height, width = pixels.shape[:2]
        return subprocess.run(
            [self.program, str(width), str(height), space, stored, sampling, str(restart), coding],
            input=pixels.tobytes(), capture_output=True, check=True).stdout


def without_segments(jpeg, marker):
    """As cameras send motion JPEG, when the marker is that of Huffman tables."""
    out, at = jpeg[:2], 2
    while jpeg[at + 1] != 0xDA:
        end = at + 2 + (jpeg[at + 2] << 8 | jpeg[at + 3])
        if jpeg[at + 1] != marker:
            out += jpeg[at:end]
        at = end
    return out + jpeg[at:]


def jpeg_kinds(rgb, libjpeg):
    height, width, _ = rgb.shape
    key = np.minimum(rgb.min(axis=2, keepdims=True), 200)
    inks = np.concatenate([rgb, 255 - key], axis=2)
    cmyk = libjpeg(inks, "cmyk", "cmyk", "1x1")
    adobe = cmyk.index(b"Adobe")
    plain = libjpeg(rgb, "rgb", "ycc", "1x1")
    jfif = plain.index(b"JFIF")
    return {
        "jpeg_grey": pillow_jpeg(rgb, "L"),
        "jpeg_444": pillow_jpeg(rgb, subsampling=0),
        "jpeg_422": pillow_jpeg(rgb, subsampling=1),
        "jpeg_420": pillow_jpeg(rgb, subsampling=2),
        "jpeg_440": libjpeg(rgb, "rgb", "ycc", "1x2"),
        "jpeg_411": libjpeg(rgb, "rgb", "ycc", "4x1"),
        "jpeg_grey_2x2": libjpeg(np.ascontiguousarray(rgb[:, :, :1]), "grey", "grey", "2x2"),
        "jpeg_progressive_444": pillow_jpeg(rgb, subsampling=0, progressive=True),
        "jpeg_progressive_420": pillow_jpeg(rgb, subsampling=2, progressive=True),
        "jpeg_optimized": pillow_jpeg(rgb, optimize=True),
        "jpeg_restart_420": libjpeg(rgb, "rgb", "ycc", "2x2", restart=1),
        "jpeg_restart_444": libjpeg(rgb, "rgb", "ycc", "1x1", restart=4),
        "jpeg_restart_progressive": libjpeg(rgb, "rgb", "ycc", "2x1", restart=3,
                                            coding="progressive"),
        "jpeg_scans_420": libjpeg(rgb, "rgb", "ycc", "2x2", coding="scans"),
        "jpeg_scans_restart": libjpeg(rgb, "rgb", "ycc", "2x1", restart=2, coding="scans"),
        "jpeg_rgb": libjpeg(rgb, "rgb", "rgb", "1x1"),
        "jpeg_no_jfif": plain[:jfif - 4] + plain[jfif + 14:],
        "jpeg_cmyk": cmyk,
        "jpeg_ycck": libjpeg(inks, "cmyk", "ycck", "2x2"),
        "jpeg_ycck_progressive": libjpeg(inks, "cmyk", "ycck", "1x1", coding="progressive"),
        "jpeg_cmyk_no_adobe": cmyk[:adobe - 4] + cmyk[adobe + 12:],
        "jpeg_cmyk_adobe_1": cmyk[:adobe + 11] + b"\1" + cmyk[adobe + 12:],
        "jpeg_no_huffman": without_segments(pillow_jpeg(rgb), 0xC4),
        "jpeg_trailing": pillow_jpeg(rgb) + b"\xff\xd8 what follows the end does not count",
    }


def tiff(orientation, big_endian=False, kind=3):
    order = ">" if big_endian else "<"
    value = struct.pack(order + ("HH" if kind == 3 else "I"),
                        *((orientation, 0) if kind == 3 else (orientation,)))
    return ((b"MM" if big_endian else b"II") + struct.pack(order + "HI", 42, 8) +
            struct.pack(order + "H", 2) + struct.pack(order + "HHII", 0x0100, 4, 1, 99) +
            struct.pack(order + "HHI", 0x0112, kind, 1) + value + struct.pack(order + "I", 0))
