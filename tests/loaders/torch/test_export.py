"""Tests of loaders/torch/leadsman_export.py.

Run: python3 -m unittest discover -s tests/loaders/torch (about half a minute).
"""

import contextlib
import io
import json
import os
import sys
import tempfile
import unittest

import torch
import torch.nn.functional as F
import torchvision
from torch import nn

HERE = os.path.dirname(os.path.abspath(__file__))
ROOT = os.path.dirname(os.path.dirname(os.path.dirname(HERE)))
sys.path[:0] = [HERE, os.path.join(ROOT, "loaders", "torch")]

import graph_interpreter  # noqa: E402
import leadsman_export  # noqa: E402
import sample_models  # noqa: E402
from leadsman_export import (  # noqa: E402
    ExportError,
    export,
    settle_batch_norm,
    vary_constant_parameters,
)

torch.set_num_threads(min(2, torch.get_num_threads()))

# PyTorch computes in float32, the interpreter in double. One rounding is at most 6e-8 of a value;
# a layer of the samples sums up to 25088 products (VGG's first linear one), its error grows like
# the root of that at most. Through a whole network it grows again, measured at 2e-5 (ResNet-50).
ONE_LAYER = 6e-8 * 25088**0.5
WHOLE_NETWORK = 1e-4


def make_sample(name, seed=0, settle=True):
    build, shapes = sample_models.SAMPLES[name]
    torch.manual_seed(seed)
    module = build()
    inputs = tuple(torch.randn(shape) for shape in shapes)
    vary_constant_parameters(module, seed)
    if settle and len(inputs) == 1:
        settle_batch_norm(module, torch.randn(8, *shapes[0][1:]))
    return module, inputs


def relative_error(ours, theirs):
    return float((ours.double() - theirs.double()).norm() / theirs.double().norm().clamp_min(1e-30))


class FolderTest(unittest.TestCase):
    def setUp(self):
        folder = tempfile.TemporaryDirectory()
        self.addCleanup(folder.cleanup)
        self.folder = folder.name

    def export(self, module, *inputs, **options):
        """The graph, its layers by name."""
        export(module, inputs, self.folder, **options)
        graph = graph_interpreter.read_graph(self.folder)
        return graph, {layer["name"]: layer for layer in graph["layers"]}

    def path(self, name):
        return os.path.join(self.folder, name)


class MeaningTest(FolderTest):
    """graph.json with weights.safetensors means what PyTorch computed, layer by layer."""

    def check(self, name):
        module, inputs = make_sample(name)
        graph, layers = self.export(module, *inputs)
        reference, _ = graph_interpreter.read_safetensors(self.path("reference.safetensors"))
        names = [entry["name"] for entry in graph["inputs"]]
        self.assertEqual(set(reference), set(layers) | set(names))
        for input_name, tensor in zip(names, inputs):
            self.assertTrue(torch.equal(reference[input_name], tensor))
        # Each layer on the reference's inputs: what it adds is its own.
        alone = graph_interpreter.run(self.folder, reference, isolated=True)
        for layer in layers:
            self.assertEqual(alone[layer].shape, reference[layer].shape, layer)
            self.assertLess(relative_error(alone[layer], reference[layer]), ONE_LAYER, layer)
        chained = graph_interpreter.run(self.folder, dict(zip(names, inputs)))
        for layer in graph["outputs"]:
            self.assertLess(relative_error(chained[layer], reference[layer]), WHOLE_NETWORK, layer)
        module.eval()
        with torch.no_grad():
            outputs = module(*(tensor.clone() for tensor in inputs))
        outputs = outputs if isinstance(outputs, tuple) else (outputs,)
        self.assertEqual(len(outputs), len(graph["outputs"]), "no sample returns one twice")
        for output, tensor in zip(graph["outputs"], outputs):
            self.assertEqual(reference[output].shape, tensor.shape)
            self.assertLess(relative_error(reference[output], tensor), WHOLE_NETWORK, output)
            self.assertGreater(float(tensor.std()), 1e-4, "a trivial output shows nothing")

    def test_a_wrong_graph_differs(self):
        module, inputs = make_sample("vit")
        self.export(module, *inputs)
        with open(self.path("graph.json"), encoding="utf-8") as file:
            text = file.read()
        for right, wrong in (
            ('"heads": 3', '"heads": 4'),
            ('"kind": "gelu"', '"kind": "gelu_tanh"'),
            ('"index": 0', '"index": 1'),
            ('"eps": 1e-06', '"eps": 1e-04'),
            ('"encoder.ln.bias"', '"encoder.layers.encoder_layer_0.ln_1.bias"'),
        ):
            with self.subTest(wrong=wrong):
                self.assertIn(right, text)
                with open(self.path("graph.json"), "w", encoding="utf-8") as file:
                    file.write(text.replace(right, wrong))
                reference, _ = graph_interpreter.read_safetensors(
                    self.path("reference.safetensors")
                )
                ours = graph_interpreter.run(self.folder, reference, isolated=True)
                errors = [relative_error(ours[layer], reference[layer]) for layer in ours]
                self.assertGreater(max(errors), ONE_LAYER)


for _name in sample_models.SAMPLES:
    setattr(MeaningTest, f"test_{_name}", lambda self, name=_name: self.check(name))


class StructureTest(FolderTest):
    def operators(self, graph):
        return [layer["operator"] for layer in graph["layers"]]

    def test_resnet18(self):
        module, inputs = make_sample("resnet18")
        graph, layers = self.export(module, *inputs)
        self.assertEqual(
            self.operators(graph)[:4], ["conv2d", "batch_norm", "activation", "max_pool"]
        )
        # He et al. 2016, table 1: 17 convolutions and one linear layer, and 3 in the shortcuts.
        self.assertEqual(self.operators(graph).count("conv2d"), 20)
        self.assertEqual(self.operators(graph).count("add"), 8)
        self.assertEqual(layers["layer1.0.add"]["inputs"], ["layer1.0.bn2", "maxpool"])
        self.assertEqual(
            layers["layer2.0.add"]["inputs"], ["layer2.0.bn2", "layer2.0.downsample.1"]
        )
        self.assertEqual(layers["layer1.0.relu_1"]["inputs"], ["layer1.0.add"])
        self.assertEqual(layers["flatten"]["inputs"], ["avgpool"])
        self.assertEqual(graph["outputs"], ["fc"])
        self.assertEqual(
            layers["conv1"],
            {
                "name": "conv1",
                "operator": "conv2d",
                "inputs": ["image"],
                "attributes": {"kernel_size": [7, 7], "stride": [2, 2], "padding": [3, 3, 3, 3]},
                "weights": {"weight": "conv1.weight"},
            },
        )
        self.assertEqual(
            graph["inputs"],
            [{"name": "image", "shape": ["N", 3, "H", "W"], "usual_size": [64, 64]}],
        )

    def test_vit(self):
        module, inputs = make_sample("vit")
        graph, layers = self.export(module, *inputs)
        block = "encoder.layers.encoder_layer_0"
        self.assertEqual(
            [layer["name"] for layer in graph["layers"]][:9],
            [
                "conv_proj",
                "image_to_tokens",
                "class_token",
                "encoder.position_embed",
                "encoder.dropout",
                f"{block}.ln_1",
                f"{block}.self_attention.in_proj",
                f"{block}.self_attention.attention",
                f"{block}.self_attention.out_proj",
            ],
        )
        self.assertEqual(layers["class_token"]["weights"], {"weight": "class_token"})
        position = layers["encoder.position_embed"]
        self.assertEqual(position["inputs"], ["class_token", "conv_proj"])
        self.assertEqual(position["attributes"], {"prefix_tokens": 1})
        self.assertEqual(position["weights"], {"weight": "encoder.pos_embedding"})
        self.assertEqual(layers["select"]["inputs"], ["encoder.ln"])
        self.assertEqual(
            layers[f"{block}.self_attention.in_proj"]["weights"],
            {
                "weight": f"{block}.self_attention.in_proj_weight",
                "bias": f"{block}.self_attention.in_proj_bias",
            },
        )
        self.assertEqual(layers[f"{block}.self_attention.attention"]["attributes"], {"heads": 3})

    def test_dropout_stays_as_identity(self):
        module, inputs = make_sample("vgg11")
        _, layers = self.export(module, *inputs)
        self.assertEqual(layers["classifier.2"]["operator"], "identity")
        self.assertEqual(layers["classifier.5"]["operator"], "identity")

    def test_stochastic_depth_stays_as_identity(self):
        module = nn.Sequential(nn.Conv2d(3, 3, 1), torchvision.ops.StochasticDepth(0.5, "row"))
        _, layers = self.export(module, torch.randn(1, 3, 4, 4))
        self.assertEqual(layers["1"]["operator"], "identity")

    def test_encoder_layer_is_taken_to_pieces(self):
        for name in ("encoder_layer", "encoder_layer_norm_first"):
            with self.subTest(name):
                module, inputs = make_sample(name)
                _, layers = self.export(module, *inputs)
                self.assertLessEqual(
                    {
                        "self_attn.in_proj",
                        "self_attn.attention",
                        "self_attn.out_proj",
                        "norm1",
                        "linear2",
                    },
                    set(layers),
                )

    def test_padding_same(self):
        module, inputs = make_sample("windows")
        _, layers = self.export(module, *inputs)
        # dilation * (kernel - 1), halved; the odd pixel comes last, as torch.nn.Conv2d has it.
        self.assertEqual(layers["same"]["attributes"]["padding"], [2, 2, 2, 2])
        self.assertEqual(layers["even"]["attributes"]["padding"], [1, 0, 2, 1])
        self.assertNotIn("padding", layers["valid"].get("attributes", {}))

    def test_attention_projections(self):
        module, inputs = make_sample("attention")
        graph, layers = self.export(module, *inputs)
        self.assertEqual([entry["name"] for entry in graph["inputs"]], ["query", "key", "value"])
        self.assertEqual(layers["joint.in_proj"]["weights"], {"weight": "joint.in_proj_weight"})
        self.assertEqual(layers["joint.attention"]["inputs"], ["joint.in_proj"])
        self.assertEqual(layers["joint.attention_weights"]["inputs"], ["joint.in_proj"])
        self.assertEqual(layers["cross.k_proj"]["inputs"], ["query"])
        self.assertEqual(layers["cross.q_proj"]["inputs"], ["norm"])
        self.assertEqual(layers["sized.k_proj"]["weights"]["weight"], "sized.k_proj_weight")
        weights, _ = graph_interpreter.read_safetensors(self.path("weights.safetensors"))
        # The checkpoint has only the joint matrix of this one: its slices are new tensors.
        self.assertTrue(
            torch.equal(weights["cross.v_proj.weight"], module.cross.in_proj_weight[24:].detach())
        )
        self.assertNotIn("cross.in_proj_weight", weights)

    def test_unused_parts_are_left_out(self):
        class Auxiliary(nn.Module):
            def __init__(self):
                super().__init__()
                self.body, self.head = nn.Conv2d(3, 4, 1), nn.LSTM(4, 4)
                self.side = nn.Linear(4, 2)

            def forward(self, x):
                x = self.body(x)
                aside = self.side(x.mean((2, 3)))
                self.head(x.mean((2, 3)))  # has no operator, but nothing depends on it
                return x if aside is not None else None

        graph, layers = self.export(Auxiliary(), torch.randn(1, 3, 4, 4))
        self.assertEqual(list(layers), ["body"])

    def test_summary(self):
        module, inputs = make_sample("attention")
        summary = export(module, inputs, self.folder)
        self.assertEqual(summary["unused"], ["cross.in_proj_weight", "cross.in_proj_bias",
                                             "sized.in_proj_bias"])  # fmt: skip


class SizeTest(FolderTest):
    """A graph does not know the image size that it was traced at."""

    def graph_at(self, module, size):
        graph, _ = self.export(module, torch.randn(1, 3, *size), reference=False, name="same")
        for entry in graph["inputs"]:
            del entry["usual_size"]
        return graph

    def test_convolutional(self):
        for name in ("resnet18", "resnet50", "vgg11_bn", "mobilenet_v2", "button_conv"):
            with self.subTest(name):
                module, _ = make_sample(name, settle=False)
                self.assertEqual(
                    self.graph_at(module, (224, 224)), self.graph_at(module, (192, 160))
                )

    def test_tokens(self):
        class Tokens(nn.Module):
            def __init__(self):
                super().__init__()
                self.embed = nn.Conv2d(3, 8, 4, 4)
                self.mix = nn.MultiheadAttention(8, 2, batch_first=True)

            def forward(self, x):
                n, _, h, w = x.shape
                assert h % 4 == 0 and w % 4 == 0, "whole patches"
                x = self.embed(x).reshape(n, 8, (h // 4) * (w // 4)).permute(0, 2, 1)
                return self.mix(x, x, x)[0].mean(1)

        module = Tokens()
        self.assertEqual(self.graph_at(module, (16, 16)), self.graph_at(module, (24, 8)))

    def test_pooling_over_the_whole_image(self):
        class Whole(nn.Module):
            def forward(self, x):
                return torch.flatten(F.avg_pool2d(x, x.size()[2:]), 1)

        module = Whole()
        graph = self.graph_at(module, (16, 12))
        self.assertEqual(graph["layers"][0]["operator"], "adaptive_avg_pool")
        self.assertEqual(graph, self.graph_at(module, (5, 7)))

    def test_attributes_from_the_size_are_refused(self):
        class Baked(nn.Module):
            def forward(self, x):
                return F.adaptive_avg_pool2d(x, (x.shape[2] // 2, x.shape[3] // 2))

        with self.assertRaisesRegex(ExportError, "output_size .* computed from the image's size"):
            export(Baked(), torch.randn(1, 3, 8, 8), self.folder)

    def test_positions_cut_to_the_size_are_refused(self):
        class Cut(nn.Module):
            def __init__(self):
                super().__init__()
                self.place = nn.Parameter(torch.randn(1, 20, 6))

            def forward(self, x):
                return x + self.place[:, : x.shape[1]]

        with self.assertRaisesRegex(ExportError, "place holds only for the example's size"):
            export(Cut(), torch.randn(1, 8, 6), self.folder)
        graph, _ = self.export(Cut(), torch.randn(1, 20, 6))  # all of it: the parameter itself
        self.assertEqual(graph["layers"][0]["weights"], {"weight": "place"})

    def test_channels_may_be_read_from_the_shape(self):
        class Depthwise(nn.Module):
            def __init__(self):
                super().__init__()
                self.kernel = nn.Parameter(torch.randn(4, 1, 3, 3))

            def forward(self, x):
                n, c = x.shape[:2]
                x = F.conv2d(x, self.kernel, groups=c)
                x = F.conv2d(x, self.kernel, groups=x.size(1))
                x = F.conv2d(x, self.kernel, groups=x.size(dim=1), padding=x.dim() - 3)
                return x.reshape(n, c * x.shape[-1] * x.shape[-2])

        graph, _ = self.export(Depthwise(), torch.randn(1, 4, 12, 9))
        groups = [layer["attributes"]["groups"] for layer in graph["layers"][:3]]
        self.assertEqual(groups, [4, 4, 4])

    def test_sizes_by_functions_written_in_c(self):
        class Reshapes(nn.Module):
            def forward(self, x):
                return torch.reshape(
                    torch.reshape(x, (x.shape[0], x.shape[1], -1)), [x.size(0), -1]
                )

        reshape = torch.reshape
        graph, _ = self.export(Reshapes(), torch.randn(1, 4, 6, 5))
        self.assertEqual([layer["operator"] for layer in graph["layers"]], ["flatten"])
        self.assertIs(torch.reshape, reshape)


class NameTest(FolderTest):
    def test_reuse_and_functions(self):
        module, inputs = make_sample("shared")
        graph, layers = self.export(module, *inputs)
        self.assertEqual(
            [(layer["name"], layer["operator"]) for layer in graph["layers"]],
            [
                ("add", "conv2d"),
                ("relu", "activation"),
                ("add_1", "add"),
                ("add_2", "conv2d"),
                ("relu_1", "activation"),
                ("add_3", "add"),
                ("add_4", "conv2d"),
                ("relu_2", "activation"),
            ],
        )
        for name in ("add", "add_2", "add_4"):
            self.assertEqual(layers[name]["weights"]["weight"], "add.weight")

    def test_a_module_keeps_its_name_from_an_earlier_function(self):
        class Late(nn.Module):
            def __init__(self):
                super().__init__()
                self.relu = nn.ReLU()

            def forward(self, x):
                return self.relu(-1 * F.relu(x) if False else F.relu(x))

        _, layers = self.export(Late(), torch.randn(1, 3, 4, 4))
        self.assertEqual(list(layers), ["relu_1", "relu"])

    def test_no_colon(self):
        class Colon(nn.Module):
            def __init__(self):
                super().__init__()
                self.add_module("a:b", nn.ReLU())

            def forward(self, x):
                return getattr(self, "a:b")(x)

        graph, _ = self.export(Colon(), torch.randn(1, 3, 4, 4))
        self.assertEqual(graph["outputs"], ["a_b"])

    def test_functions_carry_the_calling_module(self):
        module, inputs = make_sample("button_conv")
        _, layers = self.export(module, *inputs)
        self.assertLessEqual(
            {"relu", "stage1.relu", "stage1.add", "stage1.relu_1", "flatten"}, set(layers)
        )

    def test_tensor_names_are_the_checkpoints(self):
        for name in ("resnet18", "mobilenet_v2", "vit", "button_vit", "encoder"):
            with self.subTest(name):
                module, inputs = make_sample(name)
                self.export(module, *inputs)
                weights, _ = graph_interpreter.read_safetensors(self.path("weights.safetensors"))
                state = module.state_dict()
                expected = {key for key, tensor in state.items() if tensor.is_floating_point()}
                self.assertEqual(set(weights), expected)
                for key, tensor in weights.items():
                    self.assertTrue(torch.equal(tensor, state[key]), key)

    def test_tied_and_computed_weights(self):
        class Tied(nn.Module):
            def __init__(self):
                super().__init__()
                self.one = nn.Linear(6, 6)
                self.two = nn.Linear(6, 6, bias=False)
                self.two.weight = self.one.weight
                self.three = nn.utils.weight_norm(nn.Linear(6, 6))

            def forward(self, x):
                return self.three(self.two(self.one(x)))

        module = Tied()
        _, layers = self.export(module, torch.randn(1, 6))
        self.assertEqual(layers["two"]["weights"], {"weight": "one.weight"})
        self.assertEqual(layers["three"]["weights"]["weight"], "three.weight")
        weights, _ = graph_interpreter.read_safetensors(self.path("weights.safetensors"))
        self.assertTrue(torch.allclose(weights["three.weight"], module.three.weight))


class ErrorTest(FolderTest):
    def refuse(self, module, example=None):
        """The message; nothing may be written."""
        example = torch.randn(1, 4, 6, 6) if example is None else example
        with self.assertRaises(ExportError) as caught:
            export(module, example, self.folder)
        self.assertEqual(os.listdir(self.folder), [])
        return caught.exception

    def expect(self, error, reason, path, class_name, line):
        self.assertRegex(error.reason, reason)
        self.assertEqual((error.path, error.class_name), (path, class_name))
        file, number = error.source.rsplit(":", 1)
        self.assertEqual(file, os.path.abspath(__file__))
        with open(__file__, encoding="utf-8") as source:
            self.assertIn(line, source.read().splitlines()[int(number) - 1])
        self.assertTrue(error.advice)
        for part in (error.reason, error.source, error.advice, class_name, line):
            self.assertIn(part, str(error))

    def test_module_without_operator(self):
        class Recurrent(nn.Module):
            def __init__(self):
                super().__init__()
                self.memory = nn.LSTM(4, 4, batch_first=True)

            def forward(self, x):
                y, _ = self.memory(x.flatten(2).transpose(1, 2))
                return y

        class Outer(nn.Module):
            def __init__(self):
                super().__init__()
                self.inner = Recurrent()

            def forward(self, x):
                return self.inner(x)

        self.expect(
            self.refuse(Outer()),
            r"no operator for the module torch\.nn\.modules\.rnn\.LSTM",
            "inner.memory",
            "LSTM",
            "y, _ = self.memory(",
        )

    def test_function_and_method_without_operator(self):
        class Function(nn.Module):
            def forward(self, x):
                return torch.cumsum(x, 1)

        class Method(nn.Module):
            def forward(self, x):
                return x.exp()

        self.expect(
            self.refuse(Function()), "function .*cumsum", "", "Function", "torch.cumsum(x, 1)"
        )
        self.expect(self.refuse(nn.Sequential(Method())), "method exp", "0", "Method", "x.exp()")

    def test_data_dependent(self):
        class Decides(nn.Module):
            def forward(self, x):
                if x.mean() > 0:
                    return x
                return torch.relu(x)

        class Counts(nn.Module):
            def forward(self, x):
                if int(x.sum()) > 3:
                    return x
                return torch.relu(x)

        class Loops(nn.Module):
            def forward(self, x):
                for row in x:
                    x = x + row
                return x

        class Ranges(nn.Module):
            def forward(self, x):
                for _ in range(x.shape[2]):
                    x = torch.relu(x)
                return x

        class Item(nn.Module):
            def forward(self, x):
                return x if x.max().item() > 0 else torch.relu(x)

        self.expect(self.refuse(Decides()), "a decision depends", "", "Decides", "if x.mean() > 0:")
        self.expect(self.refuse(Counts()), "Python number depends", "", "Counts", "if int(x.sum())")
        self.expect(self.refuse(Loops()), "loop over a tensor", "", "Loops", "for row in x:")
        self.expect(self.refuse(Ranges()), "size of the example", "", "Ranges", "range(x.shape[2])")
        self.expect(self.refuse(Item()), "a decision depends", "", "Item", "x.max().item() > 0")

    def test_untraceable(self):
        class Writes(nn.Module):
            def forward(self, x):
                x[:, 0] = 0
                return x

        self.expect(
            self.refuse(Writes()), "cannot be traced: TypeError", "", "Writes", "x[:, 0] = 0"
        )

    def test_random(self):
        class Random(nn.Module):
            def forward(self, x):
                return torch.relu(x) + torch.randn(1, 4, 6, 6)

        self.assertRegex(self.refuse(Random()).reason, "constant")

    def test_module_with_state(self):
        class Counter(nn.Module):
            calls = 0

            def forward(self, x):
                self.calls += 1
                return torch.relu(x) if self.calls % 2 else x

        self.assertRegex(self.refuse(Counter()).reason, "differs from what the model itself")

    def test_refused_options(self):
        class Call(nn.Module):
            def __init__(self, function):
                super().__init__()
                self.function = function

            def forward(self, x):
                return self.function(x)

        mha = nn.MultiheadAttention(6, 2, batch_first=True)
        tokens = torch.randn(1, 5, 6)
        cases = [
            (nn.Sequential(nn.Conv2d(4, 4, 3, padding=1, padding_mode="reflect")), None, "reflect"),
            (nn.Sequential(nn.BatchNorm2d(4, track_running_stats=False)), None, "statistics"),
            (Call(lambda x: F.dropout(x, 0.5)), None, "drops values"),
            (Call(lambda x: 1.0 / x), None, "divides by a tensor"),
            (nn.Sequential(nn.Softplus(beta=2)), None, "softplus with beta=2"),
            (Call(lambda x: F.softplus(x, threshold=3)), None, "threshold=3"),
            (Call(lambda x: x.softmax(2)), None, "softmax along axis 2"),
            (Call(lambda x: x.mean(2)), None, "mean over the axes"),
            (Call(lambda x: x * x.max()), None, "max without an axis"),
            (Call(lambda x: x.max(1, keepdim=True)[1]), None, "places of the largest values"),
            (Call(lambda x: x + x[:, :1]), None, "repeats one of its operands"),
            (Call(lambda x: x[:, :, 1:3]), None, "a slice 1:3:1 along axis 2"),
            (Call(lambda x: x[:, 1]), None, "one channel of image without an axis"),
            (Call(lambda x: x.flatten(2) @ x.flatten(2).mT), None, "the product of image_to"),
            (Call(lambda x: x @ x.mT + x.mean()), tokens, "depends on the input|mean over"),
            (Call(lambda x: (x @ x.mT).softmax(0)), tokens, "scores along axis 0"),
            (Call(lambda x: x @ x.mT), tokens, "understood only as attention"),
            (Call(lambda x: (x @ x.mT).softmax(1) @ x), tokens, "product of attention's scores"),
            (Call(lambda x: x + x.mean((2, 3), keepdim=True)), None, "repeats one of its operands"),
            (Call(lambda x: torch.cat([x, x], 2)), None, "only channels|along axis 2"),
            (Call(lambda x: x.view(1, 2, 2, 6, 6)), None, r"axes \[N, C0, C1, H, W\] \(C0 = 2"),
            (Call(lambda x: x.view(1, 9, 16)), None, "mixes axes"),
            (Call(lambda x: x.permute(0, 2, 3, 1)), None, r"axes \[N, H, W, C\]"),
            (Call(lambda x: torch.max_pool2d(x.permute(0, 2, 3, 1), 2)), None, "needs an image"),
            (Call(lambda x: F.layer_norm(x, x.shape[1:])), None, "over 3 axes"),
            (Call(lambda x: mha(x, x, x)[1]), tokens, "averaged over its heads"),
            (Call(lambda x: x[:, -1]), tokens, "counted from the end"),
            (Call(lambda x: torch.ones(1, 2)), None, "does not depend on its input"),
            (Call(lambda x: {}), None, "returns no tensor"),
            (Call(lambda x: x), torch.randn(1, 2, 3, 4, 5), "the input x is"),
        ]
        for module, example, reason in cases:
            with self.subTest(reason):
                if module.__class__ is Call and "averaged" in reason:
                    module.attention = mha
                self.assertRegex(self.refuse(module, example).reason, reason)

    def test_hooks(self):
        module = nn.Sequential(nn.Conv2d(4, 4, 1), nn.ReLU())
        seen = []
        hook = module[0].register_forward_hook(lambda m, i, o: seen.append(o.detach()))
        self.export(module, torch.randn(1, 4, 6, 6), reference=False)
        self.assertTrue(seen)
        hook.remove()
        for name in os.listdir(self.folder):
            os.remove(self.path(name))
        module[0].register_forward_hook(lambda m, i, o: o * 2)
        error = self.refuse(module)
        self.assertRegex(error.reason, "hook changes")
        self.assertEqual((error.path, error.class_name), ("0", "Conv2d"))

    def test_masks_are_refused(self):
        class Masked(nn.Module):
            def __init__(self):
                super().__init__()
                self.mix = nn.MultiheadAttention(6, 2, batch_first=True)
                self.register_buffer("mask", torch.ones(5, 5).triu(1).bool())

            def forward(self, x):
                return self.mix(x, x, x, attn_mask=self.mask)[0]

        self.assertRegex(self.refuse(Masked(), torch.randn(1, 5, 6)).reason, "with a mask")

    def test_positions_of_a_grid_that_would_be_misread(self):
        class Long(nn.Module):
            def __init__(self):
                super().__init__()
                self.place = nn.Parameter(torch.randn(1, 16, 4))

            def forward(self, x):
                return x.flatten(2).transpose(1, 2) + self.place

        self.assertRegex(self.refuse(Long(), torch.randn(1, 4, 2, 8)).reason, "2 x 8")


class FileTest(FolderTest):
    def test_files(self):
        module, inputs = make_sample("perceptron")
        preprocess = {"channels": "GREY", "scale": 0.5}
        labels = ["horn", "perle d'été", "c", "d", "e"]
        graph, _ = self.export(module, *inputs, labels=labels, preprocess=preprocess, name="p")
        self.assertEqual(
            sorted(os.listdir(self.folder)),
            ["graph.json", "labels.txt", "reference.safetensors", "weights.safetensors"],
        )
        with open(self.path("labels.txt"), encoding="utf-8") as file:
            self.assertEqual(file.read().split("\n"), [*labels, ""])
        self.assertEqual((graph["name"], graph["preprocess"]), ("p", preprocess))
        _, metadata = graph_interpreter.read_safetensors(self.path("reference.safetensors"))
        self.assertEqual(metadata, {"library": "torch", "version": str(torch.__version__)})

    def test_a_reference_of_other_weights_does_not_stay(self):
        module, inputs = make_sample("perceptron")
        self.export(module, *inputs)
        self.export(module, *inputs, reference=False)
        self.assertNotIn("reference.safetensors", os.listdir(self.folder))

    def test_wrong_labels(self):
        module, inputs = make_sample("perceptron")
        for labels in (["a", "b"], ["a", "b", "c", "d", "e\nf"]):
            with self.assertRaises(ValueError):
                self.export(module, *inputs, labels=labels)
        self.assertEqual(os.listdir(self.folder), [])

    def test_an_interrupted_write_leaves_the_old_file(self):
        path = self.path("a.safetensors")
        leadsman_export.write_safetensors(path, {"x": torch.ones(3)})
        with self.assertRaises(KeyError):  # an integer type: known only once writing began
            leadsman_export.write_safetensors(path, {"x": torch.ones(3, dtype=torch.int64)})

        class Broken:
            dtype, shape = torch.float32, (1,)

            def numel(self):
                return 1

            element_size = numel

        with self.assertRaises(AttributeError):
            leadsman_export.write_safetensors(path, {"x": Broken()})
        self.assertEqual(os.listdir(self.folder), ["a.safetensors"])
        self.assertEqual(graph_interpreter.read_safetensors(path)[0]["x"].tolist(), [1, 1, 1])

    def test_types_stay_as_stored(self):
        tensors = {
            "half": torch.tensor([1.0, 2.5, -3.0]).half(),
            "brain": torch.tensor([[1.0], [-2.5]]).bfloat16(),
            "single": torch.tensor(3.0),
            "double": torch.tensor([1e-300, 2.0], dtype=torch.float64),
            "empty": torch.zeros(0, 4),
            "turned": torch.arange(6.0).reshape(2, 3).t(),
        }
        path = self.path("a.safetensors")
        leadsman_export.write_safetensors(path, tensors, {"key": "wert ü"})
        back, metadata = graph_interpreter.read_safetensors(path)
        self.assertEqual(metadata, {"key": "wert ü"})
        for name, tensor in tensors.items():
            self.assertEqual(back[name].tolist(), tensor.tolist(), name)
        with open(path, "rb") as file:
            header = json.loads(file.read()[8:].split(b"\x00")[0].split(b"}}")[0] + b"}}")
        for name, dtype, size in (("half", "F16", 2), ("brain", "BF16", 2), ("double", "F64", 8)):
            self.assertEqual(header[name]["dtype"], dtype)
            self.assertEqual(header[name]["data_offsets"][0] % size, 0)

    def test_modules_of_other_types(self):
        for dtype, rounding in ((torch.float64, 1e-6), (torch.bfloat16, 3e-2)):
            with self.subTest(dtype):
                module, (example,) = make_sample("perceptron")
                self.export(module.to(dtype), example.to(dtype))
                reference, _ = graph_interpreter.read_safetensors(
                    self.path("reference.safetensors")
                )
                ours = graph_interpreter.run(self.folder, {"features": example.to(dtype)})
                for name, tensor in reference.items():
                    self.assertEqual(tensor.dtype, torch.float32)
                    self.assertLess(relative_error(ours[name], tensor), rounding, name)

    def test_the_file_shipped_in_a_single_folder_level(self):
        module, inputs = make_sample("perceptron")
        deep = self.path("a/b/c")
        export(module, inputs, deep)
        self.assertEqual(graph_interpreter.read_graph(deep)["name"], "c")


class InputTest(FolderTest):
    def test_arguments_that_are_not_given(self):
        class Optional(nn.Module):
            def forward(self, image, mask=None, twice=False, *, name="x"):
                image = F.relu(image)
                if mask is not None or twice:
                    image = image + mask
                return {"out": image, "again": [image]} if name == "x" else None

        graph, _ = self.export(Optional(), torch.randn(1, 3, 4, 4))
        self.assertEqual(len(graph["inputs"]), 1)
        self.assertEqual(graph["outputs"], ["relu"])

    def test_inputs_without_names_of_their_own(self):
        class Many(nn.Module):
            def forward(self, *images):
                return images[0] + images[1]

        graph, _ = self.export(Many(), torch.randn(1, 3, 4, 4), torch.randn(1, 3, 4, 4))
        self.assertEqual(graph["layers"][0]["inputs"], ["images_0", "images_1"])

    def test_several_inputs(self):
        class Two(nn.Module):
            def forward(self, left, right):
                return left + right

        graph, _ = self.export(Two(), torch.randn(1, 3, 4, 4), torch.randn(1, 3, 4, 4))
        self.assertEqual([entry["name"] for entry in graph["inputs"]], ["left", "right"])
        self.assertEqual(graph["layers"][0]["inputs"], ["left", "right"])


class ModuleTest(FolderTest):
    """The user's module is left as it was."""

    def state_of(self, module):
        return {
            name: (m.training, {k: v for k, v in vars(m).items() if k != "training"})
            for name, m in module.named_modules()
        }

    def test_flags_attributes_and_weights(self):
        class Keeps(nn.Module):
            def __init__(self):
                super().__init__()
                self.conv, self.norm = nn.Conv2d(3, 4, 1), nn.BatchNorm2d(4)
                self.last = None

            def forward(self, x):
                self.last = self.norm(self.conv(x))
                self.more = self.last
                return self.last

        module = Keeps()
        module.train()
        module.norm.eval()
        flags = [m.training for m in module.modules()]
        weights = {name: tensor.clone() for name, tensor in module.state_dict().items()}
        export(module, torch.randn(2, 3, 4, 4), self.folder)
        self.assertEqual([m.training for m in module.modules()], flags)
        for name, tensor in module.state_dict().items():
            self.assertTrue(torch.equal(tensor, weights[name]), name)
        self.assertNotIsInstance(module.last, torch.fx.Proxy)
        self.assertNotIsInstance(module.more, torch.fx.Proxy)
        self.assertTrue(all(p.requires_grad for p in module.parameters()))

    def test_after_an_error(self):
        class Fails(nn.Module):
            def forward(self, x):
                return torch.cumsum(x, 1) + torch.ones(1)

        module = Fails()
        with self.assertRaises(ExportError):
            export(module, torch.randn(1, 3, 4, 4), self.folder)
        self.assertTrue(module.training)
        self.assertFalse([name for name in vars(module) if "constant" in name])

    def test_the_example_is_not_changed(self):
        example = torch.randn(1, 3, 4, 4)
        before = example.clone()
        export(nn.Sequential(nn.ReLU(inplace=True)), example, self.folder)
        self.assertTrue(torch.equal(example, before))


class WeightsTest(FolderTest):
    def test_settle_batch_norm(self):
        torch.manual_seed(0)
        module = nn.Sequential(nn.BatchNorm2d(3, momentum=0.3), nn.Dropout(0.9))
        module.train()
        batch = torch.randn(16, 3, 9, 9) * 4 + 7
        settle_batch_norm(module, batch)
        norm = module[0]
        self.assertTrue(torch.allclose(norm.running_mean, batch.mean((0, 2, 3)), rtol=1e-5))
        variance = batch.transpose(0, 1).flatten(1).var(1)
        self.assertTrue(torch.allclose(norm.running_var, variance, rtol=1e-4))
        self.assertEqual((norm.momentum, norm.training, module.training), (0.3, True, True))
        settle_batch_norm(module, [batch, batch + 2])  # each batch counts the same
        self.assertTrue(torch.allclose(norm.running_mean, batch.mean((0, 2, 3)) + 1, rtol=1e-5))

    def test_constant_parameters_vary(self):
        module = sample_models.small_vit()
        self.assertTrue(any(float(p.detach().std()) == 0 for p in module.parameters()))
        before = module.conv_proj.weight.detach().clone()
        vary_constant_parameters(module, seed=3)
        self.assertTrue(all(float(p.detach().std()) > 0 for p in module.parameters()))
        self.assertTrue(torch.equal(module.conv_proj.weight, before))
        self.assertLess(abs(float(module.encoder.ln.weight.detach().mean()) - 1), 0.1)
        again = sample_models.small_vit()
        vary_constant_parameters(again, seed=3)
        self.assertTrue(torch.equal(module.heads.head.weight, again.heads.head.weight))


class CommandTest(FolderTest):
    def run_command(self, *arguments):
        output = io.StringIO()
        with contextlib.redirect_stdout(output), contextlib.redirect_stderr(output):
            try:
                code = leadsman_export.main(list(arguments))
            except SystemExit as stop:
                code = stop.code
        return code, output.getvalue()

    def test_seeded(self):
        texts = []
        for seed in ("1", "1", "2"):
            code, output = self.run_command(
                "--torchvision", "mobilenet_v2", "--seed", seed, "--size", "64x96",
                "--out", self.folder,
            )  # fmt: skip
            self.assertEqual(code, 0, output)
            with open(self.path("reference.safetensors"), "rb") as file:
                texts.append(file.read())
        self.assertIn("153 layers", output)
        self.assertEqual(texts[0], texts[1])
        self.assertNotEqual(texts[0], texts[2])
        graph = graph_interpreter.read_graph(self.folder)
        self.assertEqual(graph["name"], "mobilenet_v2")
        self.assertEqual(graph["inputs"][0]["usual_size"], [64, 96])
        self.assertEqual(graph["preprocess"]["crop"], [64, 96])
        with open(self.path("labels.txt"), encoding="utf-8") as file:
            self.assertEqual(len(file.read().splitlines()), 1000)

    def test_checkpoint_and_labels(self):
        torch.manual_seed(5)
        module = torchvision.models.mobilenet_v2(num_classes=3)
        torch.save({"state_dict": {f"module.{k}": v for k, v in module.state_dict().items()}},
                   self.path("net.pth"))  # fmt: skip
        with open(self.path("names.txt"), "w", encoding="utf-8") as file:
            file.write("a\nb\nc\n")
        out = self.path("bundle")
        code, output = self.run_command(
            "--torchvision", "mobilenet_v2", "--checkpoint", self.path("net.pth"),
            "--labels", self.path("names.txt"), "--size", "64x64", "--out", out,
        )  # fmt: skip
        self.assertEqual(code, 0, output)
        weights, _ = graph_interpreter.read_safetensors(os.path.join(out, "weights.safetensors"))
        self.assertTrue(
            torch.equal(weights["classifier.1.weight"], module.classifier[1].weight.detach())
        )

    def test_wrong_use(self):
        for arguments, said in (
            (("--torchvision", "no_such_net", "--out", self.folder), "no_such_net"),
            (("--torchvision", "resnet18", "--size", "64", "--out", self.folder), "64x|HxW"),
            (("--torchvision", "resnet18"), "--out"),
            (("--torchvision", "vit_b_16", "--size", "64x96", "--out", self.folder), "square"),
        ):
            with self.subTest(arguments):
                code, output = self.run_command(*arguments)
                self.assertEqual(code, 2)
                self.assertRegex(output, said)

    def test_wrong_files(self):
        torch.save({"fc.weight": torch.ones(2)}, self.path("other.pth"))
        with open(self.path("text.pth"), "w", encoding="utf-8") as file:
            file.write("no checkpoint")
        for option, name in (
            ("--checkpoint", "missing.pth"),
            ("--checkpoint", "other.pth"),
            ("--checkpoint", "text.pth"),
            ("--labels", "missing.txt"),
        ):
            with self.subTest(name):
                code, output = self.run_command(
                    "--torchvision", "mobilenet_v2", option, self.path(name), "--out",
                    self.path("bundle"),
                )  # fmt: skip
                self.assertEqual(code, 3)
                self.assertRegex(output, f"error: .*{name}")
                self.assertFalse(os.path.exists(self.path("bundle")))


if __name__ == "__main__":
    unittest.main()
