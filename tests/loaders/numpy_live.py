#!/usr/bin/env python3
"""The Python half of numpy_live_test.cc.

Usage: numpy_live.py FOLDER SEED

Checks with NumPy (and with the safetensors package where it is installed) the files that the test
has written into FOLDER, then writes others made from SEED for the test to read: from_numpy.npz,
from_numpy_packed.npz and N.npy, all with their float32 values in expected.npz. Prints "checked" and
what it checked with; anything else is a failure.
"""

import io
import pathlib
import sys
import zipfile

import numpy

KINDS = ["?", "u1", "i1", "<u2", ">i2", "<i4", ">u4", "<i8", ">u8", "<f2", ">f2", "<f4", ">f4", "<f8",
         ">f8"]


def check(folder):
    """NumPy and safetensors must read what leadsman wrote: element k of a tensor is k / 4 - 3."""
    used = "numpy " + numpy.__version__
    loaded = [dict(numpy.load(folder / name)) for name in ("to_numpy.npz", "to_numpy64.npz")]
    with zipfile.ZipFile(folder / "to_numpy.npz") as archive:
        assert archive.testzip() is None
    try:
        from safetensors import numpy as safetensors, safe_open, __version__
        loaded.append(safetensors.load_file(folder / "to_numpy.safetensors"))
        with safe_open(folder / "to_numpy.safetensors", "np") as file:
            assert file.metadata() == {"umlaut": "Kn\u00f6pfe"}, file.metadata()
        used += ", safetensors " + __version__
    except ImportError:
        pass
    shapes = {"scalar": (), "vector": (5,), "a/b.weight": (2, 3, 4, 5), "Kn\u00f6pfe": (1, 7),
              "empty": (0, 3)}
    for arrays in loaded:
        assert set(arrays) == set(shapes), set(arrays)
        for name, shape in shapes.items():
            values = numpy.arange(numpy.prod(shape), dtype="<f4").reshape(shape) / 4 - 3
            assert arrays[name].dtype == numpy.float32
            numpy.testing.assert_array_equal(arrays[name], values.astype("<f4"))
    single = numpy.load(folder / "to_numpy.npy")
    assert single.shape == (2, 3, 4, 5) and single.flags.c_contiguous
    return used


def random_array(generator, kind):
    shape = tuple(generator.integers(0 if generator.random() < 0.05 else 1, 6,
                                     size=generator.integers(0, 6)))
    dtype = numpy.dtype(kind)
    if dtype.kind == "f":
        array = generator.normal(size=shape) * 10.0 ** generator.integers(-8, 5)
    elif dtype.kind == "b":
        array = generator.random(size=shape) < 0.5
    else:
        info = numpy.iinfo(dtype)
        array = generator.integers(info.min, info.max, size=shape, endpoint=True,
                                   dtype=dtype.newbyteorder("="))
    array = numpy.asarray(array).astype(dtype)
    return numpy.asfortranarray(array) if generator.random() < 0.5 else array


def write(folder, seed):
    generator = numpy.random.default_rng(seed)
    arrays = {f"{i}": random_array(generator, KINDS[i % len(KINDS)]) for i in range(90)}
    # Compressible in many ways, for every kind of deflate block.
    for i in range(90, 110):
        values = generator.integers(0, 2 ** generator.integers(1, 9), size=generator.integers(1, 9000))
        arrays[f"{i}"] = numpy.repeat(values, generator.integers(1, 4)).astype("u1")
    numpy.savez(folder / "from_numpy.npz", **arrays)
    with zipfile.ZipFile(folder / "from_numpy_packed.npz", "w") as archive:
        for name, array in arrays.items():
            buffer = io.BytesIO()
            numpy.save(buffer, array)
            archive.writestr(name + ".npy", buffer.getvalue(), zipfile.ZIP_DEFLATED,
                             compresslevel=int(generator.integers(0, 10)))
    for name in list(arrays)[:30]:
        numpy.save(folder / f"{name}.npy", arrays[name])
    numpy.savez(folder / "expected.npz",
                **{name: numpy.array(array, "<f4", order="C") for name, array in arrays.items()})


if __name__ == "__main__":
    place = pathlib.Path(sys.argv[1])
    checked_with = check(place)
    write(place, int(sys.argv[2]))
    print("checked with", checked_with)
