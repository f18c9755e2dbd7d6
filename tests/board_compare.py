#!/usr/bin/env python3
"""Classifies the same pictures with this machine's tool and, under emulation, with the Arm tool.

The first labels must be the same, and every class's probability within the threshold: float32
sums in another order differ by some 1e-6 of their size, and a softmax passes on a difference of
its scores at most a quarter as large, so 1e-4 leaves room for a network's depth and for nothing
else.
"""

import argparse
import json
import subprocess
import sys

THRESHOLD = 1e-4
EMULATOR = ["qemu-aarch64-static", "-cpu", "cortex-a53"]


def classify(command, bundle, pictures):
    command = [*command, "classify", bundle, *pictures, "--top", "1000", "--json"]
    output = subprocess.run(command, check=True, stdout=subprocess.PIPE, text=True).stdout
    return [json.loads(line) for line in output.splitlines()]


def largest_difference(host, board):
    """Over the classes of one picture."""
    ours = {answer["index"]: answer["probability"] for answer in host["top"]}
    theirs = {answer["index"]: answer["probability"] for answer in board["top"]}
    if ours.keys() != theirs.keys():
        raise SystemExit(f"{host['picture']}: the two name different classes")
    return max(abs(ours[index] - theirs[index]) for index in ours)


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--bundle", required=True)
    parser.add_argument("--host", required=True, help="this machine's tool")
    parser.add_argument("--board", required=True, help="the Arm tool")
    parser.add_argument("pictures", nargs="+")
    arguments = parser.parse_args()

    host = classify([arguments.host], arguments.bundle, arguments.pictures)
    board = classify([*EMULATOR, arguments.board], arguments.bundle, arguments.pictures)
    if not host or [line["picture"] for line in host] != [line["picture"] for line in board]:
        print("the two tools did not classify the same pictures")
        return 1
    worst = 0.0
    faults = 0
    for ours, theirs in zip(host, board):
        difference = largest_difference(ours, theirs)
        worst = max(worst, difference)
        labels = [line["top"][0]["label"] for line in (ours, theirs)]
        if labels[0] != labels[1] or not difference <= THRESHOLD:
            print(f"{ours['picture']}: {labels[0]} here, {labels[1]} there, {difference:.1e} apart")
            faults += 1
    print(
        f"{arguments.bundle}: {len(host)} pictures, probabilities at most {worst:.1e} apart "
        f"(threshold {THRESHOLD:.0e})"
    )
    return 1 if faults else 0


if __name__ == "__main__":
    sys.exit(main())
