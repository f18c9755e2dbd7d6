#!/usr/bin/env python3
"""Whole architectures against the reference library: export, run, compare every layer.

    python3 tests/conformance/conform.py --tool build/release/leadsman [--models NAME,NAME]
                                         [--size HxW] [--table FILE.md]

Weights are seeded; batch-norm statistics come from running data through, so that activations
neither vanish nor explode. For each architecture, printed as a table and returned by `conform`:
parameters (equal to torchvision's own metadata), multiply-adds, the layer nearest to its threshold
in isolated mode, and the relative L2 error of the logits from a fused run.
"""

import argparse
import dataclasses
import json
import os
import pathlib
import shutil
import subprocess
import sys
import tempfile

ROOT = pathlib.Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "loaders" / "torch"))

# The families that this version covers, smallest member of each first.
COVERED = ["resnet18", "mobilenet_v2", "vgg11", "resnet50", "vit_b_16"]


@dataclasses.dataclass
class Result:
    architecture: str
    size: str
    parameters: int
    published_parameters: int
    macs: int
    departures: list
    worst_layer: str
    worst_ratio: float
    logits_error: float


def tool_path(given=None):
    path = given or os.environ.get("LEADSMAN_TOOL") or ROOT / "build" / "release" / "leadsman"
    return str(path)


def run_json(*command):
    """The JSON that a command prints; exit code 1 (a finding) is an answer, too."""
    done = subprocess.run([str(c) for c in command], capture_output=True, text=True)
    if done.returncode not in (0, 1):
        raise RuntimeError(f"{' '.join(map(str, command))}: exit {done.returncode}: {done.stderr}")
    return json.loads(done.stdout)


def export_torchvision(name, folder, size=None):
    import leadsman_export

    arguments = ["--torchvision", name, "--seed", "1", "--out", str(folder)]
    if size:
        arguments += ["--size", size]
    code = leadsman_export.main(arguments)
    if code:
        raise RuntimeError(f"{name}: the exporter ended with {code}")


def conform(tool, name, size=None):
    import torchvision

    published = next(iter(torchvision.models.get_model_weights(name))).meta["num_params"]
    folder = pathlib.Path(tempfile.mkdtemp(prefix=f"leadsman-{name}-"))
    try:
        export_torchvision(name, folder, size)
        described = run_json(tool, "describe", folder, "--json", *(["--size", size] if size else []))
        verified = run_json(tool, "verify", folder, "--json")
    finally:
        shutil.rmtree(folder)
    infinite = float("inf")
    return Result(
        architecture=name,
        size="x".join(map(str, next(iter(described["inputs"].values()))[2:])),
        parameters=described["parameters"],
        published_parameters=published,
        macs=described["macs"],
        departures=[row["layer"] for row in verified["layers"] if row["departs"]],
        worst_layer=verified["worst_layer"],
        worst_ratio=infinite if verified["worst_ratio"] is None else verified["worst_ratio"],
        logits_error=infinite
        if verified["output_relative_l2"] is None
        else verified["output_relative_l2"],
    )


HEADER = (
    "| architecture | size | parameters | MACs | departures | layer nearest its limit "
    "| ratio to it | logits' error |\n|---|---|---:|---:|---:|---|---:|---:|"
)


def row(result):
    return (
        f"| {result.architecture} | {result.size} | {result.parameters:,} | {result.macs:,} "
        f"| {len(result.departures)} | {result.worst_layer} | {result.worst_ratio:.3f} "
        f"| {result.logits_error:.1e} |"
    )


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--tool", help="the leadsman binary (default: build/release/leadsman)")
    parser.add_argument("--models", help="names by commas (default: those covered)")
    parser.add_argument("--size", metavar="HxW", help="default: each model's own")
    parser.add_argument("--table", metavar="FILE", help="write the table there, too")
    options = parser.parse_args()
    names = options.models.split(",") if options.models else COVERED
    print(HEADER, flush=True)
    lines = [HEADER]
    bad = 0
    for name in names:
        result = conform(tool_path(options.tool), name, options.size)
        lines.append(row(result))
        print(lines[-1], flush=True)
        bad += bool(result.departures) or result.parameters != result.published_parameters
    if options.table:
        pathlib.Path(options.table).write_text("\n".join(lines) + "\n", encoding="utf-8")
    return 1 if bad else 0


if __name__ == "__main__":
    sys.exit(main())
