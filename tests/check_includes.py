#!/usr/bin/env python3
"""Checks that includes follow the architecture's one direction, and that files stay short.

    core <- ops <- engine <- {loaders, observe, measure} <- cli

Usage: check_includes.py [--root FOLDER] | --self-test

Prints one line a fault, as FILE:LINE: MESSAGE, and ends with 1 when there is one.
"""

import argparse
import pathlib
import re
import sys
import tempfile

# Rooms of the library, and those whose headers each may include.
ROOMS = {
    "core": {"core"},
    "ops": {"core", "ops"},
    "engine": {"core", "ops", "engine"},
    "loaders": {"core", "ops", "engine", "loaders"},
    "observe": {"observe"},
    "measure": {"core", "measure"},  # threads for the bandwidth of all cores
}
# Rooms whose public headers each may include, where that differs from ROOMS.
PUBLIC = {
    "observe": {"core", "engine", "observe"},
    "measure": {"core", "engine", "measure"},
    "cli": {"core", "engine", "loaders", "observe", "measure"},
    "examples": {"core", "engine", "loaders", "observe", "measure"},
}
# Single headers beyond that, with the reason: maps are drawn over pictures and are pictures; a
# picture's way to the input is compared as layers are.
EXCEPTIONS = {("observe", "picture"), ("observe", "preprocess")}
# The room that each public header include/leadsman/NAME.h belongs to.
HEADERS = {
    "core": ["attributes", "error", "names", "shape", "tensor", "version"],
    "engine": ["graph", "hooks", "plan", "profile", "runner"],
    "loaders": ["architectures", "bundle", "picture", "preprocess", "tensor_file"],
    "observe": ["capture", "compare", "compare_picture", "maps"],
    "measure": ["board", "growth", "statistics", "sweep", "sweep_report"],
}
ROOM_OF_HEADER = {name: room for room, names in HEADERS.items() for name in names}

# Libraries of others: what the include begins with, and where alone it may stand.
LIBRARIES = {
    "thread": ["core/threads.cc", "tests/"],
    "hwy/": ["ops/simd/", "tests/ops/simd/"],
    "CLI/": ["cli/"],
    "nlohmann/": ["loaders/", "observe/", "measure/", "cli/", "examples/", "tests/", "bench/"],
    "stb/": ["loaders/"],
    "gtest/": ["tests/"],
    "gmock/": ["tests/"],
    "benchmark/": ["bench/"],
}
# Tests and benchmarks may look inside every room.
FREE_ROOMS = {"tests", "bench"}

MOST_LINES = 450
# Files that may be longer, each with the reason.
LONG_FILES = {
    # One file that a user copies beside a training script; its sections are its rooms.
    "loaders/torch/leadsman_export.py",
    "tests/loaders/torch/test_export.py",
}
SUFFIXES = {".cc", ".h", ".py", ".sh", ".cmake", ".in"}
SKIPPED = {".git", "build", "out", "__pycache__", ".cache"}

INCLUDE = re.compile(r'^\s*#\s*include\s*([<"])([^>"]+)[>"]')


def source_files(root):
    for path in sorted(root.rglob("*")):
        parts = path.relative_to(root).parts
        if path.suffix in SUFFIXES and path.is_file() and not SKIPPED.intersection(parts):
            yield path


def library_fault(name, where):
    for prefix, places in LIBRARIES.items():
        if name.startswith(prefix) and not any(where.startswith(place) for place in places):
            return f"<{name}> belongs to {' and '.join(places)} alone"
    return None


def room_fault(name, room, public_header):
    """Why a file of `room` may not include `name`; None when it may."""
    first = name.split("/")[0]
    if first == "leadsman":
        stem = name[len("leadsman/") :].removesuffix(".h")
        owner = ROOM_OF_HEADER.get(stem)
        if owner is None:
            return f"{name} is in no room: add it to HEADERS in check_includes.py"
        if room in FREE_ROOMS or (room, stem) in EXCEPTIONS or owner in PUBLIC.get(room, ROOMS.get(room, ())):
            return None
        return f"{room} may not include {name}, a header of {owner}"
    if first not in ROOMS and first != "cli":
        return None
    if public_header:
        return f"a public header may not include {name}, which is not installed"
    if room in FREE_ROOMS or first == room or first in ROOMS.get(room, ()):
        return None
    return f"{room} may not include {name}, a header of {first}"


def check_file(root, path, report):
    where = path.relative_to(root).as_posix()
    lines = path.read_text(encoding="utf-8").splitlines()
    if len(lines) > MOST_LINES and where not in LONG_FILES:
        report(where, len(lines), f"longer than {MOST_LINES} lines: is it still one room?")
    if path.suffix not in {".cc", ".h"}:
        return
    public_header = where.startswith("include/leadsman/")
    room = ROOM_OF_HEADER.get(path.stem) if public_header else where.split("/")[0]
    if room is None:
        report(where, 1, "is in no room: add it to HEADERS in check_includes.py")
        return
    for number, line in enumerate(lines, 1):
        match = INCLUDE.match(line)
        if not match:
            continue
        name = match.group(2)
        fault = library_fault(name, where) or room_fault(name, room, public_header)
        if fault:
            report(where, number, fault)


def check(root):
    faults = []

    def report(where, line, message):
        faults.append(f"{where}:{line}: {message}")

    for path in source_files(root):
        check_file(root, path, report)
    return faults


def self_test():
    """Each wrong file is found, each right one is not."""
    wrong = {
        "core/a.cc": '#include "ops/operator.h"\n',
        "ops/b.cc": '#include "leadsman/plan.h"\n',
        "ops/add/b.cc": "#include <hwy/highway.h>\n",
        "engine/c.cc": "#include <thread>\n",
        "engine/c2.cc": '#include "leadsman/bundle.h"\n',
        "loaders/d.cc": '#include "leadsman/compare.h"\n',
        "loaders/d2.cc": '#include "observe/threshold.h"\n',
        "observe/e.cc": '#include "ops/operator.h"\n',
        "observe/e2.cc": '#include "leadsman/bundle.h"\n',
        "measure/i.cc": '#include "engine/plan_state.h"\n',
        "measure/i2.cc": '#include "leadsman/bundle.h"\n',
        "observe/e3.cc": '#include "engine/plan_state.h"\n',
        "cli/f.cc": '#include "core/threads.h"\n',
        "examples/embed/g.cc": '#include "engine/plan_state.h"\n',
        "include/leadsman/tensor.h": '#include "leadsman/graph.h"\n',
        "include/leadsman/graph.h": '#include "ops/operator.h"\n',
        "include/leadsman/runner.h": "  #  include <nlohmann/json.hpp>\n",
        "include/leadsman/unheard_of.h": "#include <vector>\n",
        "cli/h.cc": "#include <leadsman/unheard_of.h>\n",
        "core/long.cc": "\n" * (MOST_LINES + 1),
    }
    right = {
        "core/threads.cc": "#include <thread>\n#include <vector>\n",
        "ops/simd/a.cc": '#include "hwy/highway.h"\n#include "ops/operator.h"\n',
        "engine/a.cc": '#include "core/threads.h"\n#include "ops/operator.h"\n',
        "loaders/a.cc": '#include "leadsman/graph.h"\n#include <stb/stb_image.h>\n',
        "observe/a.cc": '#include "leadsman/runner.h"\n#include "observe/threshold.h"\n',
        "measure/a.cc": '#include "core/threads.h"\n#include "leadsman/plan.h"\n',
        "observe/b.cc": '#include "leadsman/picture.h"\n',
        "cli/a.cc": '#include "leadsman/bundle.h"\n#include "options.h"\n#include <CLI/CLI.hpp>\n',
        "tests/engine/a.cc": '#include "engine/plan_state.h"\n#include <gtest/gtest.h>\n',
        "include/leadsman/plan.h": '#include "leadsman/tensor.h"\n',
        "build/x/core/a.cc": '#include "cli/options.h"\n',
    }
    with tempfile.TemporaryDirectory() as folder:
        root = pathlib.Path(folder)
        for name, text in {**wrong, **right}.items():
            path = root / name
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_text(text, encoding="utf-8")
        found = [fault.split(":")[0] for fault in check(root)]
    missed = sorted(set(wrong) - set(found))
    false_alarms = sorted(set(found) - set(wrong))
    for name in missed:
        print(f"self-test: the fault in {name} was not found")
    for name in false_alarms:
        print(f"self-test: {name} is right, yet a fault was found")
    return not missed and not false_alarms


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument(
        "--root", type=pathlib.Path, default=pathlib.Path(__file__).resolve().parent.parent
    )
    parser.add_argument("--self-test", action="store_true")
    arguments = parser.parse_args()
    if arguments.self_test:
        return 0 if self_test() else 1
    faults = check(arguments.root)
    for fault in faults:
        print(fault)
    return 1 if faults else 0


if __name__ == "__main__":
    sys.exit(main())
