#!/usr/bin/env python3
"""Makes the stored cases of tests/data/npy and tests/data/safetensors.

Usage: make_tensor_cases.py FOLDER     (tests/data)

Stored: NumPy 1.26.4 and the safetensors package 0.8.0. cases.txt lists every CASE.npy and its
shape; expected.f32 holds what NumPy's astype(float32) makes of each, in C order, as raw
little-endian floats one after the other. The files are small and made from a fixed seed.
"""

import pathlib
import sys
import zipfile

import numpy
from numpy.lib import format as npy_format


def arrays():
    """Name to array: every type, both byte orders, both index orders, ranks 0 to 6."""
    generator = numpy.random.default_rng(20240611)
    cases = {}
    for kind in ["b1", "u1", "i1", "u2", "i2", "u4", "i4", "u8", "i8", "f2", "f4", "f8"]:
        for order, order_name in [("<", "little"), (">", "big")]:
            dtype = numpy.dtype(order + kind)
            if dtype.itemsize == 1 and order == ">":
                continue
            if kind[0] == "f":
                values = generator.normal(size=(2, 3, 4)) * 100
            else:
                limits = (0, 1) if kind == "b1" else (
                    numpy.iinfo(kind).min, numpy.iinfo(kind).max)
                values = generator.integers(limits[0], limits[1], size=(2, 3, 4), endpoint=True,
                                            dtype=bool if kind == "b1" else kind)
            cases[f"{kind}_{order_name}"] = values.astype(dtype)
    half = numpy.array([0.0, -0.0, 1.0, 65504.0, 6.103515625e-05, 5.960464477539063e-08, numpy.inf,
                        -numpy.inf, 0.333251953125], numpy.float16)
    cases["f2_special"] = half
    base = generator.normal(size=(2, 3, 4, 5)).astype("<f4")
    cases["fortran_rank4"] = numpy.asfortranarray(base)
    cases["fortran_rank2"] = numpy.asfortranarray(base[0, 0])
    cases["fortran_big_i2"] = numpy.asfortranarray(
        generator.integers(-9, 9, size=(3, 2, 5)).astype(">i2"))
    cases["rank0"] = numpy.array(2.5, "<f4")
    cases["rank1"] = base[0, 0, 0].copy()
    cases["rank6"] = base.reshape(1, 2, 3, 2, 2, 5)
    cases["empty"] = numpy.zeros((0, 3), "<f4")
    return cases


def write_npy(folder):
    folder.mkdir(exist_ok=True)
    lines = []
    expected = []

    def note(name, array):
        expected.append(array.astype("<f4").tobytes("C"))
        lines.append(" ".join([name, *map(str, array.shape)]))

    cases = arrays()
    for name, array in cases.items():
        numpy.save(folder / f"{name}.npy", array)
        note(name, array)
    for version in [(1, 0), (2, 0), (3, 0)]:
        name = f"version{version[0]}"
        with open(folder / f"{name}.npy", "wb") as file:
            npy_format.write_array(file, cases["rank1"], version=version)
        note(name, cases["rank1"])
    (folder / "expected.f32").write_bytes(b"".join(expected))
    (folder / "cases.txt").write_text("\n".join(lines) + "\n")
    numpy.savez(folder / "all_stored.npz", **cases)
    limit, zipfile.ZIP64_LIMIT = zipfile.ZIP64_LIMIT, 200  # 64-bit sizes and offsets in a small file
    numpy.savez(folder / "all_zip64.npz", **cases)
    zipfile.ZIP64_LIMIT = limit
    # Byte k as often as the k-th Fibonacci number: codes of every length up to deflate's 15 bits.
    counts = [1, 1]
    while len(counts) < 20:
        counts.append(counts[-1] + counts[-2])
    skewed = numpy.repeat(numpy.arange(20, dtype="u1"), counts)
    numpy.random.default_rng(7).shuffle(skewed)
    more = dict(cases, skewed=skewed, smooth=numpy.arange(3000, dtype="<i4").reshape(30, 100) // 7,
                zeros=numpy.zeros((40, 50), "<f4"))
    numpy.savez_compressed(folder / "all_deflated.npz", **more)


def write_safetensors(folder):
    try:
        from safetensors.numpy import save_file
    except ImportError:
        print("safetensors is not installed: its stored case is left as it is")
        return
    folder.mkdir(exist_ok=True)
    cases = {name: array.copy(order="C") for name, array in arrays().items()
             if array.dtype.byteorder != ">" and name != "empty"}
    save_file(cases, folder / "by_its_own_library.safetensors",
              metadata={"made by": "make_tensor_cases.py", "umlaut": "Knöpfe"})


if __name__ == "__main__":
    data = pathlib.Path(sys.argv[1])
    write_npy(data / "npy")
    write_safetensors(data / "safetensors")
