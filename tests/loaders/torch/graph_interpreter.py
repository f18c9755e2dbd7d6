"""Runs a bundle with torch.nn.functional alone, from the words of loaders/GRAPH_FORMAT.md.

It shares no code with the exporter: what it computes from graph.json and weights.safetensors is
what those files mean.
"""

import json
import math
import os

import numpy
import torch
import torch.nn.functional as F

_DTYPES = {"F64": "<f8", "F32": "<f4", "F16": "<f2", "BF16": "<u2", "U8": "u1"}


def read_safetensors(path):
    """({name: tensor}, metadata)."""
    with open(path, "rb") as file:
        content = file.read()
    length = int.from_bytes(content[:8], "little")
    assert (8 + length) % 8 == 0, "the data is not aligned"
    header = json.loads(content[8 : 8 + length])
    metadata = header.pop("__metadata__", {})
    data = content[8 + length :]
    tensors, ends = {}, [0]
    for name, entry in header.items():
        begin, end = entry["data_offsets"]
        assert begin == ends[-1], "there is a hole in the data"
        ends.append(end)
        array = numpy.frombuffer(data[begin:end], _DTYPES[entry["dtype"]]).reshape(entry["shape"])
        if entry["dtype"] == "BF16":  # the upper half of a float
            array = (array.astype("<u4") << 16).view("<f4")
        tensors[name] = torch.from_numpy(array.copy())
    assert ends[-1] == len(data), "the data ends elsewhere"
    return tensors, metadata


def _pair(value):
    return [value, value] if isinstance(value, int) else value


def _padded(x, padding, value=0.0):
    sides = _pair(padding)
    top, left, bottom, right = sides * 2 if len(sides) == 2 else sides
    return F.pad(x, (left, right, top, bottom), value=value)


def _channels_last(function, x):
    return function(x.movedim(1, -1)).movedim(-1, 1) if x.dim() == 4 else function(x)


def conv2d(x, a, w):
    x = _padded(x, a.get("padding", 0))
    stride, dilation = _pair(a.get("stride", 1)), _pair(a.get("dilation", 1))
    assert list(w["weight"].shape[2:]) == _pair(a["kernel_size"])
    return F.conv2d(x, w["weight"], w.get("bias"), stride, 0, dilation, a.get("groups", 1))


def _channel_shape(x):
    return [1, -1, 1, 1] if x.dim() == 4 else [1] * (x.dim() - 1) + [-1]


def scale(x, a, w):
    y = x * a.get("factor", 1.0) + a.get("offset", 0.0)
    if "weight" in w:
        y = x * w["weight"].reshape(_channel_shape(x)) * a.get("factor", 1.0) + a.get("offset", 0.0)
    return y + w["bias"].reshape(_channel_shape(x)) if "bias" in w else y


def slice_(x, a, w):
    axis = 1 if a.get("axis") == "tokens" or x.dim() == 4 else x.dim() - 1
    start = a.get("start", 0)
    return x.narrow(axis, start, a.get("count", 0) or x.shape[axis] - start)


def space_to_depth(x, a, w):
    h, w_ = _pair(a.get("block", 2))
    x = F.pad(x, (0, -x.shape[3] % w_, 0, -x.shape[2] % h))
    cells = [(i, j) for j in range(w_) for i in range(h)]
    if a.get("order", "columns") == "rows":
        cells = sorted(cells)
    return torch.cat([x[:, :, i::h, j::w_] for i, j in cells], 1)


def pad(x, a, w):
    top, left, bottom, right = a["padding"]
    mode = a.get("mode", "constant")
    if mode != "constant":
        return F.pad(x, (left, right, top, bottom), mode=mode)
    return F.pad(x, (left, right, top, bottom), value=a.get("value", 0.0))


def channel_shuffle(x, a, w):
    return x.unflatten(1, (a["groups"], -1)).transpose(1, 2).flatten(1, 2)


def batch_norm(x, a, w):
    shape = _channel_shape(x)
    mean, variance = w["mean"].view(shape), w["variance"].view(shape)
    y = (x - mean) / torch.sqrt(variance + a.get("eps", 1e-5))
    y = y * w["weight"].view(shape) if "weight" in w else y
    return y + w["bias"].view(shape) if "bias" in w else y


def layer_norm(x, a, w):
    def norm(t):
        return F.layer_norm(t, t.shape[-1:], w.get("weight"), w.get("bias"), a.get("eps", 1e-5))

    return _channels_last(norm, x)


ACTIVATIONS = {
    "relu": lambda x, a: x.clamp(min=0),
    "relu6": lambda x, a: x.clamp(0, 6),
    "leaky_relu": lambda x, a: torch.where(x > 0, x, x * a.get("slope", 0.01)),
    "gelu": lambda x, a: x * 0.5 * (1 + torch.erf(x / math.sqrt(2))),
    "gelu_tanh": lambda x, a: 0.5 * x * (
        1 + torch.tanh(math.sqrt(2 / math.pi) * (x + 0.044715 * x**3))
    ),
    "silu": lambda x, a: x / (1 + torch.exp(-x)),
    "sigmoid": lambda x, a: 1 / (1 + torch.exp(-x)),
    "hard_sigmoid": lambda x, a: ((x + 3) / 6).clamp(0, 1),
    "hard_swish": lambda x, a: x * ((x + 3) / 6).clamp(0, 1),
    "tanh": lambda x, a: torch.tanh(x),
    "mish": lambda x, a: x * torch.tanh(torch.log1p(torch.exp(x))),
    "elu": lambda x, a: torch.where(x > 0, x, torch.expm1(x) * a.get("alpha", 1.0)),
    "softplus": lambda x, a: torch.logaddexp(x, torch.zeros_like(x)),
    "quick_gelu": lambda x, a: x / (1 + torch.exp(-1.702 * x)),
}  # fmt: skip


def max_pool(x, a, w):
    kernel = _pair(a["kernel_size"])
    stride = _pair(a.get("stride", 0) or kernel)
    padding = _pair(a.get("padding", 0))
    assert padding[:2] == padding[2:] or len(padding) == 2
    return F.max_pool2d(
        x, kernel, stride, padding[:2], _pair(a.get("dilation", 1)), a.get("ceil_mode", False)
    )


def avg_pool(x, a, w):
    kernel = _pair(a["kernel_size"])
    stride = _pair(a.get("stride", 0) or kernel)
    padding = _pair(a.get("padding", 0))
    assert padding[:2] == padding[2:] or len(padding) == 2
    return F.avg_pool2d(
        x, kernel, stride, padding[:2], a.get("ceil_mode", False), a.get("count_padding", True)
    )


def position_embed(inputs, a, w):
    tokens, table, prefix = inputs[0], w["weight"], a.get("prefix_tokens", 1)
    if len(inputs) == 2 and table.shape[1] != tokens.shape[1]:
        side = math.isqrt(table.shape[1] - prefix)
        grid = table[:, prefix:].reshape(1, side, side, -1).permute(0, 3, 1, 2)
        grid = F.interpolate(grid, inputs[1].shape[2:], mode="bicubic", align_corners=True)
        table = torch.cat([table[:, :prefix], grid.flatten(2).transpose(1, 2)], 1)
    return tokens + table


def _heads(inputs, count):
    parts = inputs if len(inputs) > 1 else inputs[0].chunk(3, dim=-1)
    return [t.reshape(*t.shape[:2], count, -1).permute(0, 2, 1, 3) for t in parts]


def _scores(q, k, a):
    return torch.softmax((q @ k.mT) * (a.get("scale", 0) or q.shape[-1] ** -0.5), -1)


def attention(inputs, a, w):
    q, k, v = _heads(inputs, a["heads"])
    if "position_bias" not in w:
        return (_scores(q, k, a) @ v).permute(0, 2, 1, 3).flatten(2)
    scores = (q @ k.mT) * (a.get("scale", 0) or q.shape[-1] ** -0.5) + w["position_bias"]
    return (torch.softmax(scores, -1) @ v).permute(0, 2, 1, 3).flatten(2)


def window_attention(x, a, w):
    """By rolling, cutting and masking, as the paper's authors describe it (Liu et al. 2021)."""
    n, channels, height, width = x.shape
    (h, w_), shift = _pair(a["window"]), list(_pair(a.get("shift", 0)))
    padding = w.get("padding", torch.zeros(channels, dtype=x.dtype))
    rows, columns = height + -height % h, width + -width % w_
    padded = padding.view(1, -1, 1, 1).expand(n, -1, rows, columns).clone()
    padded[:, :, :height, :width] = x
    shift = [0 if size <= window else s for s, size, window in zip(shift, (rows, columns), (h, w_))]
    rolled = padded.roll((-shift[0], -shift[1]), (2, 3))
    grid = a.get("arrangement") == "grid"

    def cut(t):  # [n, windows, positions, c]
        inner = (rows // h, h, columns // w_, w_) if not grid else (h, rows // h, w_, columns // w_)
        t = t.reshape(t.shape[0], t.shape[1], *inner)
        t = t.permute(0, 3, 5, 2, 4, 1) if grid else t.permute(0, 2, 4, 3, 5, 1)
        return t.reshape(t.shape[0], -1, h * w_, t.shape[-1])

    def region(size, window, s):
        index = torch.arange(size)
        return (index >= size - window).long() + (index >= size - s).long() if s else index * 0

    regions = region(rows, h, shift[0])[:, None] * 3 + region(columns, w_, shift[1])[None, :]
    regions = cut(regions[None, None])[..., 0]  # [1, windows, positions]
    mask = -100.0 * (regions[..., None] != regions[..., None, :])
    heads = a["heads"]
    q, k, v = (t.unflatten(-1, (heads, -1)).transpose(2, 3) for t in cut(rolled).chunk(3, -1))
    if a.get("cosine"):
        scores = F.normalize(q, dim=-1) @ F.normalize(k, dim=-1).mT
    else:
        scores = (q @ k.mT) * (a.get("scale", 0) or q.shape[-1] ** -0.5)
    if "head_scale" in w:
        scores = scores * w["head_scale"].view(-1, 1, 1)
    if "position_bias" in w:
        place = torch.cartesian_prod(torch.arange(h), torch.arange(w_))
        offset = place[:, None] - place[None] + torch.tensor([h - 1, w_ - 1])
        table = w["position_bias"][offset[..., 0] * (2 * w_ - 1) + offset[..., 1]]
        scores = scores + table.permute(2, 0, 1)
    y = torch.softmax(scores + mask[:, :, None], -1) @ v  # [n, windows, heads, positions, d]
    y = y.transpose(2, 3).flatten(3)
    inner = (rows // h, columns // w_, h, w_)
    if grid:
        y = y.reshape(n, rows // h, columns // w_, h, w_, -1).permute(0, 5, 3, 1, 4, 2)
    else:
        y = y.reshape(n, *inner, -1).permute(0, 5, 1, 3, 2, 4)
    y = y.reshape(n, -1, rows, columns).roll(shift, (2, 3))
    return y[:, :, :height, :width]


def attention_weights(inputs, a, w):
    q, k = _heads(inputs, a["heads"])[:2]
    return _scores(q, k, a)


def mean(x, a, w):
    return x.mean((2, 3) if x.dim() == 4 else 1, keepdim=a.get("keep", False))


def channel_pool(x, a, w):
    axis = 1 if x.dim() == 4 else -1
    return x.mean(axis, keepdim=True) if a["kind"] == "mean" else x.amax(axis, keepdim=True)


def concat(inputs, a, w):
    return torch.cat(inputs, 1 if inputs[0].dim() == 4 else -1)


def _one(function):
    return lambda inputs, a, w: function(inputs[0], a, w)


OPERATORS = {
    "conv2d": _one(conv2d),
    "linear": _one(
        lambda x, a, w: _channels_last(lambda t: F.linear(t, w["weight"], w.get("bias")), x)
    ),
    "scale": _one(scale),
    "slice": _one(slice_),
    "space_to_depth": _one(space_to_depth),
    "channel_shuffle": _one(channel_shuffle),
    "window_attention": _one(window_attention),
    "features_to_image": _one(lambda x, a, w: x[:, :, None, None]),
    "tokens_to_image": lambda inputs, a, w: inputs[0].mT.unflatten(2, inputs[1].shape[2:]),
    "transpose": _one(lambda x, a, w: x.mT),
    "group_norm": _one(
        lambda x, a, w: F.group_norm(x, a["groups"], w.get("weight"), w.get("bias"), a["eps"])
    ),
    "local_response_norm": _one(
        lambda x, a, w: F.local_response_norm(x, a["size"], a["alpha"], a["beta"], a["k"])
    ),
    "l2_normalize": _one(
        lambda x, a, w: F.normalize(x, dim=1 if x.dim() == 4 else -1, eps=a["eps"])
    ),
    "adaptive_max_pool": _one(lambda x, a, w: F.adaptive_max_pool2d(x, a["output_size"])),
    "pad": _one(pad),
    "resize": _one(
        lambda x, a, w: F.interpolate(x, scale_factor=list(map(float, a["factor"])),
                                      mode=a["interpolation"])
    ),
    "batch_norm": _one(batch_norm),
    "layer_norm": _one(layer_norm),
    "activation": _one(lambda x, a, w: ACTIVATIONS[a["kind"]](x, a)),
    "add": lambda inputs, a, w: inputs[0] + inputs[1],
    "mul": lambda inputs, a, w: inputs[0] * inputs[1],
    "concat": concat,
    "max_pool": _one(max_pool),
    "avg_pool": _one(avg_pool),
    "adaptive_avg_pool": _one(lambda x, a, w: F.adaptive_avg_pool2d(x, a["output_size"])),
    "flatten": _one(lambda x, a, w: x.reshape(x.shape[0], -1)),
    "image_to_tokens": _one(lambda x, a, w: x.flatten(2).transpose(1, 2)),
    "class_token": _one(lambda x, a, w: torch.cat([w["weight"].expand(x.shape[0], -1, -1), x], 1)),
    "position_embed": position_embed,
    "attention": attention,
    "attention_weights": attention_weights,
    "select": _one(lambda x, a, w: x[:, a["index"]]),
    "mean": _one(mean),
    "channel_pool": _one(channel_pool),
    "softmax": _one(lambda x, a, w: torch.softmax(x, 1 if x.dim() == 4 else -1)),
    "identity": _one(lambda x, a, w: x),
}


def read_graph(folder):
    with open(os.path.join(folder, "graph.json"), encoding="utf-8") as file:
        return json.load(file)


def run(folder, inputs, isolated=False):
    """{name: tensor} of every input and layer, in double.

    inputs is {name of a graph input: tensor}. Isolated, it holds every layer too, and each layer
    runs on those.
    """
    graph = read_graph(folder)
    weights, _ = read_safetensors(os.path.join(folder, "weights.safetensors"))
    weights = {name: tensor.double() for name, tensor in weights.items()}
    given = {name: tensor.double() for name, tensor in inputs.items()}
    values = {entry["name"]: given[entry["name"]] for entry in graph["inputs"]}
    waiting = list(graph["layers"])
    while waiting:
        ready = [layer for layer in waiting if all(name in values for name in layer["inputs"])]
        assert ready, "the graph has a cycle or an unknown input"
        for layer in ready:
            source = given if isolated else values
            arguments = [source[name] for name in layer["inputs"]]
            roles = {role: weights[name] for role, name in layer.get("weights", {}).items()}
            operator = OPERATORS[layer["operator"]]
            values[layer["name"]] = operator(arguments, layer.get("attributes", {}), roles)
        waiting = [layer for layer in waiting if layer["name"] not in values]
    return values
