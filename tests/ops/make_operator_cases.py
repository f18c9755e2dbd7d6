#!/usr/bin/env python3
"""Writes tests/data/operators/<operator>.safetensors: small cases as PyTorch computes them.

    /usr/bin/python3 tests/ops/make_operator_cases.py

Each file holds the tensors `<case>/input1`, `<case>/input2`, ..., `<case>/weight.<role>`,
`<case>/residual` and `<case>/output`, and in `__metadata__` for each case a JSON text with its
`attributes` and, of the epilogue, `activation` and `slope`. Inputs are float32; PyTorch computes in
float64, and the result is rounded once. Tensors are in logical order (loaders/GRAPH_FORMAT.md).
"""

import json
import pathlib
import struct

import numpy as np
import torch
import torch.nn.functional as F

FOLDER = pathlib.Path(__file__).resolve().parent.parent / "data" / "operators"
GENERATOR = np.random.default_rng(20240)
NAN, INF = float("nan"), float("inf")


def rand(*shape, scale=1.0, offset=0.0):
    values = GENERATOR.standard_normal(shape) * scale + offset
    return torch.from_numpy(values.astype(np.float32).astype(np.float64))


def write_safetensors(path, tensors, metadata):
    """The format's README: length of the header, header as JSON, then the bytes."""
    header, chunks, offset = {"__metadata__": metadata}, [], 0
    for name, tensor in tensors.items():
        data = np.ascontiguousarray(tensor.numpy(), dtype="<f4").tobytes()
        header[name] = {"dtype": "F32", "shape": list(tensor.shape),
                        "data_offsets": [offset, offset + len(data)]}
        chunks.append(data)
        offset += len(data)
    text = json.dumps(header, separators=(",", ":")).encode()
    text += b" " * (-len(text) % 8)
    path.write_bytes(struct.pack("<Q", len(text)) + text + b"".join(chunks))


class Cases:
    def __init__(self, operator, more=None):
        """`more` names a file of its own beside the operator's."""
        self.file = f"{operator}+{more}" if more else operator
        self.tensors = {}
        self.metadata = {}

    def add(self, name, inputs, output, attributes=None, weights=None, activation=None, slope=None,
            residual=None):
        """`output` comes before the epilogue, which is applied here."""
        about = {"attributes": attributes or {}}
        for i, tensor in enumerate(inputs):
            self.tensors[f"{name}/input{i + 1}"] = tensor
        for role, tensor in (weights or {}).items():
            if tensor is not None:
                self.tensors[f"{name}/weight.{role}"] = tensor
        if residual is not None:
            self.tensors[f"{name}/residual"] = residual
            output = output + residual
        if activation is not None:
            about["activation"] = activation
            if slope is not None:
                about["slope"] = slope
            output = ACTIVATIONS[activation](output, slope)
        assert name not in self.metadata
        self.metadata[name] = json.dumps(about)
        self.tensors[f"{name}/output"] = output

    def write(self):
        FOLDER.mkdir(parents=True, exist_ok=True)
        self.metadata["library"] = f"PyTorch {torch.__version__}"
        path = FOLDER / f"{self.file}.safetensors"
        write_safetensors(path, self.tensors, self.metadata)
        return path.stat().st_size


ACTIVATIONS = {
    "relu": lambda x, _: F.relu(x),
    "relu6": lambda x, _: F.relu6(x),
    "leaky_relu": lambda x, slope: F.leaky_relu(x, 0.01 if slope is None else slope),
    "gelu": lambda x, _: F.gelu(x),
    "gelu_tanh": lambda x, _: F.gelu(x, approximate="tanh"),
    "silu": lambda x, _: F.silu(x),
    "sigmoid": lambda x, _: torch.sigmoid(x),
    "hard_sigmoid": lambda x, _: F.hardsigmoid(x),
    "hard_swish": lambda x, _: F.hardswish(x),
    "tanh": lambda x, _: torch.tanh(x),
    "elu": lambda x, alpha: F.elu(x, 1.0 if alpha is None else alpha),
    "softplus": lambda x, _: F.softplus(x),
    "mish": lambda x, _: F.mish(x),
    "quick_gelu": lambda x, _: x * torch.sigmoid(1.702 * x),
}


def padded(x, padding, value=0.0):
    top, left, bottom, right = padding
    return F.pad(x, (left, right, top, bottom), value=value)


def conv2d():
    cases = Cases("conv2d")

    def one(name, x, w, bias=True, stride=1, padding=(0, 0, 0, 0), dilation=1, groups=1, **epilogue):
        b = rand(w.shape[0]) if bias else None
        y = F.conv2d(padded(x, padding), w, b, stride, 0, dilation, groups)
        attributes = {"kernel_size": list(w.shape[2:]), "stride": stride,
                      "padding": list(padding), "dilation": dilation, "groups": groups}
        if epilogue.pop("with_residual", False):
            epilogue["residual"] = rand(*y.shape)
        cases.add(name, [x], y, attributes, {"weight": w, "bias": b}, **epilogue)

    one("plain", rand(2, 3, 7, 6), rand(5, 3, 3, 3), padding=(1, 1, 1, 1))
    one("without_bias", rand(1, 7, 4, 5), rand(18, 7, 1, 1), bias=False)
    one("uneven_stride", rand(1, 4, 9, 8), rand(3, 4, 3, 2), stride=[2, 3])
    one("uneven_padding", rand(1, 3, 5, 6), rand(4, 3, 3, 3), padding=(0, 1, 2, 3))
    one("uneven_dilation", rand(1, 3, 9, 8), rand(4, 3, 3, 3), dilation=[3, 2],
        padding=(2, 1, 2, 1))
    one("groups", rand(2, 6, 5, 5), rand(4, 3, 3, 3), groups=2, padding=(1, 1, 1, 1))
    one("depthwise", rand(1, 5, 7, 7), rand(5, 1, 3, 3), groups=5, stride=2, padding=(1, 1, 1, 1))
    one("depthwise_doubled", rand(1, 3, 6, 5), rand(6, 1, 3, 3), groups=3)
    one("window_of_the_whole_image", rand(1, 4, 3, 5), rand(2, 4, 3, 5))
    one("window_larger_than_the_image", rand(1, 2, 2, 2), rand(3, 2, 5, 5), padding=(2, 2, 2, 2))
    one("stem", rand(1, 3, 15, 14), rand(4, 3, 7, 7), stride=2, padding=(3, 3, 3, 3))
    one("residual_relu", rand(1, 4, 5, 5), rand(4, 4, 3, 3), padding=(1, 1, 1, 1),
        activation="relu", with_residual=True)
    one("silu", rand(1, 3, 4, 4), rand(4, 3, 2, 2), stride=2, activation="silu")
    x = rand(1, 2, 6, 6)
    x[0, 1, 2, 3] = NAN
    one("nan", x, rand(3, 2, 3, 3), activation="relu6")
    return cases


def linear():
    cases = Cases("linear")

    def one(name, x, outputs, bias=True, **epilogue):
        w = rand(outputs, x.shape[-1])
        b = rand(outputs) if bias else None
        y = F.linear(x, w, b)
        if epilogue.pop("with_residual", False):
            epilogue["residual"] = rand(*y.shape)
        cases.add(name, [x], y, {}, {"weight": w, "bias": b}, **epilogue)

    one("features", rand(3, 19), 7)
    one("tokens", rand(2, 5, 12), 17)
    one("without_bias", rand(1, 33), 21, bias=False)
    one("gelu", rand(1, 7, 9), 16, activation="gelu")
    one("residual", rand(1, 7, 9), 16, with_residual=True)
    return cases


def batch_norm():
    cases = Cases("batch_norm")

    def one(name, x, affine=True, eps=1e-5, offset=0.0, spread=1.0, **epilogue):
        c = x.shape[1]
        mean = rand(c, offset=offset)
        variance = (rand(c) ** 2 * spread).float().double()
        w = rand(c) if affine else None
        b = rand(c) if affine else None
        y = F.batch_norm(x, mean, variance, w, b, False, 0.0, eps)
        if epilogue.pop("with_residual", False):
            epilogue["residual"] = rand(*y.shape)
        cases.add(name, [x], y, {"eps": eps},
                  {"mean": mean, "variance": variance, "weight": w, "bias": b}, **epilogue)

    one("image", rand(2, 7, 3, 4))
    one("features", rand(3, 11))
    one("not_affine", rand(1, 5, 3, 3), affine=False, eps=1e-3)
    one("large_mean", rand(1, 6, 3, 3, scale=0.01, offset=100), offset=100, spread=1e-4)
    one("residual_relu6", rand(1, 9, 4, 3, scale=4), activation="relu6", with_residual=True)
    one("leaky_relu", rand(1, 9, 4, 3), activation="leaky_relu", slope=0.2)
    one("hard_swish", rand(1, 4, 3, 3), activation="hard_swish")
    x = rand(1, 3, 2, 2)
    x[0, 1, 0, 1], x[0, 2, 1, 1] = NAN, -INF
    one("nan", x, activation="relu")
    return cases


def add():
    cases = Cases("add")
    for name, shape in (("image", (2, 3, 4, 5)), ("tokens", (2, 5, 3)), ("features", (3, 7))):
        a, b = rand(*shape), rand(*shape)
        cases.add(name, [a, b], a + b)
    a, b = rand(1, 3, 4, 4), rand(1, 3, 4, 4)
    cases.add("relu", [a, b], a + b, activation="relu")
    cases.add("tanh", [a, b], a + b, activation="tanh")
    a, b = rand(1, 6), rand(1, 6)
    a[0, :3], b[0, 1:5] = torch.tensor([INF, INF, NAN]), torch.tensor([-INF, INF, NAN, INF])
    cases.add("nan", [a, b], a + b)
    return cases


def mul():
    cases = Cases("mul")
    for name, first, second in (("image", (2, 3, 4, 5), (2, 3, 4, 5)),
                                ("tokens", (2, 5, 3), (2, 5, 3)),
                                ("factors", (2, 7, 3, 4), (2, 7, 1, 1))):
        a, b = rand(*first), rand(*second)
        cases.add(name, [a, b], a * b)
    a, b = rand(1, 3, 2, 2), torch.tensor([0.0, NAN, INF], dtype=torch.float64).reshape(1, 3, 1, 1)
    a[0, 0, 0, 0] = INF
    cases.add("nan", [a, b], a * b)
    return cases


def concat():
    cases = Cases("concat")
    for name, axis, shapes in (("images", 1, ((2, 3, 4, 2), (2, 5, 4, 2))),
                               ("three_images", 1, ((1, 1, 3, 3), (1, 4, 3, 3), (1, 2, 3, 3))),
                               ("tokens", 2, ((2, 4, 3), (2, 4, 2))),
                               ("features", 1, ((3, 2), (3, 5), (3, 1), (3, 4)))):
        inputs = [rand(*shape) for shape in shapes]
        cases.add(name, inputs, torch.cat(inputs, axis))
    return cases


def max_pool():
    cases = Cases("max_pool")

    def one(name, x, kernel, stride=None, padding=0, dilation=1, ceil=False):
        attributes = {"kernel_size": kernel, "padding": padding, "dilation": dilation,
                      "ceil_mode": ceil}
        if stride is not None:
            attributes["stride"] = stride
        if isinstance(padding, list) and len(padding) == 4:
            x_in, pad = padded(x, padding, -INF), 0
        else:
            x_in, pad = x, padding
        cases.add(name, [x], F.max_pool2d(x_in, kernel, stride, pad, dilation, ceil), attributes)

    one("stem", rand(2, 5, 9, 8), 3, 2, 1)
    one("negative", rand(1, 2, 5, 5, offset=-9), 3, 2, 1)
    one("default_stride", rand(1, 3, 7, 6), 2)
    one("uneven", rand(1, 3, 8, 9), [2, 3], [3, 1], [1, 0])
    one("behind_only", rand(1, 3, 6, 6), 2, 2, [0, 0, 1, 1])
    one("dilation", rand(1, 3, 9, 10), 3, 2, 1, [2, 3])
    one("ceil", rand(1, 3, 8, 7), 3, 2, 0, 1, True)
    one("ceil_drops_a_window_in_the_padding", rand(1, 2, 5, 5), 2, 3, 1, 1, True)
    one("ceil_dilation", rand(1, 2, 10, 9), 2, 3, 1, 2, True)
    x = rand(1, 131, 4, 4)
    x[0, ::9, 1, 2] = NAN
    one("many_channels", x, 3, 2, 1)
    x = rand(1, 3, 6, 6)
    x[0, 0, 2, 2], x[0, 1, 0, 0], x[0, 2] = NAN, NAN, -INF
    x[0, 1, 5, 5] = INF
    one("nan", x, 3, 2, 1)
    # Taps at -1 and 2 of an image of 2: one window holds nothing but padding.
    one("empty_window", rand(1, 1, 2, 2), 2, 1, 1, 3)
    return cases


def avg_pool():
    cases = Cases("avg_pool")

    def one(name, x, kernel, stride=None, padding=0, ceil=False, count=True):
        attributes = {"kernel_size": kernel, "padding": padding, "ceil_mode": ceil,
                      "count_padding": count}
        if stride is not None:
            attributes["stride"] = stride
        if isinstance(padding, list) and len(padding) == 4:
            y = F.avg_pool2d(padded(x, padding), kernel, stride, 0, ceil)
            if not count:
                y = y / F.avg_pool2d(padded(torch.ones_like(x), padding), kernel, stride, 0, ceil)
        else:
            y = F.avg_pool2d(x, kernel, stride, padding, ceil, count)
        cases.add(name, [x], y, attributes)

    for count in (True, False):
        suffix = "counted" if count else "not_counted"
        one(f"padding_{suffix}", rand(2, 5, 7, 8), 3, 2, 1, False, count)
        one(f"ceil_{suffix}", rand(1, 3, 8, 7), 3, 2, 1, True, count)
        one(f"ceil_over_the_edge_{suffix}", rand(1, 2, 6, 9), [4, 5], [3, 4], [2, 1], True, count)
        one(f"uneven_padding_{suffix}", rand(1, 3, 5, 6), 3, 1, [0, 1, 2, 1], False, count)
    one("default_stride", rand(1, 3, 6, 7), 2)
    one("whole_image", rand(1, 3, 7, 5), [7, 5])
    one("ceil_drops_a_window_in_the_padding", rand(1, 2, 5, 5), 2, 3, 1, True)
    one("many_channels", rand(1, 131, 4, 4), 2)
    x = rand(1, 2, 5, 5)
    x[0, 0, 1, 1], x[0, 1, 3, 3] = NAN, INF
    one("nan", x, 2, 1)
    return cases


def adaptive_avg_pool():
    cases = Cases("adaptive_avg_pool")
    for name, shape, size in (("to_one", (2, 131, 7, 6), [1, 1]), ("smaller", (1, 5, 7, 5), [3, 2]),
                              ("larger", (1, 3, 2, 3), [4, 5]), ("same", (1, 2, 3, 4), [3, 4]),
                              ("overlapping", (1, 3, 11, 7), [6, 5]), ("row", (1, 4, 5, 9), [1, 4])):
        x = rand(*shape)
        cases.add(name, [x], F.adaptive_avg_pool2d(x, size), {"output_size": size})
    return cases


def token_operators():
    flatten = Cases("flatten")
    for name, shape in (("image", (2, 3, 4, 5)), ("one_channel", (2, 1, 3, 4)),
                        ("one_position", (2, 7, 1, 1)), ("tokens", (2, 3, 4)), ("features", (2, 5))):
        x = rand(*shape)
        flatten.add(name, [x], x.flatten(1))

    image_to_tokens = Cases("image_to_tokens")
    x = rand(2, 5, 3, 4)
    image_to_tokens.add("image", [x], x.flatten(2).transpose(1, 2))

    class_token = Cases("class_token")
    for name, n, t, k in (("one", 2, 5, 1), ("three", 1, 4, 3)):
        x, w = rand(n, t, 6), rand(1, k, 6)
        class_token.add(name, [x], torch.cat([w.expand(n, -1, -1), x], 1), {}, {"weight": w})

    select = Cases("select")
    x = rand(3, 5, 7)
    for index in (0, 4):
        select.add(f"token_{index}", [x], x[:, index], {"index": index})

    identity = Cases("identity")
    x = rand(2, 3, 2, 2)
    identity.add("image", [x], F.dropout(x, 0.5, training=False))

    mean = Cases("mean")
    for name, shape, axes in (("image", (2, 70, 3, 5), (2, 3)), ("tokens", (2, 7, 9), (1,))):
        x = rand(*shape)
        for keep in (False, True):
            mean.add(f"{name}_kept" if keep else name, [x], x.mean(axes, keep), {"keep": keep})

    softmax = Cases("softmax")
    for name, x in (("features", rand(3, 10, scale=3)), ("tokens", rand(2, 4, 7)),
                    ("large", rand(2, 9, scale=1000)), ("one_channel", rand(3, 1))):
        softmax.add(name, [x], x.softmax(-1))
    x = rand(5, 4)
    x[0, 1], x[1, 2], x[2, :], x[3, 0], x[4, 3] = -INF, NAN, -INF, INF, 90.0
    softmax.add("nan", [x], x.softmax(-1))
    return [flatten, image_to_tokens, class_token, select, identity, mean, softmax]


def position_embed():
    cases = Cases("position_embed")

    def one(name, stored, grid, prefix=1, with_image=True, n=1, c=5):
        w = rand(1, prefix + stored[0] * stored[1], c)
        x = rand(n, prefix + grid[0] * grid[1], c)
        table = w[:, prefix:].reshape(1, *stored, c).permute(0, 3, 1, 2)
        if stored != grid:
            table = F.interpolate(table, size=grid, mode="bicubic", align_corners=True)
        table = torch.cat([w[:, :prefix], table.flatten(2).transpose(1, 2)], 1)
        inputs = [x, rand(n, 2, *grid)] if with_image else [x]
        cases.add(name, inputs, x + table, {"prefix_tokens": prefix}, {"weight": w})

    one("as_stored", (3, 3), (3, 3), n=2)
    one("as_stored_without_image", (3, 3), (3, 3), with_image=False)
    one("as_stored_not_square", (2, 5), (2, 5))
    one("larger", (4, 4), (6, 9))
    one("smaller", (7, 7), (4, 3), n=2)
    one("same_count", (4, 4), (2, 8))
    one("no_prefix", (3, 3), (4, 5), prefix=0)
    one("two_in_front", (2, 2), (5, 3), prefix=2)
    one("of_one", (1, 1), (3, 2))
    one("to_one_row", (5, 5), (1, 4))
    return cases


def layer_norm():
    cases = Cases("layer_norm")
    for name, shape, affine, eps in (("tokens", (2, 5, 12), True, 1e-6),
                                     ("features", (3, 17), True, 1e-5),
                                     ("not_affine", (1, 4, 33), False, 1e-5),
                                     ("image", (2, 19, 3, 2), True, 1e-6)):
        x = rand(*shape, offset=3)
        c = shape[1] if len(shape) != 3 else shape[2]
        w, b = (rand(c), rand(c)) if affine else (None, None)
        rows = x.permute(0, 2, 3, 1) if len(shape) == 4 else x
        y = F.layer_norm(rows, (c,), w, b, eps)
        cases.add(name, [x], y.permute(0, 3, 1, 2) if len(shape) == 4 else y, {"eps": eps},
                  {"weight": w, "bias": b})
    return cases


def activation():
    cases = Cases("activation")
    specials = [0.0, -0.0, 3.0, -3.0, 6.0, -6.0, 1e-30, -1e-30, 40.0, -40.0, 200.0, -200.0, INF, NAN]
    x = torch.cat([torch.tensor(specials, dtype=torch.float64).float().double(),
                   rand(50, scale=4)]).reshape(2, 4, 2, 4)
    for kind, function in ACTIVATIONS.items():
        cases.add(kind, [x], function(x, None), {"kind": kind})
    cases.add("leaky_relu_slope", [x], ACTIVATIONS["leaky_relu"](x, 0.25),
              {"kind": "leaky_relu", "slope": 0.25})
    cases.add("elu_alpha", [x], ACTIVATIONS["elu"](x, 0.25), {"kind": "elu", "alpha": 0.25})
    return cases


def attention():
    whole, weights = Cases("attention"), Cases("attention_weights")

    def one(name, n, t, s, c, heads, joint, scale=0.0):
        q, k, v = rand(n, t, c, scale=2), rand(n, s, c, scale=2), rand(n, s, c)

        def split(x):
            return x.reshape(n, x.shape[1], heads, c // heads).transpose(1, 2)

        factor = scale if scale else (c // heads) ** -0.5
        p = (split(q) @ split(k).transpose(2, 3) * factor).softmax(-1)
        attributes = {"heads": heads, "scale": scale} if scale else {"heads": heads}
        inputs = [torch.cat([q, k, v], 2)] if joint else [q, k, v]
        y = (p @ split(v)).transpose(1, 2).reshape(n, t, c)
        whole.add(name, inputs, y, attributes)
        weights.add(name, inputs if joint else [q, k], p, attributes)

    one("joint", 2, 7, 7, 12, 3, True)
    one("joint_one_head", 1, 5, 5, 9, 1, True)
    one("separate", 1, 4, 6, 16, 2, False)
    one("scaled", 1, 9, 9, 8, 4, True, 0.3)
    one("large_scores", 2, 9, 9, 8, 4, True, 1.5)  # softmax nearly picks one token
    return [whole, weights]


def main():
    total = 0
    groups = [conv2d(), linear(), batch_norm(), add(), mul(), concat(), max_pool(), avg_pool(),
              adaptive_avg_pool(), *token_operators(), position_embed(), layer_norm(),
              activation(), *attention()]
    for cases in groups:
        total += cases.write()
    print(f"{len(groups)} operators, {total} bytes")


if __name__ == "__main__":
    main()
