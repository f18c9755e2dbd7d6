#!/usr/bin/env python3
"""Writes the tables that the operator tests compare with: numbers by other libraries.

Usage: make_tables.py > tests/ops/tables.h        (SciPy and NumPy; figures of SciPy 1.10.1)

Also prints, with --fit, the rational function of ops/simd/math-inl.h (normal_tail).
"""

import sys

import numpy
import scipy
from scipy.signal import correlate2d
from scipy.special import erf, erfcx


def array(name, values, kind="double", digits=17):
    text = ", ".join(f"{float(v):.{digits}g}" for v in numpy.ravel(values))
    return f"inline constexpr {kind} {name}[] = {{{text}}};\n"


def floats(name, values):
    text = ", ".join(f"{float(v):.9g}".rstrip(".") for v in numpy.ravel(values))
    text = ", ".join(t + ("F" if "." in t or "e" in t else ".0F") for t in text.split(", "))
    return f"inline constexpr float {name}[] = {{{text}}};\n"


def tables():
    out = [
        "// Numbers by other libraries; written by tests/ops/make_tables.py\n"
        f"// (SciPy {scipy.__version__}, NumPy {numpy.__version__}).\n"
        "#pragma once\n\nnamespace leadsman::testing {\n\n"
    ]
    x = numpy.concatenate([numpy.linspace(-6, 6, 49), [-1e-3, 1e-3, -1e-6, 12.0]]).astype(numpy.float32)
    exact = x.astype(numpy.float64)
    out.append("// x * (1 + erf(x / sqrt 2)) / 2 by scipy.special.erf. Below -3 the formula cancels in\n"
               "// double too: absolute errors of some 1e-16.\n")
    out.append(floats("kGeluInput", x))
    out.append(array("kGelu", 0.5 * exact * (1.0 + erf(exact / numpy.sqrt(2.0)))))

    random = numpy.random.default_rng(7)
    image = random.integers(-8, 9, (2, 3, 6, 7)).astype(numpy.float32) / 4
    weight = random.integers(-8, 9, (4, 3, 3, 2)).astype(numpy.float32) / 8
    result = numpy.zeros((2, 4, 4, 6))
    for n in range(2):
        for o in range(4):
            for c in range(3):
                result[n, o] += correlate2d(image[n, c].astype(float), weight[o, c].astype(float), mode="valid")
    out.append("\n// Image [2, 3, 6, 7], weight [4, 3, 3, 2], no padding, by scipy.signal.correlate2d; small\n"
               "// fractions of powers of two, so that the sums are exact in float.\n")
    out.append(floats("kCorrelationImage", image))
    out.append(floats("kCorrelationWeight", weight))
    out.append(floats("kCorrelation", result))
    out.append("\n}  // namespace leadsman::testing\n")
    return "".join(out)


def fit_tail(top=4, bottom=5, end=14.5, samples=4000, rounds=60):
    """exp(t^2/2) Phi(-t) = erfcx(t / sqrt 2) / 2 as P/Q on [0, end], relative error minimised."""
    t = end * ((1 - numpy.cos(numpy.linspace(0, numpy.pi, samples))) / 2) ** 2
    f = 0.5 * erfcx(t / numpy.sqrt(2))
    weight = numpy.ones(samples)
    q = numpy.ones(samples)
    best = None
    for _ in range(rounds):
        s = numpy.sqrt(weight) / (f * q)
        matrix = numpy.concatenate(
            [numpy.vander(t, top + 1, increasing=True) * s[:, None],
             -(numpy.vander(t, bottom + 1, increasing=True)[:, 1:] * (f * s)[:, None])], axis=1)
        size = numpy.abs(matrix).max(0)
        c = numpy.linalg.lstsq(matrix / size, f * s, rcond=None)[0] / size
        p = numpy.polyval(c[: top + 1][::-1], t)
        q = numpy.polyval(numpy.r_[1, c[top + 1:]][::-1], t)
        error = numpy.abs(p / q / f - 1)
        if best is None or error.max() < best[0]:
            best = (error.max(), c[: top + 1], numpy.r_[1, c[top + 1:]])
        weight *= 0.3 + error / error.max()
        weight /= weight.mean()
    return best


if __name__ == "__main__":
    if "--fit" in sys.argv:
        error, p, q = fit_tail()
        print(f"relative error {error:.2g}\nP {[f'{v:.8g}' for v in p]}\nQ {[f'{v:.8g}' for v in q]}")
    else:
        print(tables(), end="")
