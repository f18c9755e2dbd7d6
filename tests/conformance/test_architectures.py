"""Architectures of torchvision 0.14 against PyTorch, and their published figures.

One of each family; all of them when LEADSMAN_ALL_ARCHITECTURES is set.
"""

import importlib.util
import os
import pathlib
import shutil
import tempfile
import unittest

import conform
from published import GIGA_MACS

# MACs at 224x224 from the papers' own tables, with the tolerance that their rounding and
# torchvision's variants need:
#   ResNet: He et al. 2016, table 1 ("FLOPs" there are multiply-adds): 1.8e9 for 18 layers, 3.8e9
#   for 50. torchvision's ResNet-50 strides in the 3x3 convolution instead of the 1x1 before it
#   (its documentation: "ResNet V1.5"), which takes 4.1e9 (Goyal et al. 2017 describe the change).
#   MobileNetV2: Sandler et al. 2018, table 4: 300M. MobileNetV3: Howard et al. 2019, table 3: 219M
#   large, 56M small. EfficientNet-B0: Tan & Le 2019, table 2: 0.39B. ConvNeXt-T: Liu et al. 2022,
#   table 1: 4.5G. Swin-T: Liu et al. 2021, table 1: 4.5G. MaxViT-T: Tu et al. 2022, table 2: 5.6G.
#   ViT-B/16: Touvron et al. 2021 (DeiT), table 5 and text: 17.6e9 for the same architecture.
#   Inception-v3: Szegedy et al. 2016, section 6: "5 billion multiply-adds", rounded down.
PAPERS_MACS = {
    "resnet18": (1.8e9, 0.03),
    "resnet50": (4.1e9, 0.03),
    "mobilenet_v2": (300e6, 0.01),
    "mobilenet_v3_small": (56e6, 0.03),
    "mobilenet_v3_large": (219e6, 0.03),
    "efficientnet_b0": (0.39e9, 0.02),
    "convnext_tiny": (4.5e9, 0.02),
    "swin_t": (4.5e9, 0.01),
    "maxvit_t": (5.6e9, 0.02),
    "vit_b_16": (17.6e9, 0.01),
}

# Of what torchvision counts: in Swin V2, the network that computes the positions' table, too. Its
# figures have three decimals.
COUNTING = 0.005
ROUNDING = 0.5e6

# Logits' relative L2 error with direct kernels, where it is held more tightly than conform.py does.
CLOSER = dict.fromkeys(["resnet18", "resnet50", "mobilenet_v2", "vgg11", "vit_b_16"], 1e-5)

HAS_TORCHVISION = importlib.util.find_spec("torchvision") is not None
ALL = bool(os.environ.get("LEADSMAN_ALL_ARCHITECTURES"))


@unittest.skipUnless(HAS_TORCHVISION, "torchvision is not installed")
class Architectures(unittest.TestCase):
    def conforms(self, name, size=None):
        result = conform.conform(conform.tool_path(), name, size)
        print(conform.row(result), flush=True)
        self.assertEqual(result.departures, [])
        self.assertLess(result.worst_ratio, 1.0)
        self.assertLess(result.exact_error, CLOSER.get(name, conform.EXACT_LIMIT))
        self.assertLess(result.fast_error, conform.FAST_LIMIT)
        # The library's own metadata: num_params of each set of published weights.
        self.assertEqual(result.parameters, result.published_parameters)
        if size is None:
            expected = GIGA_MACS[name] * 1e9
            self.assertLess(abs(result.macs - expected), COUNTING * expected + ROUNDING)
            if name in PAPERS_MACS:
                expected, tolerance = PAPERS_MACS[name]
                self.assertLess(abs(result.macs - expected), tolerance * expected)


# At another size as well, what reacts to it differently: paddings, strides, windows, positions.
AT_ANOTHER_SIZE = [
    "convnext_tiny", "efficientnet_b0", "googlenet", "mobilenet_v2", "resnet18",
    "shufflenet_v2_x0_5", "squeezenet1_1", "swin_t", "vit_b_16",
]  # fmt: skip


def _add_tests(names, other_size):
    for name in names:
        setattr(Architectures, f"test_{name}", lambda self, name=name: self.conforms(name))
        if name in other_size:
            size = conform.odd_size(name)
            setattr(
                Architectures,
                f"test_{name}_at_{size}",
                lambda self, name=name, size=size: self.conforms(name, size),
            )


if HAS_TORCHVISION and ALL:
    _add_tests(conform.all_names(), conform.all_names())
else:
    _add_tests(conform.FAMILIES, AT_ANOTHER_SIZE)


class Coverage(unittest.TestCase):
    @unittest.skipUnless(HAS_TORCHVISION, "torchvision is not installed")
    def test_every_architecture_has_its_family_here(self):
        stems = ("alexnet", "convnext", "densenet", "efficientnet_b", "efficientnet_v2",
                 "googlenet", "inception", "maxvit", "mnasnet", "mobilenet_v2", "mobilenet_v3",
                 "regnet_x", "regnet_y", "resnet", "resnext", "shufflenet", "squeezenet", "swin_v2",
                 "swin", "vgg", "vit", "wide_resnet")  # fmt: skip
        covered = {next(s for s in stems if name.startswith(s)) for name in conform.FAMILIES}
        for name in conform.all_names():
            self.assertIn(next(s for s in stems if name.startswith(s)), covered, name)
        self.assertEqual(set(conform.all_names()), set(GIGA_MACS))


@unittest.skipUnless(HAS_TORCHVISION, "torchvision is not installed")
class Shapes(unittest.TestCase):
    """What any practitioner would look up."""

    def described(self, name):
        folder = pathlib.Path(tempfile.mkdtemp(prefix="leadsman-shapes-"))
        self.addCleanup(shutil.rmtree, folder)
        conform.export_torchvision(name, folder)
        document = conform.run_json(conform.tool_path(), "describe", folder, "--json")
        return {layer["layer"]: layer["shape"] for layer in document["layers"]}

    def test_resnet50_as_in_table_1_of_he_et_al_2016(self):
        shapes = self.described("resnet50")
        self.assertEqual(shapes["conv1"], [1, 64, 112, 112])  # 64 kernels, output 112x112
        self.assertEqual(shapes["maxpool"], [1, 64, 56, 56])
        self.assertEqual(shapes["layer1.2.relu_2"], [1, 256, 56, 56])  # conv2_x
        self.assertEqual(shapes["layer2.0.conv2"], [1, 128, 28, 28])  # conv3_x: 128 channels
        self.assertEqual(shapes["layer3.0.conv2"], [1, 256, 14, 14])
        self.assertEqual(shapes["layer4.2.relu_2"], [1, 2048, 7, 7])  # the final map is 7x7
        self.assertEqual(shapes["fc"], [1, 1000])

    def test_vit_b_16_as_in_dosovitskiy_et_al_2021(self):
        shapes = self.described("vit_b_16")
        tokens = [shape for shape in shapes.values() if len(shape) == 3]
        # (224 / 16)^2 patches and the class token; width 768, MLP 3072 (table 1), 12 layers.
        self.assertIn([1, 197, 768], tokens)
        self.assertIn([1, 197, 3072], tokens)
        attention = [name for name in shapes if name.endswith(".attention")]
        self.assertEqual(len(attention), 12)


if __name__ == "__main__":
    unittest.main()
