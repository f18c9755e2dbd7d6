#!/usr/bin/env python3
"""Writes bench/RESULTS.md: leadsman and PyTorch in turns on every model that the table names.

    python3 bench/results.py [--leadsman BINARY] [--rounds N] [--models NAME,NAME] [--threads 1,2]
            [--batch N] [--sizes HxW,HxW] [--out FILE] [--json FILE] [--python PYTHON]

Figures are against_torch.py's; where time goes is `leadsman time --profile` on the same bundle.
What follows the line KEPT_FROM in the file is written by hand and stays. --batch and --sizes add
rows behind those of single pictures at each model's own size.
"""

import argparse
import json
import os
import pathlib
import subprocess
import sys
import time

HERE = pathlib.Path(__file__).resolve().parent
sys.path.insert(0, str(HERE))

import against_torch  # noqa: E402  (found through the line above)

# What each row is to reach: ratio to PyTorch with 1 and 2 threads, share of the peak with 2.
AIMS = {
    "resnet18": (0.50, 0.50, 1.70),
    "resnet50": (0.72, 0.72, 1.15),
    "vgg16": (0.45, 0.45, 2.0),
    "mobilenet_v2": (0.75, 0.65, 0.70),
    "mobilenet_v3_large": (0.65, 0.55, None),
    "efficientnet_b0": (0.60, 0.55, None),
    "convnext_tiny": (0.72, 0.72, 0.88),
    "vit_s_16": (0.88, 0.88, 0.91),
    "vit_b_16": (0.88, 0.88, 0.91),
    "swin_t": (0.60, 0.60, None),
    "densenet121": (0.70, 0.65, None),
    "regnet_y_1_6gf": (0.70, 0.65, None),
    "shufflenet_v2_x1_0": (0.70, 0.65, None),
    "buttons-conv": (0.10, 0.10, None),
    "buttons-vit": (0.10, 0.10, None),
}
KEPT_FROM = "## What was tried"
PROFILED_SECONDS = 1.5


def profile(leadsman, bundle, size, threads, seconds):
    """Share of each kernel in the best times of a run's steps, largest first."""
    runs = max(5, min(200, round(PROFILED_SECONDS / seconds)))
    command = [leadsman, "time", bundle, "--threads", threads, "--size", size, "--runs", runs]
    command += ["--profile", "--json"]
    printed = subprocess.run(
        [str(part) for part in command], check=True, stdout=subprocess.PIPE, text=True
    ).stdout
    report = json.loads(printed)
    kernels = {"input": report["input_seconds"]}
    for step in report["steps"]:
        name = f"{step['operator']}/{step['kernel']}"
        kernels[name] = kernels.get(name, 0.0) + step["seconds"]
    whole = sum(kernels.values())
    shares = sorted(((value / whole, name) for name, value in kernels.items()), reverse=True)
    return [{"kernel": name, "share": share} for share, name in shares]


def measure(options, model, size, batch, aims):
    results = []
    with against_torch.Prepared(options.python, model, size, batch) as prepared:
        for threads in options.threads.split(","):
            result = against_torch.duel(
                options.leadsman, prepared, int(threads), options.rounds
            )
            result["aims"] = aims
            if batch == 1:
                result["profile"] = profile(
                    options.leadsman, prepared.bundle, prepared.size, threads,
                    result["ours_ms"] * 1e-3,
                )
            print(against_torch.row(result), flush=True)
            results.append(result)
    return results


def aimed(result):
    """(ratio, share of the peak) that the row is to reach; None where nothing is asked."""
    if not result["aims"] or result["threads"] not in (1, 2):
        return None, None
    one, two, share = result["aims"]
    return (one, None) if result["threads"] == 1 else (two, share)


def falls_short(result):
    ratio, share = aimed(result)
    late = ratio is not None and result["ratio"] > ratio
    return late or (share is not None and result["peak_fraction"] < share)


def number(value):
    return "" if value is None else f"{value:.2f}"


TABLE = (
    "| model | size | threads | ours, ms (best) | torch, ms (best) | ratio | aim | GFLOP/s "
    "| of peak | aim | torch's form, BLAS threads |\n"
    "|---|---|--:|--:|--:|--:|--:|--:|--:|--:|---|"
)


def blas_threads(torch):
    library = torch["settings"].get("LD_PRELOAD", "")
    named = pathlib.Path(library).parent.name if library else "as installed"
    return f"{torch['form']}, {torch['settings']['OPENBLAS_NUM_THREADS']} ({named})"


def table_row(r):
    size = r["size"] if r["batch"] == 1 else f"{r['batch']} of {r['size']}"
    ratio, share = aimed(r)
    mark = "**" if falls_short(r) else ""
    return (
        f"| {mark}{r['model']}{mark} | {size} | {r['threads']} "
        f"| {r['ours_ms']:.2f} ({r['ours_best_ms']:.2f}) "
        f"| {r['torch_ms']:.2f} ({r['torch_best_ms']:.2f}) "
        f"| {r['ratio']:.2f} | {number(ratio)} | {r['gflops']:.0f} "
        f"| {r['peak_fraction']:.2f} | {number(share)} | {blas_threads(r['torch'])} |"
    )


def profile_row(r):
    parts = [f"{p['kernel']} {100 * p['share']:.0f} %" for p in r["profile"] if p["share"] >= 0.02]
    return f"| {r['model']} | {r['threads']} | {', '.join(parts)} |"


def markdown(report):
    results = report["results"]
    peaks = {}
    for r in results:
        peaks.setdefault(r["threads"], []).append(r["peak_gflops"])
    measured = ", ".join(
        f"{min(values):.0f} to {max(values):.0f} GFLOP/s with {threads} "
        f"thread{'s' if threads > 1 else ''}"
        for threads, values in sorted(peaks.items())
    )
    short = [r for r in results if falls_short(r)]
    lines = [
        "# Speed",
        "",
        f"Written by `{report['command']}`; what follows \"{KEPT_FROM[3:]}\" is by hand.",
        "",
        f"- Date: {report['date']}. Processor: {report['processor']}, {report['cpus']} CPUs, "
        f"{results[0]['instruction_set']}; load before: {report['load']}.",
        f"- leadsman {report['leadsman']}; PyTorch {results[0]['torch']['torch']}.",
        f"- FP32 peak, measured at the start of each row: {measured}. `of peak` counts the "
        "multiply-adds of direct sums, so minimal filtering goes above 1.",
        f"- Times are medians (and the best) of {report['rounds']} rounds in turns, A B A B, each "
        f"of about {against_torch.TURN_SECONDS} s; `ratio` is ours / torch's of the medians. Both "
        "sides gave the same outputs first (relative L2 difference below "
        f"{against_torch.AGREEMENT}).",
        "- Set for PyTorch: `OMP_NUM_THREADS` and `torch.set_num_threads` to the threads, "
        "`OPENBLAS_NUM_THREADS` to the threads or to 1, each OpenBLAS that is installed by "
        "`LD_PRELOAD`, and each form (eager, channels last, traced and optimized for inference, "
        "both): the fastest of all, which the last column names, competes.",
        "",
        TABLE,
        *[table_row(r) for r in results],
        "",
        "Bold rows fall short of their aim." if short else "Every row reaches its aim.",
        "",
        "## Where the time goes",
        "",
        "Shares of the sum of the best times of all steps.",
        "",
        "| model | threads | kernels |",
        "|---|--:|---|",
        *[profile_row(r) for r in results if "profile" in r],
        "",
    ]
    return "\n".join(lines)


def kept_text(file):
    text = file.read_text(encoding="utf-8") if file.exists() else ""
    at = text.find(f"\n{KEPT_FROM}\n")
    return text[at:] if at >= 0 else f"\n{KEPT_FROM}\n"


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--leadsman", default="build/release/leadsman", metavar="BINARY")
    parser.add_argument("--models", default=",".join(AIMS), metavar="NAME,...")
    parser.add_argument("--threads", default="1,2", metavar="N,...")
    parser.add_argument("--rounds", type=int, default=15, metavar="N")
    parser.add_argument("--batch", type=int, metavar="N", help="also with N pictures a run")
    parser.add_argument("--sizes", default="", metavar="HxW,...", help="also at these sizes")
    parser.add_argument("--out", type=pathlib.Path, default=HERE / "RESULTS.md", metavar="FILE")
    parser.add_argument("--json", type=pathlib.Path, metavar="FILE")
    parser.add_argument("--python", default="/usr/bin/python3", help="the one that has torch")
    options = parser.parse_args()
    report = {
        "processor": against_torch.processor(),
        "cpus": len(os.sched_getaffinity(0)),
        "load": f"{os.getloadavg()[0]:.1f}",
        "date": time.strftime("%Y-%m-%d"),
        "command": " ".join(["python3 bench/results.py", *sys.argv[1:]]),
        "rounds": options.rounds,
        "leadsman": subprocess.run(
            [options.leadsman, "--version"], check=True, stdout=subprocess.PIPE, text=True
        ).stdout.split()[-1],
        "results": [],
    }
    models = options.models.split(",")
    rows = [(model, None, 1, AIMS.get(model)) for model in models]
    rows += [(model, size, 1, None) for size in options.sizes.split(",") if size for model in models]
    rows += [(model, None, options.batch, None) for model in models if options.batch]
    print(against_torch.HEADER, flush=True)
    for row in rows:
        report["results"] += measure(options, *row)
        if options.json:
            options.json.write_text(json.dumps(report, indent=1) + "\n", encoding="utf-8")
    text = markdown(report) + kept_text(options.out)
    options.out.write_text(text, encoding="utf-8")


if __name__ == "__main__":
    main()
