"""Tests of loaders/graph.schema.json: what is exported fits it, and what is broken does not."""

import copy
import json
import os
import re
import sys
import tempfile
import unittest

import jsonschema

HERE = os.path.dirname(os.path.abspath(__file__))
ROOT = os.path.dirname(os.path.dirname(os.path.dirname(HERE)))
sys.path[:0] = [HERE, os.path.join(ROOT, "loaders", "torch")]

import graph_interpreter  # noqa: E402
import sample_models  # noqa: E402
from leadsman_export import export  # noqa: E402
from test_export import make_sample  # noqa: E402

with open(os.path.join(ROOT, "loaders", "graph.schema.json"), encoding="utf-8") as _file:
    SCHEMA = json.load(_file)
VALIDATOR = jsonschema.Draft202012Validator(SCHEMA)
with open(os.path.join(ROOT, "loaders", "GRAPH_FORMAT.md"), encoding="utf-8") as _file:
    FORMAT = _file.read()


def layer(operator, inputs=("image",), **more):
    return {"name": "l", "operator": operator, "inputs": list(inputs), **more}


# A layer of each operator that is right, with everything it may have.
RIGHT = {
    "conv2d": layer(
        "conv2d",
        attributes={"kernel_size": [3, 1], "stride": 2, "padding": [1, 0, 2, 0], "dilation": [1, 2],
                    "groups": 4},
        weights={"weight": "w", "bias": "b"},
    ),
    "linear": layer("linear", weights={"weight": "w", "bias": "b"}),
    "batch_norm": layer(
        "batch_norm",
        attributes={"eps": 1e-5},
        weights={"weight": "w", "bias": "b", "mean": "m", "variance": "v"},
    ),
    "layer_norm": layer(
        "layer_norm", attributes={"eps": 1e-6}, weights={"weight": "w", "bias": "b"}
    ),
    "activation": layer("activation", attributes={"kind": "leaky_relu", "slope": 0.2}),
    "add": layer("add", ["a", "b"]),
    "mul": layer("mul", ["a", "b"]),
    "concat": layer("concat", ["a", "b", "c"]),
    "max_pool": layer(
        "max_pool",
        attributes={"kernel_size": 3, "stride": 0, "padding": [1, 1], "dilation": 1,
                    "ceil_mode": True},
    ),
    "avg_pool": layer(
        "avg_pool",
        attributes={"kernel_size": [3, 3], "stride": [2, 2], "padding": 1, "ceil_mode": False,
                    "count_padding": False},
    ),
    "adaptive_avg_pool": layer("adaptive_avg_pool", attributes={"output_size": [7, 7]}),
    "flatten": layer("flatten"),
    "image_to_tokens": layer("image_to_tokens"),
    "class_token": layer("class_token", weights={"weight": "w"}),
    "position_embed": layer(
        "position_embed", ["t", "i"], attributes={"prefix_tokens": 0}, weights={"weight": "w"}
    ),
    "attention": layer("attention", ["q", "k", "v"], attributes={"heads": 3, "scale": 0.5}),
    "attention_weights": layer(
        "attention_weights", ["q", "k"], attributes={"heads": 3}, weights={"position_bias": "p"}
    ),
    "select": layer("select", attributes={"index": 0}),
    "mean": layer("mean", attributes={"keep": True}),
    "softmax": layer("softmax", attributes={}, weights={}),
    "identity": layer("identity"),
    "pad": layer("pad", attributes={"padding": [1, 0, 2, 0], "value": -1, "mode": "constant"}),
    "resize": layer("resize", attributes={"factor": [2, 2], "interpolation": "bilinear"}),
    "l2_normalize": layer("l2_normalize", attributes={"eps": 1e-12}),
    "group_norm": layer(
        "group_norm", attributes={"groups": 2, "eps": 1e-5}, weights={"weight": "w", "bias": "b"}
    ),
    "local_response_norm": layer(
        "local_response_norm", attributes={"size": 5, "alpha": 1e-4, "beta": 0.75, "k": 2}
    ),
    "adaptive_max_pool": layer("adaptive_max_pool", attributes={"output_size": 1}),
    "scale": layer(
        "scale", attributes={"factor": 2, "offset": -0.5}, weights={"weight": "w", "bias": "b"}
    ),
    "slice": layer("slice", attributes={"axis": "tokens", "start": 1, "count": 0}),
    "channel_pool": layer("channel_pool", attributes={"kind": "max"}),
    "channel_shuffle": layer("channel_shuffle", attributes={"groups": 2}),
    "features_to_image": layer("features_to_image"),
    "tokens_to_image": layer("tokens_to_image", ["t", "i"]),
    "transpose": layer("transpose"),
    "space_to_depth": layer("space_to_depth", attributes={"block": [2, 2], "order": "rows"}),
    "window_attention": layer(
        "window_attention",
        attributes={"heads": 2, "window": [7, 7], "shift": [3, 0], "arrangement": "window",
                    "scale": 0.1, "cosine": False},
        weights={"position_bias": "p", "head_scale": "h", "padding": "b"},
    ),
}  # fmt: skip

GRAPH = {
    "leadsman_graph": 1,
    "name": "g",
    "inputs": [{"name": "image", "shape": ["N", 3, "H", "W"], "usual_size": [8, 8]}],
    "outputs": ["l"],
    "layers": [RIGHT["flatten"]],
    "preprocess": {
        "resize": {"shorter_side": 256, "interpolation": "bicubic"},
        "crop": [224, 224],
        "channels": "BGR",
        "orientation": "exif",
        "scale": 0.1,
        "mean": [0, 0.5, 0],
        "std": [1, 2, 0.5],
    },
}

DELETE = object()

# operator, path in its right layer, what stands there instead.
BROKEN_LAYERS = [
    ("conv2d", ["operator"], "conv3d"),
    ("conv2d", ["name"], "a:b"),
    ("conv2d", ["name"], ""),
    ("conv2d", ["name"], DELETE),
    ("conv2d", ["inputs"], DELETE),
    ("conv2d", ["inputs"], []),
    ("conv2d", ["inputs"], "image"),
    ("conv2d", ["inputs"], ["a", "b"]),
    ("conv2d", ["comment"], "hello"),
    ("conv2d", ["attributes"], DELETE),
    ("conv2d", ["attributes", "kernel_size"], DELETE),
    ("conv2d", ["attributes", "kernel_size"], 0),
    ("conv2d", ["attributes", "kernel_size"], [3, 3, 3]),
    ("conv2d", ["attributes", "kernel_size"], [3]),
    ("conv2d", ["attributes", "kernel_size"], 2.5),
    ("conv2d", ["attributes", "stride"], 0),
    ("conv2d", ["attributes", "stride"], [1, -1]),
    ("conv2d", ["attributes", "padding"], -1),
    ("conv2d", ["attributes", "padding"], [1, 1, 1]),
    ("conv2d", ["attributes", "padding"], "same"),
    ("conv2d", ["attributes", "groups"], 0),
    ("conv2d", ["attributes", "groups"], True),
    ("conv2d", ["attributes", "ceil_mode"], False),
    ("conv2d", ["weights"], DELETE),
    ("conv2d", ["weights", "weight"], DELETE),
    ("conv2d", ["weights", "bias"], ""),
    ("conv2d", ["weights", "mean"], "m"),
    ("linear", ["attributes"], {"bias": True}),
    ("linear", ["weights", "weight"], DELETE),
    ("batch_norm", ["attributes", "eps"], "1e-5"),
    ("batch_norm", ["attributes", "momentum"], 0.1),
    ("batch_norm", ["weights", "mean"], DELETE),
    ("batch_norm", ["weights", "variance"], DELETE),
    ("batch_norm", ["weights", "running_mean"], "m"),
    ("layer_norm", ["attributes", "eps"], -1e-5),
    ("layer_norm", ["weights", "mean"], "m"),
    ("activation", ["attributes", "kind"], DELETE),
    ("activation", ["attributes", "kind"], "swish"),
    ("activation", ["attributes", "kind"], "relu"),  # with a slope
    ("activation", ["attributes", "alpha"], 1.0),  # of leaky_relu
    ("activation", ["weights"], {"weight": "w"}),
    ("add", ["inputs"], ["a"]),
    ("add", ["inputs"], ["a", "b", "c"]),
    ("mul", ["inputs"], ["a"]),
    ("mul", ["attributes"], {"factor": 2}),
    ("concat", ["inputs"], ["a"]),
    ("concat", ["attributes"], {"axis": 1}),
    ("max_pool", ["attributes", "kernel_size"], DELETE),
    ("max_pool", ["attributes", "ceil_mode"], 1),
    ("max_pool", ["attributes", "count_padding"], True),
    ("max_pool", ["attributes", "stride"], [0, 1]),
    ("avg_pool", ["attributes", "dilation"], 1),
    ("avg_pool", ["attributes", "count_padding"], "no"),
    ("adaptive_avg_pool", ["attributes"], DELETE),
    ("adaptive_avg_pool", ["attributes", "output_size"], 0),
    ("flatten", ["attributes"], {"start": 1}),
    ("image_to_tokens", ["inputs"], ["a", "b"]),
    ("class_token", ["weights"], DELETE),
    ("class_token", ["weights", "weight"], 3),
    ("position_embed", ["inputs"], ["a", "b", "c"]),
    ("position_embed", ["attributes", "prefix_tokens"], -1),
    ("position_embed", ["weights"], {}),
    ("attention", ["inputs"], ["q", "k"]),
    ("attention", ["inputs"], ["q", "k", "v", "m"]),
    ("attention", ["attributes", "heads"], DELETE),
    ("attention", ["attributes", "heads"], 0),
    ("attention", ["attributes", "mask"], "causal"),
    ("attention_weights", ["inputs"], ["q", "k", "v"]),
    ("attention_weights", ["attributes"], DELETE),
    ("select", ["attributes"], {}),
    ("select", ["attributes", "index"], -1),
    ("select", ["attributes", "index"], 0.5),
    ("mean", ["attributes", "keep"], 1),
    ("softmax", ["attributes"], {"axis": -1}),
    ("identity", ["weights"], {"weight": "w"}),
]

BROKEN_GRAPHS = [
    (["leadsman_graph"], 2),
    (["leadsman_graph"], "1"),
    (["leadsman_graph"], DELETE),
    (["name"], ""),
    (["name"], DELETE),
    (["inputs"], []),
    (["inputs"], DELETE),
    (["inputs", 0, "name"], "a:b"),
    (["inputs", 0, "shape"], DELETE),
    (["inputs", 0, "shape"], []),
    (["inputs", 0, "shape"], ["N", 0, "H", "W"]),
    (["inputs", 0, "shape"], ["N", "C", "H", "W"]),
    (["inputs", 0, "shape"], ["N", 3, "W", "H"]),
    (["inputs", 0, "shape"], ["H", 3, "N", "W"]),
    (["inputs", 0, "shape"], ["N", "T", 12]),  # with a usual size
    (["inputs", 0, "usual_size"], [8]),
    (["inputs", 0, "usual_size"], 8),
    (["inputs", 0, "type"], "float"),
    (["outputs"], []),
    (["outputs"], DELETE),
    (["outputs"], "l"),
    (["layers"], {}),
    (["layers"], DELETE),
    (["weights"], {}),
    (["preprocess"], None),
    (["preprocess", "size"], 224),
    (["preprocess", "crop"], 224),
    (["preprocess", "crop"], [224, 0]),
    (["preprocess", "channels"], "rgb"),
    (["preprocess", "orientation"], "turned"),
    (["preprocess", "scale"], "1/255"),
    (["preprocess", "mean"], []),
    (["preprocess", "mean"], 0.5),
    (["preprocess", "std"], [1, 0, 1]),
    (["preprocess", "resize"], {}),
    (["preprocess", "resize", "exact"], [9, 9]),  # beside shorter_side
    (["preprocess", "resize", "interpolation"], "lanczos"),
    (["preprocess", "resize", "shorter_side"], [256, 256]),
    (["preprocess", "resize", "antialias"], True),
]


def with_change(document, path, value):
    document = copy.deepcopy(document)
    place = document
    for key in path[:-1]:
        place = place[key]
    if value is DELETE:
        del place[path[-1]]
    else:
        place[path[-1]] = value
    return document


class SchemaTest(unittest.TestCase):
    def graph_of(self, *layers):
        return {**GRAPH, "layers": list(layers)}

    def test_the_schema_is_one(self):
        jsonschema.Draft202012Validator.check_schema(SCHEMA)
        self.assertEqual(SCHEMA["$id"], "urn:leadsman:graph:1")

    def test_the_same_operators_as_the_document(self):
        table = FORMAT.split("## Operators")[1].split("\n## ")[0]
        documented = re.findall(r"^\| (\w+) \|", table, re.MULTILINE)[1:]
        self.assertEqual(
            sorted(documented), sorted(SCHEMA["$defs"]["layer"]["properties"]["operator"]["enum"])
        )
        self.assertEqual(sorted(documented), sorted(RIGHT))
        kinds = re.search(r"kind: ([\w, ]+);", table).group(1).split(", ")
        for kind in kinds:
            VALIDATOR.validate(self.graph_of(layer("activation", attributes={"kind": kind})))

    def test_the_documents_example(self):
        VALIDATOR.validate(json.loads(re.search(r"```json\n(.*?)```", FORMAT, re.DOTALL).group(1)))

    def test_right_layers(self):
        for operator, right in RIGHT.items():
            with self.subTest(operator):
                VALIDATOR.validate(self.graph_of(right))

    def test_right_graphs(self):
        VALIDATOR.validate(GRAPH)
        for path, value in (
            (["preprocess"], DELETE),
            (["preprocess"], {}),
            (["preprocess", "resize"], {"exact": [9, 9]}),
            (["inputs", 0, "usual_size"], DELETE),
            (["inputs", 0, "shape"], ["N", 3, 64, 64]),
            (["inputs", 0], {"name": "t", "shape": ["N", "T", 12]}),
            (["inputs", 0], {"name": "f", "shape": ["N", 12]}),
            (["layers"], []),
        ):
            with self.subTest(path=path, value=value):
                VALIDATOR.validate(with_change(GRAPH, path, value))

    def test_broken_layers(self):
        for operator, path, value in BROKEN_LAYERS:
            with self.subTest(operator=operator, path=path, value=value):
                broken = with_change(RIGHT[operator], path, value)
                self.assertFalse(VALIDATOR.is_valid(self.graph_of(broken)))

    def test_broken_graphs(self):
        for path, value in BROKEN_GRAPHS:
            with self.subTest(path=path, value=value):
                self.assertFalse(VALIDATOR.is_valid(with_change(GRAPH, path, value)))

    def test_exported_graphs(self):
        used = set()
        for name in sample_models.SAMPLES:
            with self.subTest(name), tempfile.TemporaryDirectory() as folder:
                module, inputs = make_sample(name, settle=False)
                export(module, inputs, folder, preprocess=GRAPH["preprocess"], reference=False)
                graph = graph_interpreter.read_graph(folder)
                VALIDATOR.validate(graph)
                used |= {entry["operator"] for entry in graph["layers"]}
        self.assertEqual(used, set(RIGHT), "every operator has a sample that is exported to it")


if __name__ == "__main__":
    unittest.main()
