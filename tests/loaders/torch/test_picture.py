"""A picture as the exporter's example, and `leadsman verify --image` on what it wrote."""

import json
import os
import subprocess
import sys
import tempfile
import unittest
from unittest import mock

import numpy
import PIL
import torch
import torch.nn.functional as F
from PIL import Image
from torch import nn
from torchvision import transforms

HERE = os.path.dirname(os.path.abspath(__file__))
ROOT = os.path.dirname(os.path.dirname(os.path.dirname(HERE)))
sys.path[:0] = [HERE, os.path.join(ROOT, "loaders", "torch")]

import graph_interpreter  # noqa: E402
import leadsman_export  # noqa: E402

PICTURES = os.path.join(ROOT, "examples", "buttons", "pictures", "odd")
JPEG = os.path.join(PICTURES, "walnut_shield_14.jpg")  # 120 x 96
PNG = os.path.join(PICTURES, "brass_flower_04.png")
MEAN, STD = [0.485, 0.456, 0.406], [0.229, 0.224, 0.225]


def preprocess(**sections):
    return {"scale": 1 / 255, "mean": MEAN, "std": STD, **sections}


def network(channels=3):
    torch.manual_seed(1)
    pool = nn.AdaptiveAvgPool2d(2)
    return nn.Sequential(nn.Conv2d(channels, 6, 3), nn.ReLU(), pool, nn.Flatten(), nn.Linear(24, 5))


class PictureTest(unittest.TestCase):
    def setUp(self):
        folder = tempfile.TemporaryDirectory()
        self.addCleanup(folder.cleanup)
        self.folder = folder.name
        self.reference_path = os.path.join(self.folder, "bundle", "reference.safetensors")

    def export(self, picture, settings, channels=3):
        """The reference's tensors and metadata."""
        bundle = os.path.dirname(self.reference_path)
        leadsman_export.export(network(channels), None, bundle, None, settings, picture=picture)
        return graph_interpreter.read_safetensors(self.reference_path)

    def verify(self, picture):
        """Exit code and JSON of the tool."""
        tool = os.environ.get("LEADSMAN_TOOL", os.path.join(ROOT, "build", "release", "leadsman"))
        command = [tool, "verify", os.path.dirname(self.reference_path), "--image", picture, "--json"]
        done = subprocess.run(command, capture_output=True, text=True)
        self.assertIn(done.returncode, (0, 1), done.stderr)
        return done.returncode, json.loads(done.stdout)["picture"]


class StagesTest(PictureTest):
    # Outside check: Resize, CenterCrop, ToTensor and Normalize of torchvision.
    def test_torchvision_makes_the_same(self):
        modes = transforms.InterpolationMode
        for picture in (JPEG, PNG):
            for side, kernel, crop in (
                (64, "bilinear", (64, 64)),
                (67, "bicubic", (61, 54)),
                (31, "nearest", (40, 29)),  # the crop is larger in one direction
                (37, "bicubic", (60, 61)),  # and in both
                ((50, 71), "bilinear", (50, 70)),
                ((121, 37), "bicubic", None),
                (None, None, (77, 88)),
                (96, "bilinear", None),
                (None, None, None),
            ):
                with self.subTest(picture=picture, side=side, kernel=kernel, crop=crop):
                    sections, steps = {}, []
                    if side:
                        key = "shorter_side" if isinstance(side, int) else "exact"
                        sections["resize"] = {key: side, "interpolation": kernel}
                        steps.append(transforms.Resize(side, modes(kernel)))
                    if crop:
                        sections["crop"] = list(crop)
                    reference, _ = self.export(picture, preprocess(**sections))
                    image = Image.open(picture).convert("RGB")
                    expected = {"decoded": image}
                    expected["resized"] = steps[0](image) if side else image
                    expected["cropped"] = expected["resized"]
                    if crop:
                        expected["cropped"] = transforms.CenterCrop(crop)(expected["resized"])
                    for stage, image in expected.items():
                        ours = reference[f"preprocess:{stage}"]
                        self.assertEqual(ours.dtype, torch.uint8)
                        theirs = torch.from_numpy(numpy.array(image)).permute(2, 0, 1)
                        self.assertTrue(torch.equal(ours[0], theirs), stage)
                    last = transforms.Compose(
                        [transforms.ToTensor(), transforms.Normalize(MEAN, STD)]
                    )
                    self.assertTrue(torch.equal(reference["image"][0], last(expected["cropped"])))
                    code, found = self.verify(picture)
                    self.assertEqual(code, 0)
                    for stage in found["stages"]:
                        self.assertEqual(stage["largest_levels"], 0, stage)

    def test_channels_and_defaults(self):
        rgb = self.export(JPEG, {"mean": MEAN, "std": STD})[0]["image"]
        bgr = self.export(JPEG, {"channels": "BGR", "mean": MEAN[::-1], "std": STD[::-1]})[0]
        self.assertTrue(torch.equal(bgr["image"], rgb.flip(1)))
        self.assertEqual(self.verify(JPEG)[0], 0)
        grey, _ = self.export(JPEG, {"channels": "GREY", "scale": 1}, channels=1)
        expected = torch.from_numpy(numpy.array(Image.open(JPEG).convert("L"))).float()
        self.assertTrue(torch.equal(grey["image"][0, 0], expected))
        self.assertEqual(self.verify(JPEG)[0], 0)

    def test_orientation(self):
        path = os.path.join(self.folder, "turned.jpg")
        exif = Image.Exif()
        exif[0x0112] = 6
        Image.open(JPEG).save(path, exif=exif)
        for orientation, shape in (("exif", [1, 3, 120, 96]), ("as_stored", [1, 3, 96, 120])):
            reference, _ = self.export(path, preprocess(orientation=orientation))
            self.assertEqual(list(reference["preprocess:decoded"].shape), shape)
            self.assertEqual(self.verify(path)[0], 0)

    def test_says_where_it_is_from(self):
        _, metadata = self.export(JPEG, preprocess())
        self.assertEqual(metadata["picture"], "walnut_shield_14.jpg")
        self.assertEqual(metadata["pillow"], PIL.__version__)

    def test_the_command(self):
        arguments = ["--torchvision", "mobilenet_v2", "--size", "64x64", "--picture"]
        bundle = os.path.dirname(self.reference_path)
        with mock.patch("builtins.print"):
            self.assertEqual(leadsman_export.main([*arguments, JPEG, "--out", bundle]), 0)
            missing = os.path.join(self.folder, "missing.jpg")
            self.assertEqual(leadsman_export.main([*arguments, missing, "--out", bundle]), 3)
            self.assertEqual(leadsman_export.main([*arguments, __file__, "--out", bundle]), 3)
        code, found = self.verify(JPEG)
        self.assertEqual((code, found["first_departure"]), (0, None))

    def test_refusals(self):
        out = os.path.join(self.folder, "out")
        export = leadsman_export.export
        with self.assertRaisesRegex(ValueError, "takes the place of example_input"):
            export(network(), torch.rand(1, 3, 9, 9), out, None, preprocess(), picture=JPEG)
        with self.assertRaisesRegex(ValueError, "goes with preprocess"):
            export(network(), None, out, picture=JPEG)
        with self.assertRaisesRegex(ValueError, "'lanczos' is not nearest"):
            resize = {"exact": [9, 9], "interpolation": "lanczos"}
            export(network(), None, out, None, preprocess(resize=resize), picture=JPEG)
        with mock.patch.dict(sys.modules, {"PIL": None}):
            with self.assertRaisesRegex(ImportError, "needs the package Pillow"):
                export(network(), None, out, None, preprocess(), picture=JPEG)
        self.assertFalse(os.path.exists(out))


class OtherReferenceTest(PictureTest):
    """References of libraries that do a step in another way."""

    settings = preprocess(resize={"shorter_side": 48, "interpolation": "bilinear"}, crop=[48, 48])

    # Outside check: PyTorch's interpolation, which is not antialiased unless asked.
    def test_a_resize_without_antialiasing_is_named(self):
        def resize(self, size, resample):
            levels = leadsman_export._levels(self).float()
            smaller = F.interpolate(levels, size=size[::-1], mode="bilinear", align_corners=False)
            levels = smaller.round().clamp(0, 255).to(torch.uint8)
            return Image.fromarray(levels[0].permute(1, 2, 0).numpy())

        with mock.patch.object(Image.Image, "resize", resize):
            self.export(JPEG, self.settings)
        code, found = self.verify(JPEG)
        self.assertEqual((code, found["first_departure"]), (1, "resized"))
        self.assertEqual([stage["departs"] for stage in found["stages"]], [0, 1, 0, 0])
        self.assertGreater(found["stages"][1]["largest_levels"], 5)

    def test_a_decoder_that_differs_is_no_departure(self):
        rounding = numpy.random.default_rng(2)

        def convert(self, mode, original=Image.Image.convert):
            pixels = numpy.array(original(self, mode)).astype(int)
            moved = pixels + rounding.integers(-1, 2, pixels.shape)
            return Image.fromarray(moved.clip(0, 255).astype(numpy.uint8))

        for picture, expected in ((JPEG, 0), (PNG, 1)):
            with mock.patch.object(Image.Image, "convert", convert):
                self.export(picture, self.settings)
            code, found = self.verify(picture)
            self.assertEqual(code, expected)
            self.assertEqual(found["only_decoder_differs"], expected == 0)
            self.assertEqual(found["first_departure"], None if expected == 0 else "decoded")
            self.assertEqual(found["stages"][0]["largest_levels"], 1)
            self.assertEqual(found["stages"][1]["alone_largest_levels"], 0)
            self.assertGreater(found["output_relative_l2"], 0)


if __name__ == "__main__":
    unittest.main()
