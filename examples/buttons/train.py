#!/usr/bin/env python3
"""Trains both classifiers on rendered pictures and prints their accuracy.

  train.py FOLDER     writes FOLDER/conv.pt and FOLDER/vit.pt (state dicts)

Seeds are fixed: the same versions of the libraries on the same kind of processor
give the same weights. Each model trains in a process of its own, on one thread.
"""

import argparse
import csv
import math
import pathlib
import time

import numpy as np
import torch
from PIL import Image
from torch import multiprocessing, nn
from torch.nn import functional as F

import render
from models import ButtonConvNet, ButtonViT
from preprocess import PREPROCESS, normalise, preprocess, resize

PROCESSES = 2
TRAINING_PICTURES = 4800
# Share of training pictures whose surface belongs to another kind.
MIXED_SHARE = 0.04
HELD_OUT = 640


def _render_resized(job):
    seed, outline, surface = job
    return np.asarray(resize(Image.fromarray(render.render(seed, outline, surface))))


def _jobs(count, first_seed, mixed_share):
    """(seed, outline, surface) for pictures that take turns through the classes."""
    rng = np.random.default_rng(first_seed)
    for n in range(count):
        outline, surface = render.KINDS[n % len(render.KINDS)][1:]
        if rng.random() < mixed_share:
            others = [other for _, _, other in render.KINDS if other != surface]
            others = [other for other in others if (outline, other) not in render.ODD_PAIRS]
            surface = others[rng.integers(len(others))]
        yield first_seed + n, outline, surface


def generate(jobs):
    """Pictures uint8 [N, 3, H, W], resized but not cropped, and class numbers."""
    jobs = list(jobs)
    with multiprocessing.Pool(PROCESSES) as pool:
        pictures = pool.map(_render_resized, jobs, chunksize=32)
    outlines = [outline for _, outline, _ in render.KINDS]
    labels = torch.tensor([outlines.index(outline) for _, outline, _ in jobs])
    return torch.from_numpy(np.stack(pictures)).permute(0, 3, 1, 2).contiguous(), labels


def centre_crop(pictures):
    height, width = PREPROCESS["crop"]
    top, left = (pictures.shape[-2] - height) // 2, (pictures.shape[-1] - width) // 2
    return pictures[..., top : top + height, left : left + width]


def augment(pictures, generator):
    """A turn, mirror, zoom and shift of each picture; brightness, contrast, tint."""
    n = pictures.shape[0]

    def uniform(low, high, *shape):
        return low + (high - low) * torch.rand(n, *shape, generator=generator)

    angle, zoom = uniform(-math.pi, math.pi), uniform(0.9, 1.1)
    mirror = torch.where(uniform(0, 1) < 0.5, -1.0, 1.0)
    c, s = torch.cos(angle) / zoom, torch.sin(angle) / zoom
    height, width = pictures.shape[-2:]
    aspect = PREPROCESS["crop"][1] / width
    shift = uniform(-0.1, 0.1, 2)
    rows = [
        torch.stack([c * mirror * aspect, -s * aspect, shift[:, 0] * aspect], -1),
        torch.stack([s * mirror, c, shift[:, 1]], -1),
    ]
    size = [n, 3, *PREPROCESS["crop"]]
    grid = F.affine_grid(torch.stack(rows, 1), size, align_corners=False)
    x = F.grid_sample(
        normalise(pictures), grid, padding_mode="reflection", align_corners=False
    )
    x = x * uniform(0.95, 1.05, 3, 1, 1) * uniform(0.9, 1.1, 1, 1, 1)
    return x + uniform(-0.06, 0.06, 1, 1, 1)


def train(name, model, pictures, labels, epochs, batch_size, peak_rate, weight_decay):
    generator = torch.Generator().manual_seed(3)
    batches = len(labels) // batch_size
    decayed = [p for p in model.parameters() if p.ndim >= 2]
    others = [p for p in model.parameters() if p.ndim < 2]
    optimiser = torch.optim.AdamW(
        [{"params": decayed, "weight_decay": weight_decay}, {"params": others, "weight_decay": 0}],
        lr=peak_rate,
    )
    schedule = torch.optim.lr_scheduler.OneCycleLR(optimiser, peak_rate, epochs * batches, pct_start=0.15)
    loss_of = nn.CrossEntropyLoss(label_smoothing=0.05)
    model.train()
    for epoch in range(epochs):
        total = 0.0
        order = torch.randperm(len(labels), generator=generator)
        for batch in order[: batches * batch_size].split(batch_size):
            # Mixed precision; the weights and the optimiser stay float32.
            with torch.autocast("cpu", dtype=torch.bfloat16):
                scores = model(augment(pictures[batch], generator))
            loss = loss_of(scores.float(), labels[batch])
            optimiser.zero_grad()
            loss.backward()
            nn.utils.clip_grad_norm_(model.parameters(), 1.0)
            optimiser.step()
            schedule.step()
            total += loss.item()
        print(f"  {name}: epoch {epoch + 1}/{epochs}, loss {total / batches:.3f}", flush=True)


RECIPES = {
    "conv": (
        ButtonConvNet,
        {"epochs": 14, "batch_size": 64, "peak_rate": 4e-3, "weight_decay": 0.02},
    ),
    "vit": (
        ButtonViT,
        {"epochs": 18, "batch_size": 32, "peak_rate": 1e-3, "weight_decay": 0.05},
    ),
}


def train_and_save(name, pictures, labels, folder):
    """Trains one model from its recipe; run in a process of its own."""
    torch.set_num_threads(1)
    torch.use_deterministic_algorithms(True)
    torch.manual_seed(7)
    build, recipe = RECIPES[name]
    model = build(len(render.KINDS))
    begin = time.monotonic()
    train(name, model, pictures, labels, **recipe)
    parameters = sum(p.numel() for p in model.parameters())
    print(f"{name}: {parameters} parameters, {time.monotonic() - begin:.0f} s", flush=True)
    torch.save(model.state_dict(), folder / f"{name}.pt")


def load(name, folder):
    model = RECIPES[name][0](len(render.KINDS))
    model.load_state_dict(torch.load(folder / f"{name}.pt"))
    return model.eval()


@torch.no_grad()
def predict(model, inputs):
    return torch.cat([model(part).argmax(1) for part in inputs.split(128)])


def shipped(folder, subset):
    """Inputs, classes and surface classes of the shipped pictures of one subset."""
    with open(folder / "labels.csv", newline="", encoding="utf-8") as file:
        rows = [row for row in csv.DictReader(file) if row["file"].startswith(subset + "/")]
    inputs = torch.stack([preprocess(Image.open(folder / row["file"])) for row in rows])
    number = render.CLASS_NAMES.index
    return (
        inputs,
        torch.tensor([number(row["class"]) for row in rows]),
        torch.tensor([number(row["surface_kind"]) for row in rows]),
    )


def odd_jobs(per_pair, first_seed):
    pairs = render.ODD_PAIRS * per_pair
    return [(first_seed + n, outline, surface) for n, (outline, surface) in enumerate(pairs)]


def report(models, folder):
    """Prints accuracy on the shipped and on freshly rendered pictures."""
    surfaces = [surface for _, _, surface in render.KINDS]
    fresh, fresh_labels = generate(_jobs(HELD_OUT, 2_000_000, 0))
    jobs = odd_jobs(20, 3_000_000)
    odd, odd_labels = generate(jobs)
    odd_surfaces = torch.tensor([surfaces.index(surface) for _, _, surface in jobs])
    sets = [
        ("ordinary, shipped", *shipped(folder, "ordinary")),
        ("ordinary, fresh", normalise(centre_crop(fresh)), fresh_labels, fresh_labels),
        ("odd, shipped", *shipped(folder, "odd")),
        ("odd, fresh", normalise(centre_crop(odd)), odd_labels, odd_surfaces),
    ]
    print(f"{'pictures':<20}{'count':>6}{'model':>8}{'as outline':>12}{'as surface':>12}{'agree':>8}")
    for title, inputs, labels, surface_labels in sets:
        answers = {name: predict(model, inputs) for name, model in models.items()}
        agree = (answers["conv"] == answers["vit"]).float().mean()
        for name, answer in answers.items():
            outline = (answer == labels).float().mean()
            surface = (answer == surface_labels).float().mean()
            print(
                f"{title:<20}{len(labels):>6}{name:>8}{outline:>12.1%}{surface:>12.1%}{agree:>8.1%}"
            )


def main():
    here = pathlib.Path(__file__).resolve().parent
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("folder", type=pathlib.Path, help="where the state dicts go")
    parser.add_argument("--pictures", type=pathlib.Path, default=here / "pictures")
    options = parser.parse_args()
    options.folder.mkdir(parents=True, exist_ok=True)

    torch.set_num_threads(1)  # nothing here may start threads before the processes fork
    start = time.monotonic()
    pictures, labels = generate(_jobs(TRAINING_PICTURES, 1_000_000, MIXED_SHARE))
    print(f"{len(labels)} pictures rendered in {time.monotonic() - start:.0f} s", flush=True)
    workers = []
    for name in RECIPES:
        arguments = (name, pictures, labels, options.folder)
        workers.append(multiprocessing.Process(target=train_and_save, args=arguments))
        workers[-1].start()
    for worker in workers:
        worker.join()
    if any(worker.exitcode for worker in workers):
        raise SystemExit("training failed")
    models = {name: load(name, options.folder) for name in RECIPES}
    report(models, options.pictures)
    print(f"{time.monotonic() - start:.0f} s in all")


if __name__ == "__main__":
    main()
