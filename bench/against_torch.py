#!/usr/bin/env python3
"""Times leadsman and PyTorch on the same models, weights and inputs, in turns.

    python3 bench/against_torch.py --leadsman BINARY [--models NAME,NAME] [--threads 1,2]
            [--size HxW] [--batch N] [--rounds N] [--json FILE] [--python PYTHON] [-- OPTION...]

Models are torchvision's classifiers, vit_s_16, buttons-conv and buttons-vit. Each is exported;
for each number of threads, both sides compute one input and must agree; PyTorch is tried in
every form (torch_peer.py) with every BLAS at hand, and its fastest one competes; then the two run
in turns, A B A B. Each side is a process of its own, with its start-up left out. `ratio` is ours /
theirs of the medians: below 1, ours is faster. Options behind -- go to `leadsman time`.
"""

import argparse
import glob
import json
import os
import pathlib
import platform
import statistics
import subprocess
import sys
import tempfile
import time

HERE = pathlib.Path(__file__).resolve().parent
MODELS = ["resnet18", "resnet50", "vgg16", "mobilenet_v2", "vit_b_16", "buttons-conv", "buttons-vit"]
AGREEMENT = 2e-4  # of the outputs' relative L2 difference
TURN_SECONDS = 0.25
SEARCH_SECONDS = 0.8  # of one form, while the fastest one is looked for
REST_SECONDS = 0.02  # idle threads of either side stop spinning meanwhile


class Side:
    """A process that answers each line by a line of JSON."""

    def __init__(self, command, environment=None):
        self.process = subprocess.Popen(
            [str(part) for part in command],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
            env={**os.environ, **(environment or {})},
        )
        self.facts = self.answer()

    def answer(self):
        line = self.process.stdout.readline()
        if not line:
            sys.exit(f"{' '.join(self.process.args[:3])} ended with {self.process.wait()}")
        return json.loads(line)

    def ask(self, request):
        self.process.stdin.write(request + "\n")
        self.process.stdin.flush()
        return self.answer()

    def close(self):
        self.process.stdin.close()
        self.process.wait()


def peer_settings(threads):
    """Environments worth trying. Debian's torch takes matrix products from whichever BLAS the
    system has, perhaps the plain one; one with threads of its own may be better off with a single
    one beside those of OpenMP."""
    base = {"OMP_NUM_THREADS": str(threads), "OPENBLAS_NUM_THREADS": str(threads)}
    settings = [base]
    for library in sorted(glob.glob("/usr/lib/*/openblas-*/libopenblas.so.0")):
        settings.append({**base, "LD_PRELOAD": library})
        if threads > 1:
            settings.append({**base, "LD_PRELOAD": library, "OPENBLAS_NUM_THREADS": "1"})
    return settings


def fastest_peer(command, threads):
    """(side, form, its settings, what the others took)."""
    best = None
    tried = []
    for settings in peer_settings(threads):
        side = Side(command, settings)
        for form in side.facts["forms"]:
            seconds = side.ask(f"run {form} 1")["seconds"][0]
            if best is None or seconds < 2 * best[0]:
                count = max(3, min(9, round(SEARCH_SECONDS / seconds)))
                seconds = statistics.median(side.ask(f"run {form} {count}")["seconds"])
            tried.append({"form": form, "settings": settings, "ms": seconds * 1e3})
            if best is None or seconds < best[0]:
                best = (seconds, settings, form)
        side.close()
    _, settings, form = best
    return Side(command, settings), form, settings, tried


def runs_a_turn(seconds):
    return max(1, min(200, round(TURN_SECONDS / seconds)))


class Prepared:
    """A model's bundle, state dict and input in a folder that goes away at the end."""

    def __init__(self, python, model, size=None, batch=1):
        self.model, self.batch = model, batch
        self.peer = [python, HERE / "torch_peer.py"]
        self.holder = tempfile.TemporaryDirectory(prefix="leadsman-bench-")
        self.folder = pathlib.Path(self.holder.name)
        self.bundle = self.folder / "bundle"
        sized = ["--size", size] if size else []
        prepared = subprocess.run(
            [*self.peer, "prepare", model, self.folder, "--batch", str(batch), *sized],
            check=True,
            stdout=subprocess.PIPE,
            text=True,
        )
        self.size = json.loads(prepared.stdout.splitlines()[-1])["size"]

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.holder.cleanup()


def duel(leadsman, prepared, threads, rounds, rest=()):
    theirs, form, settings, tried = fastest_peer(
        [*prepared.peer, "turns", prepared.model, prepared.folder, "--threads", threads], threads
    )
    outputs = prepared.folder / "ours.npz"
    ours = Side(
        [leadsman, "time", prepared.bundle, "--threads", threads, "--turns", "--out", outputs]
        + ["--tensor", prepared.folder / "input.npy", *rest]
    )
    agreement = theirs.ask(f"check {form} {outputs}")
    if not agreement["relative_l2"] <= AGREEMENT:
        sys.exit(f"{prepared.model}: the outputs differ: {agreement}")
    requests = {
        "ours": lambda count: ours.ask(str(count)),
        "torch": lambda count: theirs.ask(f"run {form} {count}"),
    }
    counts = {side: runs_a_turn(min(ask(2)["seconds"])) for side, ask in requests.items()}
    seconds = {side: [] for side in requests}
    for _ in range(rounds):
        for side, ask in requests.items():
            time.sleep(REST_SECONDS)
            seconds[side] += ask(counts[side])["seconds"]
    ours.close()
    theirs.close()
    median = {side: statistics.median(values) for side, values in seconds.items()}
    gflops = 2e-9 * ours.facts["macs"] / median["ours"]
    return {
        "model": prepared.model,
        "threads": threads,
        "size": prepared.size,
        "batch": prepared.batch,
        "ours_ms": median["ours"] * 1e3,
        "torch_ms": median["torch"] * 1e3,
        "ratio": median["ours"] / median["torch"],
        "gflops": gflops,
        "peak_fraction": gflops / ours.facts["peak_gflops"],
        "ours_best_ms": min(seconds["ours"]) * 1e3,
        "torch_best_ms": min(seconds["torch"]) * 1e3,
        "ours_runs": len(seconds["ours"]),
        "torch_runs": len(seconds["torch"]),
        "agreement": agreement,
        "peak_gflops": ours.facts["peak_gflops"],
        "instruction_set": ours.facts["instruction_set"],
        "torch": {**theirs.facts, "form": form, "settings": settings, "tried": tried},
    }


def processor():
    with open("/proc/cpuinfo", encoding="utf-8") as file:
        for line in file:
            if line.startswith("model name"):
                return line.split(":", 1)[1].strip()
    return platform.processor() or platform.machine()


HEADER = (
    "| model | size | threads | ours, ms (best) | torch, ms (best) | ratio | GFLOP/s | of peak "
    "| torch's form |\n|---|---|--:|--:|--:|--:|--:|--:|---|"
)


def row(r):
    size = r["size"] if r["batch"] == 1 else f"{r['batch']} of {r['size']}"
    return (
        f"| {r['model']} | {size} | {r['threads']} | {r['ours_ms']:.2f} ({r['ours_best_ms']:.2f}) "
        f"| {r['torch_ms']:.2f} ({r['torch_best_ms']:.2f}) | {r['ratio']:.2f} | {r['gflops']:.0f} "
        f"| {r['peak_fraction']:.2f} | {r['torch']['form']} |"
    )


def main():
    arguments = sys.argv[1:]
    split = arguments.index("--") if "--" in arguments else len(arguments)
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--leadsman", required=True, metavar="BINARY")
    parser.add_argument("--models", default=",".join(MODELS), metavar="NAME,...")
    parser.add_argument("--threads", default="1,2", metavar="N,...")
    parser.add_argument("--size", metavar="HxW", help="default: each model's own")
    parser.add_argument("--batch", type=int, default=1, metavar="N")
    parser.add_argument("--rounds", type=int, default=15, metavar="N")
    parser.add_argument("--json", metavar="FILE")
    parser.add_argument("--python", default="/usr/bin/python3", help="the one that has torch")
    options = parser.parse_args(arguments[:split])
    options.rest = arguments[split + 1 :]
    report = {
        "processor": processor(),
        "cpus": len(os.sched_getaffinity(0)),
        "date": time.strftime("%Y-%m-%d"),
        "command": " ".join(["bench/against_torch.py", *arguments]),
        "results": [],
    }
    print(HEADER, flush=True)
    for model in options.models.split(","):
        with Prepared(options.python, model, options.size, options.batch) as prepared:
            for threads in options.threads.split(","):
                result = duel(
                    options.leadsman, prepared, int(threads), options.rounds, options.rest
                )
                report["results"].append(result)
                print(row(result), flush=True)
                if options.json:
                    pathlib.Path(options.json).write_text(json.dumps(report, indent=1) + "\n")


if __name__ == "__main__":
    main()
