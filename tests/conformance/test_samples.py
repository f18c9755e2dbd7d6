"""Networks of the exporter's tests through the engine, layer by layer, at other batches and sizes.

tests/loaders/torch compares what the exporter writes with PyTorch through an interpreter of its
own; here the same bundles run in the engine, against the same PyTorch.
"""

import importlib.util
import pathlib
import shutil
import subprocess
import sys
import tempfile
import unittest

import conform

HAS_TORCHVISION = importlib.util.find_spec("torchvision") is not None
if HAS_TORCHVISION:
    import numpy as np
    import torch
    import torchvision
    from torchvision.models.vision_transformer import VisionTransformer, interpolate_embeddings

    sys.path[:0] = [
        str(conform.ROOT / "loaders" / "torch"),
        str(conform.ROOT / "tests" / "loaders" / "torch"),
    ]
    import graph_interpreter
    import leadsman_export
    import sample_models

    torch.set_num_threads(min(2, torch.get_num_threads()))

# As for whole architectures: test_architectures.py.
LOGITS_LIMIT = 2e-5


@unittest.skipUnless(HAS_TORCHVISION, "torchvision is not installed")
class BundleTest(unittest.TestCase):
    def setUp(self):
        self.folder = pathlib.Path(tempfile.mkdtemp(prefix="leadsman-samples-"))
        self.addCleanup(shutil.rmtree, self.folder)

    def computed(self, layer, inputs):
        """What the engine computes for `inputs`, at their own batch and size."""
        given, out = self.folder / "input.npy", self.folder / "output.npz"
        np.save(given, inputs.numpy())
        command = [conform.tool_path(), "tap", self.folder / "bundle", "--tensor", given,
                   "--layers", layer, "--out", out]  # fmt: skip
        done = subprocess.run(list(map(str, command)), capture_output=True, text=True)
        self.assertEqual(done.returncode, 0, done.stderr)
        return torch.from_numpy(np.load(out)[layer])

    def assert_close(self, ours, theirs, limit=LOGITS_LIMIT):
        self.assertEqual(ours.shape, theirs.shape)
        error = float((ours.double() - theirs.double()).norm() / theirs.double().norm())
        self.assertLess(error, limit)


class Samples(BundleTest):
    def conforms(self, name):
        build, shapes = sample_models.SAMPLES[name]
        torch.manual_seed(0)
        module = build()
        leadsman_export.calm_down(module)
        leadsman_export.vary_constant_parameters(module, 0)
        if len(shapes) == 1:
            leadsman_export.settle_batch_norm(module, torch.randn(8, *shapes[0][1:]))
        inputs = tuple(torch.randn(shape) for shape in shapes)
        leadsman_export.export(module, inputs, self.folder / "bundle")
        verified = conform.run_json(
            conform.tool_path(), "verify", self.folder / "bundle", "--json"
        )
        self.assertEqual([row["layer"] for row in verified["layers"] if row["departs"]], [])
        graph = graph_interpreter.read_graph(self.folder / "bundle")
        self.assertEqual(
            [row["layer"] for row in verified["layers"]],
            [layer["name"] for layer in graph["layers"]],
        )
        self.assertLess(verified["output_relative_l2"], LOGITS_LIMIT)


if HAS_TORCHVISION:
    for _name in sample_models.SAMPLES:
        setattr(Samples, f"test_{_name}", lambda self, name=_name: self.conforms(name))


def networks():
    """Small members of the families that treat batches and sizes in their own ways."""
    models = torchvision.models
    swin = {"embed_dim": 24, "depths": [2, 2], "num_heads": [2, 4], "window_size": [4, 4]}
    return {
        "mobilenet_v2": lambda: models.MobileNetV2(num_classes=7, width_mult=0.35),
        "shufflenet_v2": lambda: models.ShuffleNetV2([1, 1, 1], [8, 16, 32, 64, 96], 7),
        "squeezenet": lambda: models.SqueezeNet("1_1", 7),
        "swin": lambda: models.SwinTransformer([4, 4], num_classes=7, **swin),
        "vit": lambda: VisionTransformer(32, 8, 2, 3, 48, 96, num_classes=7),
    }


@unittest.skipUnless(HAS_TORCHVISION, "torchvision is not installed")
class Batches(BundleTest):
    """One bundle, exported from one picture, for 1 to 8 pictures of other sizes."""

    def runs(self, name):
        torch.manual_seed(3)
        module = networks()[name]().eval()
        leadsman_export.settle(module, (64, 64), seed=1)
        usual = (32, 32) if name == "vit" else (64, 64)
        example = leadsman_export.picture_like(1, *usual, seed=2)
        leadsman_export.export(module, example, self.folder / "bundle", reference=False)
        (output,) = graph_interpreter.read_graph(self.folder / "bundle")["outputs"]
        for batch in range(1, 9):
            size = usual if name == "vit" else (57 + 3 * batch, 90 - 5 * batch)
            pictures = leadsman_export.picture_like(batch, *size, seed=10 + batch)
            with torch.no_grad():
                expected = module(pictures)
            with self.subTest(batch=batch):
                self.assert_close(self.computed(output, pictures), expected)

    def test_every_picture_is_its_own(self):
        for name in networks():
            with self.subTest(name):
                self.runs(name)


@unittest.skipUnless(HAS_TORCHVISION, "torchvision is not installed")
class Positions(BundleTest):
    def test_a_vision_transformer_at_other_sizes_has_torchvisions_interpolated_positions(self):
        def build(side):
            return VisionTransformer(side, 8, 2, 3, 48, 96, num_classes=7).eval()

        torch.manual_seed(4)
        module = build(48)
        leadsman_export.vary_constant_parameters(module, 4)
        with torch.no_grad():  # so large that a wrong position shows
            module.encoder.pos_embedding.normal_(0, 1)
        example = leadsman_export.picture_like(1, 48, 48, seed=5)
        leadsman_export.export(module, example, self.folder / "bundle", reference=False)
        for side in (8, 16, 40, 56, 96, 120):
            # interpolate_embeddings changes the dictionary that it is given.
            state = dict(module.state_dict())
            other = build(side)
            other.load_state_dict(interpolate_embeddings(side, 8, state))
            pictures = leadsman_export.picture_like(2, side, side, seed=side)
            with torch.no_grad():
                expected = other(pictures)
            with self.subTest(side=side):
                self.assert_close(self.computed("heads.head", pictures), expected)


if __name__ == "__main__":
    unittest.main()
