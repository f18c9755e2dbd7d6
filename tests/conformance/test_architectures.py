"""Architectures of torchvision 0.14 against PyTorch, and their published figures."""

import importlib.util
import pathlib
import shutil
import tempfile
import unittest

import conform

# MACs at 224x224 from the papers' own tables, with the tolerance that their rounding and
# torchvision's variants need:
#   ResNet: He et al. 2016, table 1 ("FLOPs" there are multiply-adds): 1.8e9 for 18 layers, 3.8e9
#   for 50. torchvision's ResNet-50 strides in the 3x3 convolution instead of the 1x1 before it
#   (its documentation: "ResNet V1.5"), which takes 4.1e9 (Goyal et al. 2017 describe the change).
#   MobileNetV2: Sandler et al. 2018, table 4: 300M.
#   VGG-11: from memory, no source: 7.6e9.
#   ViT-B/16: Touvron et al. 2021 (DeiT), table 5 and text: 17.6e9 for the same architecture.
PUBLISHED_MACS = {
    "resnet18": (1.8e9, 0.03),
    "resnet50": (4.1e9, 0.03),
    "mobilenet_v2": (300e6, 0.01),
    "vit_b_16": (17.6e9, 0.01),
}

# Logits' relative L2 error with direct kernels.
LOGITS_LIMIT = 1e-5

HAS_TORCHVISION = importlib.util.find_spec("torchvision") is not None


@unittest.skipUnless(HAS_TORCHVISION, "torchvision is not installed")
class Architectures(unittest.TestCase):
    def conforms(self, name, size=None):
        result = conform.conform(conform.tool_path(), name, size)
        print(conform.row(result))
        self.assertEqual(result.departures, [])
        self.assertLess(result.worst_ratio, 1.0)
        self.assertLess(result.logits_error, LOGITS_LIMIT)
        # The library's own metadata: num_params of each set of published weights.
        self.assertEqual(result.parameters, result.published_parameters)
        if size is None and name in PUBLISHED_MACS:
            expected, tolerance = PUBLISHED_MACS[name]
            self.assertLess(abs(result.macs - expected), tolerance * expected)
        return result

    def test_resnet18(self):
        self.conforms("resnet18")

    def test_resnet18_at_an_odd_size(self):
        self.conforms("resnet18", "229x173")

    def test_resnet50(self):
        self.conforms("resnet50")

    def test_mobilenet_v2(self):
        self.conforms("mobilenet_v2")

    def test_mobilenet_v2_at_an_odd_size(self):
        self.conforms("mobilenet_v2", "161x97")

    def test_vgg11(self):
        self.conforms("vgg11")

    def test_vit_b_16(self):
        self.conforms("vit_b_16")


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
