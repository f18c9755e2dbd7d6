#!/usr/bin/env python3
"""The other side of against_torch.py: one model in PyTorch, run in turns.

    torch_peer.py prepare MODEL FOLDER --size HxW --batch N
    torch_peer.py turns MODEL FOLDER --threads N

MODEL is a classifier of torchvision, vit_s_16, buttons-conv or buttons-vit. `prepare` leaves in
FOLDER the exported bundle, the state dict and an input. `turns` writes a line of facts, then answers each line
on standard input by a line of JSON:

    run FORM COUNT     seconds of COUNT runs, the model being in that form (FORMS)
    check FORM FILE    how far the tensors in FILE.npz are from this form's output
"""

import argparse
import json
import os
import pathlib
import sys
import time

import torch

ROOT = pathlib.Path(__file__).resolve().parents[1]
sys.path.insert(0, str(ROOT / "loaders" / "torch"))
sys.path.insert(0, str(ROOT / "examples" / "buttons"))

import leadsman_export  # noqa: E402  (found through the lines above)


def build(name, size):
    """A seeded module for pictures of [height, width]; None: the model's usual size."""
    if name.startswith("buttons-"):
        import models

        size = size or (64, 64)
        torch.manual_seed(1)
        if name == "buttons-conv":
            return models.ButtonConvNet(), size
        return models.ButtonViT(image=size[0]), size
    if name == "vit_s_16":
        return small_vit(size or (224, 224)), size or (224, 224)
    module, preprocess = leadsman_export.torchvision_model(name, size, seed=1)
    return module, tuple(preprocess["crop"])


def small_vit(size):
    """The small ViT (Touvron et al. 2021, table 1), which torchvision does not name."""
    from torchvision.models import VisionTransformer

    torch.manual_seed(1)
    return VisionTransformer(
        image_size=size[0],
        patch_size=16,
        num_layers=12,
        num_heads=6,
        hidden_dim=384,
        mlp_dim=1536,
    )


def prepare(options):
    size = tuple(int(side) for side in options.size.split("x")) if options.size else None
    module, size = build(options.model, size)
    leadsman_export.settle(module, size, seed=1)
    module.eval()
    example = leadsman_export.picture_like(options.batch, *size, seed=5)
    leadsman_export.export(
        module, example[:1], options.folder / "bundle", reference=False, name=options.model
    )
    torch.save({"state": module.state_dict(), "input": example}, options.folder / "peer.pt")
    import numpy

    numpy.save(options.folder / "input.npy", example.numpy())
    print(json.dumps({"size": "x".join(map(str, size))}))


def plain(module, x):
    return module, x


def channels_last(module, x):
    form = torch.channels_last
    return module.to(memory_format=form), x.to(memory_format=form)


def traced(module, x):
    graph = torch.jit.freeze(torch.jit.trace(module, x))
    return torch.jit.optimize_for_inference(graph), x


def traced_channels_last(module, x):
    return traced(*channels_last(module, x))


FORMS = {
    "eager": plain,
    "channels_last": channels_last,
    "traced": traced,
    "traced channels_last": traced_channels_last,
}


class Peer:
    def __init__(self, name, folder):
        stored = torch.load(folder / "peer.pt")
        self.input = stored["input"]
        self.module, _ = build(name, tuple(self.input.shape[2:]))
        self.module.load_state_dict(stored["state"])
        self.module.eval()
        self.form = None

    def take(self, form):
        """Puts the model into one form; the first runs of a traced one compile it."""
        if self.form == form:
            return
        self.form = form
        plain_module = self.module.to(memory_format=torch.contiguous_format)
        self.call, self.x = FORMS[form](plain_module, self.input)
        for _ in range(4 if form.startswith("traced") else 1):
            self.call(self.x)

    def run(self, count):
        seconds = []
        for _ in range(count):
            begin = time.perf_counter()
            self.call(self.x)
            seconds.append(time.perf_counter() - begin)
        return {"seconds": seconds}

    def check(self, file):
        import numpy

        theirs = self.call(self.x).detach().numpy().astype("float64")
        (name,) = numpy.load(file).files
        ours = numpy.load(file)[name].astype("float64")
        if ours.shape != theirs.shape:
            return {"relative_l2": float("inf"), "largest": float("inf"), "same_class": False}
        return {
            "relative_l2": float(numpy.linalg.norm(ours - theirs) / numpy.linalg.norm(theirs)),
            "largest": float(abs(ours - theirs).max()),
            "same_class": bool((ours.argmax(1) == theirs.argmax(1)).all()),
        }


def loaded_blas():
    """The file that the matrix product of BLAS comes from."""
    with open("/proc/self/maps", encoding="utf-8") as maps:
        files = {line.split()[-1] for line in maps if "blas" in line}
    preloaded = os.environ.get("LD_PRELOAD", "")
    if preloaded:
        return preloaded
    return ", ".join(sorted(os.path.realpath(file) for file in files)) or "inside torch"


def turns(options):
    torch.set_num_threads(options.threads)
    torch.set_num_interop_threads(1)
    with torch.inference_mode():
        peer = Peer(options.model, options.folder)
        facts = {"torch": torch.__version__, "threads": torch.get_num_threads()}
        facts["blas"] = loaded_blas()
        facts["forms"] = list(FORMS)
        print(json.dumps(facts), flush=True)
        for line in sys.stdin:
            request, argument = line.rstrip("\n").split(" ", 1)
            form, last = argument.rsplit(" ", 1)
            peer.take(form)
            answer = peer.run(int(last)) if request == "run" else peer.check(last)
            print(json.dumps(answer), flush=True)


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("what", choices=["prepare", "turns"])
    parser.add_argument("model")
    parser.add_argument("folder", type=pathlib.Path)
    parser.add_argument("--size")
    parser.add_argument("--batch", type=int, default=1)
    parser.add_argument("--threads", type=int, default=1)
    options = parser.parse_args()
    prepare(options) if options.what == "prepare" else turns(options)


if __name__ == "__main__":
    main()
