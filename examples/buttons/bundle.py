#!/usr/bin/env python3
"""Turns trained state dicts into the bundles that this folder ships.

  bundle.py FOLDER     reads FOLDER/conv.pt and FOLDER/vit.pt, writes bundles/conv and bundles/vit

Each bundle carries a reference: one shipped picture, what Pillow made of it on the way to the
input, and what PyTorch computed for it, layer by layer.
"""

import argparse
import pathlib
import sys

import torch

import render
import train
from preprocess import PREPROCESS

HERE = pathlib.Path(__file__).resolve().parent
sys.path.insert(0, str(HERE.parents[1] / "loaders" / "torch"))
import leadsman_export  # noqa: E402  (found through the line above)


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("folder", type=pathlib.Path, help="where train.py left the state dicts")
    folder = parser.parse_args().folder
    torch.set_num_threads(1)
    for name in train.RECIPES:
        summary = leadsman_export.export(
            train.load(name, folder),
            None,
            HERE / "bundles" / name,
            labels=render.CLASS_NAMES,
            preprocess=PREPROCESS,
            name=f"buttons-{name}",
            picture=HERE / "pictures" / "odd" / "walnut_shield_14.jpg",
        )
        print(f"bundles/{name}: {summary['layers']} layers, {summary['parameters']:,} values")


if __name__ == "__main__":
    main()
