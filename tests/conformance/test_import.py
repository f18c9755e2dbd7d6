"""`leadsman import` against the exporter: the same graph, the same weights, the same logits.

For each architecture of torchvision the exporter writes a seeded model as a bundle; the C++ builder
makes another from the same checkpoint. Layer by layer the two say the same, and the logits are
equal bit for bit, since the same graph gives the same plan.
"""

import contextlib
import importlib.util
import json
import pathlib
import shutil
import subprocess
import sys
import tempfile
import unittest
from unittest import mock

import conform

HAS_TORCHVISION = importlib.util.find_spec("torchvision") is not None
if HAS_TORCHVISION:
    import numpy as np
    import torch
    import torchvision

    sys.path.insert(0, str(conform.ROOT / "loaders" / "torch"))
    import leadsman_export

# Small members of every family: everything is compared.
WHOLE = [
    "resnet18", "resnext50_32x4d", "mobilenet_v2", "efficientnet_b0", "convnext_tiny", "vit_b_32",
    "vit_ti_16", "vit_s_32",
]  # fmt: skip
# The others: graphs alone, which spares writing gigabytes of weights twice.
GRAPHS = [
    "resnet34", "resnet50", "resnet101", "resnet152", "resnext101_32x8d", "resnext101_64x4d",
    "wide_resnet50_2", "convnext_small", "convnext_base", "vit_ti_32", "vit_s_16", "vit_b_16",
    "vit_l_32",
]  # fmt: skip

# Hundreds of millions of weights for what their smaller relatives have shown.
LEFT_OUT = ["wide_resnet101_2", "convnext_large", "vit_l_16"]

SIZE = 64  # a multiple of every patch

# What loaders/GRAPH_FORMAT.md says of attributes that are left out.
DEFAULTS = {
    "conv2d": {"stride": [1, 1], "padding": [0] * 4, "dilation": [1, 1], "groups": 1},
    "batch_norm": {"eps": 1e-5},
    "layer_norm": {"eps": 1e-5},
    "activation": {"slope": 0.01},
    "max_pool": {"padding": [0] * 4, "dilation": [1, 1], "ceil_mode": False},
    "position_embed": {"prefix_tokens": 1},
    "attention": {"scale": 0.0},
    "scale": {"factor": 1.0, "offset": 0.0},
}
# Touvron et al. 2021, table 1: width and heads of DeiT-Ti and DeiT-S, 12 layers each.
DEIT = {"ti": (192, 3), "s": (384, 6)}


def torch_model(name, classes=1000):
    """torchvision's model, or its VisionTransformer in the sizes of DeiT."""
    torch.manual_seed(7)
    family, _, rest = name.partition("_")
    if family != "vit":
        return torchvision.models.get_model(name, weights=None, num_classes=classes)
    size, patch = rest.split("_")
    if size not in DEIT:
        return torchvision.models.get_model(
            name, weights=None, image_size=SIZE, num_classes=classes
        )
    width, heads = DEIT[size]
    return torchvision.models.VisionTransformer(
        image_size=SIZE, patch_size=int(patch), num_layers=12, num_heads=heads, hidden_dim=width,
        mlp_dim=4 * width, num_classes=classes,
    )  # fmt: skip


def complete(layer):
    """A layer with what it leaves out, so that two can be compared."""
    attributes = {**DEFAULTS.get(layer["operator"], {}), **layer.get("attributes", {})}
    return {**layer, "attributes": attributes, "weights": layer.get("weights", {})}


@unittest.skipUnless(HAS_TORCHVISION, "torchvision is not installed")
class Import(unittest.TestCase):
    @contextlib.contextmanager
    def folder(self):
        path = pathlib.Path(tempfile.mkdtemp(prefix="leadsman-import-"))
        try:
            yield path
        finally:
            shutil.rmtree(path)

    def run_tool(self, *arguments):
        command = [conform.tool_path(), *map(str, arguments)]
        done = subprocess.run(command, capture_output=True, text=True)
        self.assertEqual(done.returncode, 0, done.stderr)
        return done.stdout

    def compare_graphs(self, exported, imported):
        exported, imported = (json.loads((f / "graph.json").read_text()) for f in (exported, imported))
        for key in ("leadsman_graph", "name", "inputs", "outputs"):
            self.assertEqual(imported[key], exported[key])
        self.assertEqual(len(imported["layers"]), len(exported["layers"]))
        for ours, theirs in zip(imported["layers"], exported["layers"]):
            self.assertEqual(complete(ours), complete(theirs))
        return imported

    def export(self, name, folder):
        model = torch_model(name)
        leadsman_export.vary_constant_parameters(model, 3)
        picture = leadsman_export.picture_like(1, SIZE, SIZE, seed=5)
        leadsman_export.export(model, picture, folder, reference=False, name=name)
        return model, picture

    def test_everything_of_small_members(self):
        for name in WHOLE:
            with self.subTest(name), self.folder() as folder:
                model, picture = self.export(name, folder / "exported")
                # As a checkpoint comes: all of its tensors, from a model trained in parallel.
                state = {f"module.{k}": v.float() for k, v in model.state_dict().items()}
                leadsman_export.write_safetensors(folder / "checkpoint.safetensors", state)
                self.run_tool(
                    "import", "--architecture", name, folder / "checkpoint.safetensors",
                    "--size", SIZE, "--out", folder / "imported",
                )  # fmt: skip
                graph = self.compare_graphs(folder / "exported", folder / "imported")
                np.save(folder / "picture.npy", picture.numpy())
                logits = []
                for bundle in ("exported", "imported"):
                    self.run_tool(
                        "tap", folder / bundle, "--tensor", folder / "picture.npy", "--layers",
                        graph["outputs"][0], "--out", folder / f"{bundle}.npz",
                    )  # fmt: skip
                    with np.load(folder / f"{bundle}.npz") as file:
                        logits.append(file[graph["outputs"][0]])
                self.assertEqual(logits[0].shape, (1, 1000))
                self.assertEqual(logits[0].tobytes(), logits[1].tobytes())
                self.assertGreater(float(logits[0].std()), 0)

    def test_graphs_of_the_others(self):
        for name in GRAPHS:
            with self.subTest(name), self.folder() as folder:
                with mock.patch("leadsman_export.write_safetensors"):
                    self.export(name, folder / "exported")
                self.run_tool(
                    "import", "--architecture", name, "--seed", 1, "--size", SIZE,
                    "--out", folder / "imported",
                )  # fmt: skip
                self.compare_graphs(folder / "exported", folder / "imported")

    def test_every_architecture_is_compared(self):
        listed = json.loads(self.run_tool("import", "--list", "--json"))
        self.assertEqual(sorted(e["architecture"] for e in listed), sorted(WHOLE + GRAPHS + LEFT_OUT))

    def test_parameters_are_those_of_torchvisions_metadata(self):
        for entry in json.loads(self.run_tool("import", "--list", "--json")):
            name = entry["architecture"]
            if "_ti_" in name or "_s_" in name:
                continue
            published = next(iter(torchvision.models.get_model_weights(name))).meta["num_params"]
            self.assertEqual(entry["parameters"], published, name)

    def test_preprocessing_is_that_of_the_first_published_weights(self):
        for name in ("resnet18", "resnext101_64x4d", "efficientnet_b0"):
            for size in ((224, 224), (160, 192)):
                with self.subTest(name, size=size), self.folder() as folder:
                    self.run_tool(
                        "import", "--architecture", name, "--seed", 1, "--size",
                        "x".join(map(str, size)), "--out", folder / "bundle",
                    )  # fmt: skip
                    graph = json.loads((folder / "bundle" / "graph.json").read_text())
                    expected = leadsman_export._torchvision_preprocess(torchvision, name, size)
                    self.assertEqual(
                        graph["preprocess"], {"orientation": "as_stored", **expected}
                    )


if __name__ == "__main__":
    unittest.main()
