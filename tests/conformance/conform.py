#!/usr/bin/env python3
"""Whole architectures against the reference library: export, run, compare every layer.

    python3 tests/conformance/conform.py [--tool build/release/leadsman] [--models NAME,NAME|all]
                                         [--sizes own,HxW] [--table FILE.md]

Weights are seeded; batch-norm statistics come from running data through, so that activations
neither vanish nor explode. For each architecture and size, printed as a table and returned by
`conform`: parameters (equal to torchvision's own metadata), multiply-adds, the layer nearest to its
threshold in isolated mode, and the relative L2 error of the logits from a fused run. Each is compared
twice, with direct kernels (`--accuracy exact`) and with Winograd's (`fast`, the default): departures
and the nearest layer are those of both.
"""

import argparse
import contextlib
import dataclasses
import gc
import json
import os
import pathlib
import shutil
import subprocess
import sys
import tempfile

ROOT = pathlib.Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "loaders" / "torch"))

# A small member of each family that torchvision 0.14 lists as classifiers.
FAMILIES = [
    "alexnet", "convnext_tiny", "densenet121", "efficientnet_b0", "efficientnet_v2_s", "googlenet",
    "inception_v3", "maxvit_t", "mnasnet0_5", "mobilenet_v2", "mobilenet_v3_small",
    "regnet_x_400mf", "regnet_y_400mf", "resnet18", "resnet50", "resnext50_32x4d",
    "shufflenet_v2_x0_5", "squeezenet1_1", "swin_t", "swin_v2_t", "vgg11", "vit_b_16",
    "wide_resnet50_2",
]  # fmt: skip

# An image size that divides nothing, for architectures that take any.
ODD = "229x173"


def odd_size(name):
    """What an architecture allows beside its own size: transformers over patches want whole ones;
    MaxViT's windows divide every map."""
    if name.startswith("maxvit"):
        return "448x448"
    if name.startswith("vit_"):
        return "160x160" if name != "vit_h_14" else "238x238"
    return ODD


@dataclasses.dataclass
class Result:
    architecture: str
    size: str
    parameters: int
    published_parameters: int  # by torchvision's metadata: see check_parameters
    macs: int
    departures: list
    worst_layer: str
    worst_ratio: float
    exact_error: float  # of the logits
    fast_error: float


def tool_path(given=None):
    path = given or os.environ.get("LEADSMAN_TOOL") or ROOT / "build" / "release" / "leadsman"
    return str(path)


def run_json(*command):
    """The JSON that a command prints; exit code 1 (a finding) is an answer, too."""
    done = subprocess.run([str(c) for c in command], capture_output=True, text=True)
    if done.returncode not in (0, 1):
        raise RuntimeError(f"{' '.join(map(str, command))}: exit {done.returncode}: {done.stderr}")
    return json.loads(done.stdout)


def all_names():
    import torchvision

    return torchvision.models.list_models(module=torchvision.models)


def parse_size(text):
    return tuple(int(side) for side in text.split("x"))


@contextlib.contextmanager
def quick_initialisation():
    """Truncated normals by clamping: torch's inverse error function takes minutes for some."""
    from torch.nn import init

    def clamped(tensor, mean=0.0, std=1.0, a=-2.0, b=2.0):
        init.normal_(tensor, mean, std).detach().clamp_(a, b)
        return tensor

    slow, init.trunc_normal_ = init.trunc_normal_, clamped
    try:
        yield
    finally:
        init.trunc_normal_ = slow


def export_torchvision(name, folder, size=None):
    """Writes the bundle; returns how many parameters its graph should have."""
    import leadsman_export

    size = size and parse_size(size)
    with quick_initialisation():
        module, preprocess = leadsman_export.torchvision_model(name, size, seed=1)
    leadsman_export.settle(module, preprocess["crop"], seed=1)
    example = leadsman_export.picture_like(1, *preprocess["crop"], seed=2)
    summary = leadsman_export.export(module, example, folder, preprocess=preprocess, name=name)
    if size is None or not name.startswith("vit_"):  # which has a position for each patch
        check_parameters(name, module, summary)
    return summary["parameters"]


def check_parameters(name, module, summary):
    """The module's parameters are those of the metadata; the graph has all of them but auxiliary
    heads of training and networks that compute a table from nothing else (Liu et al. 2022)."""
    import torchvision

    sizes = {n: p.numel() for n, p in module.named_parameters()}
    published = next(iter(torchvision.models.get_model_weights(name))).meta["num_params"]
    if sum(sizes.values()) != published:
        raise RuntimeError(f"{name} has {sum(sizes.values())} parameters, published: {published}")
    unused = [n for n in summary["unused"] if n in sizes]
    inexplicable = [n for n in unused if "aux" not in n.lower() and not summary["computed"]]
    used = published - sum(sizes[n] for n in unused)
    if inexplicable or (summary["parameters"] != used and not summary["computed"]):
        raise RuntimeError(f"{name}: {summary['parameters']} of {used} parameters are in the graph")


def conform(tool, name, size=None):
    folder = pathlib.Path(tempfile.mkdtemp(prefix=f"leadsman-{name}-"))
    try:
        expected = export_torchvision(name, folder, size)
        gc.collect()  # a traced module is full of cycles, and may be of gigabytes
        at_size = ["--size", size] if size else []
        described = run_json(tool, "describe", folder, "--json", *at_size)
        exact, fast = (
            run_json(tool, "verify", folder, "--json", "--accuracy", accuracy)
            for accuracy in ("exact", "fast")
        )
    finally:
        shutil.rmtree(folder)
    nearest = max((exact, fast), key=lambda verified: finite(verified["worst_ratio"]))
    return Result(
        architecture=name,
        size="x".join(map(str, next(iter(described["inputs"].values()))[2:])),
        parameters=described["parameters"],
        published_parameters=expected,
        macs=described["macs"],
        departures=[row["layer"] for v in (exact, fast) for row in v["layers"] if row["departs"]],
        worst_layer=nearest["worst_layer"],
        worst_ratio=finite(nearest["worst_ratio"]),
        exact_error=finite(exact["output_relative_l2"]),
        fast_error=finite(fast["output_relative_l2"]),
    )


def finite(number):
    """JSON has no infinity: null stands for it."""
    return float("inf") if number is None else number


HEADER = (
    "| architecture | size | parameters | MACs | departures | layer nearest its limit "
    "| ratio to it | logits' error, exact | fast |\n|---|---|---:|---:|---:|---|---:|---:|---:|"
)


# What the logits may be off by: with direct kernels, and with Winograd's.
EXACT_LIMIT, FAST_LIMIT = 2e-5, 2e-4


def conforms(result):
    return (
        not result.departures
        and result.parameters == result.published_parameters
        and result.exact_error < EXACT_LIMIT
        and result.fast_error < FAST_LIMIT
    )


def row(result):
    return (
        f"| {result.architecture} | {result.size} | {result.parameters:,} | {result.macs:,} "
        f"| {len(result.departures)} | {result.worst_layer} | {result.worst_ratio:.3f} "
        f"| {result.exact_error:.1e} | {result.fast_error:.1e} |"
    )


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--tool", help="the leadsman binary (default: build/release/leadsman)")
    parser.add_argument("--models", help="names by commas, or all (default: one of each family)")
    parser.add_argument(
        "--sizes", default="own", metavar="SIZES",
        help="own, odd or HxW, by commas (default: own; odd is another size for each model)",
    )  # fmt: skip
    parser.add_argument("--table", metavar="FILE", help="write the table there, too")
    options = parser.parse_args()
    names = all_names() if options.models == "all" else (options.models or "").split(",")
    names = names if options.models else FAMILIES
    print(HEADER, flush=True)
    lines = [HEADER]
    bad = 0
    for word in options.sizes.split(","):
        for name in names:
            size = {"own": None, "odd": odd_size(name)}.get(word, word)
            result = conform(tool_path(options.tool), name, size)
            lines.append(row(result))
            print(lines[-1], flush=True)
            bad += not conforms(result)
            if options.table:
                pathlib.Path(options.table).write_text("\n".join(lines) + "\n", encoding="utf-8")
    return 1 if bad else 0


if __name__ == "__main__":
    sys.exit(main())
