#!/usr/bin/env python3
"""Writes cases of operators that rearrange, cut, scale and attend within windows, as PyTorch and
torchvision compute them, beside those of make_operator_cases.py.

    /usr/bin/python3 tests/ops/make_arrangement_cases.py

`<operator>+<what>.safetensors` holds more cases of an operator that has a file there.
"""

import numpy as np
import torch
import torch.nn.functional as F
from make_operator_cases import INF, NAN, Cases
from torchvision.models.swin_transformer import shifted_window_attention

GENERATOR = np.random.default_rng(77)


def rand(*shape, scale=1.0):
    values = GENERATOR.standard_normal(shape) * scale
    return torch.from_numpy(values.astype(np.float32).astype(np.float64))


def coarse(*shape):
    """Multiples of 2^-12: sums of two are exact in float32."""
    return (rand(*shape) * 4096).round() / 4096


def channels_last(x):
    return x.movedim(1, -1)


def scale():
    cases = Cases("scale")

    def one(name, x, weight=None, bias=None, factor=1.0, offset=0.0):
        shape = [1, -1, 1, 1] if x.dim() == 4 else [-1]
        y = x * factor
        y = y * weight.reshape(shape) if weight is not None else y
        y = y + offset
        y = y + bias.reshape(shape) if bias is not None else y
        attributes = {"factor": factor, "offset": offset}
        cases.add(name, [x], y, attributes, {"weight": weight, "bias": bias})

    one("image", rand(2, 5, 3, 4), rand(5, 1, 1))
    one("image_both", rand(1, 19, 3, 2), rand(1, 19, 1, 1), rand(19))
    one("tokens", rand(2, 7, 18), rand(18))
    one("features", rand(3, 9), None, rand(9))
    one("numbers", rand(1, 3, 4, 4), None, None, 0.458, -0.03)
    one("all", rand(2, 6, 2, 3), rand(6), rand(6, 1, 1), -2.5, 0.25)
    return [cases]


def slices():
    cases = Cases("slice")

    def one(name, x, axis, start, count, places):
        attributes = {"axis": axis, "start": start, "count": count}
        cases.add(name, [x], x[places].contiguous(), attributes)

    one("channels_of_an_image", rand(2, 9, 3, 4), "channels", 2, 5, np.s_[:, 2:7])
    one("last_channels_of_tokens", rand(2, 5, 12), "channels", 4, 0, np.s_[..., 4:])
    one("one_feature", rand(3, 6), "channels", 5, 1, np.s_[:, 5:6])
    one("tokens_without_the_first", rand(2, 6, 4), "tokens", 1, 0, np.s_[:, 1:])
    one("some_tokens", rand(1, 9, 3), "tokens", 2, 3, np.s_[:, 2:5])
    return [cases]


def shapes():
    shuffle, depth = Cases("channel_shuffle"), Cases("space_to_depth")
    to_image, tokens, turned = (
        Cases("features_to_image"), Cases("tokens_to_image"), Cases("transpose")
    )
    for groups, channels in ((2, 8), (3, 12), (1, 5)):
        x = rand(2, channels, 3, 2)
        shuffle.add(f"of_{groups}", [x], F.channel_shuffle(x, groups), {"groups": groups})
    x = rand(2, 7)
    to_image.add("plain", [x], x[:, :, None, None])
    x, grid = rand(2, 12, 5), rand(2, 3, 3, 4)
    tokens.add("plain", [x, grid], x.mT.reshape(2, 5, 3, 4))
    for t, c in ((7, 5), (70, 33)):
        x = rand(2, t, c)
        turned.add(f"{t}_by_{c}", [x], x.mT.contiguous())
    for h, w, block in ((4, 6, [2, 2]), (5, 7, [2, 2]), (7, 5, [3, 2])):
        x = rand(2, 3, h, w)
        padded = F.pad(x, (0, -w % block[1], 0, -h % block[0]))
        # "columns" as torchvision's _patch_merging_pad has it; "rows" as torch's pixel_unshuffle
        # orders positions, its channels taken outermost instead.
        cells = [(i, j) for j in range(block[1]) for i in range(block[0])]
        for order in ("columns", "rows"):
            chosen = cells if order == "columns" else sorted(cells)
            y = torch.cat([padded[:, :, i :: block[0], j :: block[1]] for i, j in chosen], 1)
            depth.add(f"{h}x{w}_{order}", [x], y, {"block": block, "order": order})
    return [shuffle, depth, to_image, tokens, turned]


def window_attention():
    """torchvision's own function. Its projection to q, k and v only moves channels, times a power
    of two, so that what is stored as the layer's input is exactly what the function computed."""
    cases = Cases("window_attention")

    def spread(table, h, w):
        place = torch.cartesian_prod(torch.arange(h), torch.arange(w))
        offset = place[:, None] - place[None] + torch.tensor([h - 1, w - 1])
        rows = offset[..., 0] * (2 * w - 1) + offset[..., 1]
        return table[rows].permute(2, 0, 1).unsqueeze(0)

    def one(name, n, height, width, heads, d, window, shift, cosine=False, bias=True, scale=1.0):
        c = heads * d
        turns = [torch.eye(c, dtype=torch.float64)[GENERATOR.permutation(c)] for _ in range(3)]
        weight = torch.cat([turns[0] * scale, *turns[1:]])
        qkv_bias = coarse(3 * c) if bias else None
        if cosine and bias:
            qkv_bias[c : 2 * c] = 0  # which torchvision does by itself
        x = coarse(n, height, width, c)
        table = rand((2 * window[0] - 1) * (2 * window[1] - 1), heads)
        head_scale = rand(heads).abs() * 3 + 1 if cosine else None
        y = shifted_window_attention(
            x, weight, torch.eye(c, dtype=x.dtype), spread(table, *window), list(window), heads,
            list(shift), qkv_bias=qkv_bias,
            logit_scale=None if head_scale is None else head_scale.log().view(heads, 1, 1),
        )  # fmt: skip
        joint = F.linear(x, weight, qkv_bias)
        attributes = {"heads": heads, "window": window, "shift": shift, "cosine": cosine}
        weights = {"position_bias": table, "head_scale": head_scale, "padding": qkv_bias}
        cases.add(name, [joint.movedim(-1, 1)], y.movedim(-1, 1), attributes, weights)

    one("whole_windows", 2, 6, 4, 2, 3, [3, 2], [0, 0])
    one("shifted", 1, 8, 8, 2, 4, [4, 4], [2, 2])
    one("padded", 2, 7, 5, 3, 2, [3, 3], [0, 0])
    one("padded_and_shifted", 1, 9, 10, 2, 5, [4, 4], [2, 1])
    one("window_larger_than_the_map", 1, 3, 9, 1, 4, [4, 4], [2, 2])
    one("shifted_along_one_axis", 1, 4, 9, 2, 2, [4, 4], [2, 2])
    one("without_a_projection_bias", 1, 5, 5, 2, 2, [2, 2], [1, 1], bias=False)
    one("cosine", 1, 7, 8, 2, 4, [4, 4], [2, 2], cosine=True)
    one("large_scores", 1, 8, 8, 2, 4, [4, 4], [2, 2], scale=4.0)
    return [cases]


def grid_attention():
    """Tu et al. 2022: positions far apart attend to each other; by PyTorch's softmax."""
    cases = Cases("window_attention", "grid")
    n, heads, d, window, height, width = 2, 2, 3, (2, 3), 6, 6
    x = rand(n, 3 * heads * d, height, width)
    rows, columns = height // window[0], width // window[1]
    cut = x.reshape(n, -1, window[0], rows, window[1], columns).permute(0, 3, 5, 2, 4, 1)
    cut = cut.reshape(n * rows * columns, window[0] * window[1], 3, heads, d)
    q, k, v = cut.permute(2, 0, 3, 1, 4)
    y = torch.softmax(q @ k.mT * 0.4, -1) @ v
    y = y.transpose(1, 2).reshape(n, rows, columns, *window, heads * d)
    y = y.permute(0, 5, 3, 1, 4, 2).reshape(n, heads * d, height, width)
    attributes = {"heads": heads, "window": list(window), "arrangement": "grid", "scale": 0.4}
    cases.add("grid", [x], y, attributes)
    return [cases]


def biased_attention():
    whole = Cases("attention", "position_bias")
    weights = Cases("attention_weights", "position_bias")
    for name, heads, of_bias in (("each_head", 3, 3), ("all_heads", 2, 1)):
        n, t, d = 2, 9, 4
        x = rand(n, t, 3 * heads * d)
        bias = rand(of_bias, t, t, scale=2)
        q, k, v = x.reshape(n, t, 3, heads, d).permute(2, 0, 3, 1, 4)
        p = torch.softmax(q @ k.mT * d**-0.5 + bias, -1)
        y = (p @ v).transpose(1, 2).reshape(n, t, heads * d)
        whole.add(name, [x], y, {"heads": heads}, {"position_bias": bias})
        weights.add(name, [x], p, {"heads": heads}, {"position_bias": bias})
    return [whole, weights]


def other_ranks():
    """Operators of tokens on images, of images on tokens."""
    linear, norm = Cases("linear", "image"), Cases("batch_norm", "tokens")
    softmax = Cases("softmax", "image")
    x, w, b = rand(2, 7, 3, 5), rand(18, 7), rand(18)
    y = F.linear(channels_last(x), w, b).movedim(-1, 1)
    linear.add("image", [x], y, {}, {"weight": w, "bias": b})
    linear.add("image_residual", [x], y, {}, {"weight": w, "bias": b}, activation="gelu",
               residual=rand(2, 18, 3, 5))
    x, mean, variance = rand(2, 5, 6), rand(6), rand(6).abs() + 0.5
    y = F.batch_norm(x.mT, mean, variance).mT
    norm.add("tokens", [x], y, {"eps": 1e-5}, {"mean": mean, "variance": variance})
    x = rand(2, 5, 3, 4, scale=3)
    softmax.add("image", [x], torch.softmax(x, 1))
    return [linear, norm, softmax]


def sides_and_sizes():
    pad, resize, largest = Cases("pad"), Cases("resize"), Cases("adaptive_max_pool")
    x = rand(2, 3, 4, 5)
    for mode in ("constant", "reflect", "replicate"):
        for top, left, bottom, right in ((1, 2, 3, 0), (0, 4, 2, 1)):
            value = 0.5 if mode == "constant" else 0.0
            options = {"value": value} if mode == "constant" else {}
            y = F.pad(x, (left, right, top, bottom), mode=mode, **options)
            attributes = {"padding": [top, left, bottom, right], "mode": mode, "value": value}
            pad.add(f"{mode}_{top}_{left}", [x], y, attributes)
    for mode in ("nearest", "bilinear", "bicubic"):
        for factor in ([2, 2], [3, 1], [1, 4]):
            y = F.interpolate(x, scale_factor=tuple(map(float, factor)), mode=mode,
                              align_corners=None if mode == "nearest" else False)
            attributes = {"factor": factor, "interpolation": mode}
            resize.add(f"{mode}_{factor[0]}_{factor[1]}", [x], y, attributes)
    x = rand(2, 70, 7, 9)
    for size in (1, [3, 2], [7, 9], [9, 4]):
        y = F.adaptive_max_pool2d(x, size)
        largest.add(f"to_{size}".replace(" ", ""), [x], y, {"output_size": size})
    return [pad, resize, largest]


def norms():
    groups, local = Cases("group_norm"), Cases("local_response_norm")
    l2 = Cases("l2_normalize")
    x = rand(2, 12, 5, 4) + 3
    for count in (1, 3, 12):
        weight, bias = (rand(12), rand(12)) if count != 3 else (None, None)
        y = F.group_norm(x, count, weight, bias, 1e-5)
        groups.add(f"of_{count}", [x], y, {"groups": count}, {"weight": weight, "bias": bias})
    x = rand(2, 7, 3, 4, scale=2)
    for size, alpha, beta, k in ((5, 1e-4, 0.75, 2.0), (2, 0.5, 0.75, 1.0), (3, 1.0, 0.5, 0.1)):
        y = F.local_response_norm(x, size, alpha, beta, k)
        attributes = {"size": size, "alpha": alpha, "beta": beta, "k": k}
        local.add(f"of_{size}", [x], y, attributes)
    for name, x in (("image", rand(2, 7, 3, 4)), ("tokens", rand(2, 5, 9)), ("features", rand(3, 6))):
        y = F.normalize(x, dim=1 if x.dim() == 4 else -1)
        l2.add(name, [x], y, {"eps": 1e-12})
    x = rand(2, 6, scale=1e-3)
    l2.add("small", [x], F.normalize(x, dim=-1, eps=0.5), {"eps": 0.5})
    return [groups, local, l2]


def factors():
    """What a product repeats: over positions, or over channels."""
    cases = Cases("mul", "factors")
    for name, first, second in (("each_position_of_an_image", (2, 7, 3, 4), (2, 1, 3, 4)),
                                ("one_channel", (2, 1, 3, 4), (2, 1, 1, 1)),
                                ("one_position", (2, 7, 1, 1), (2, 1, 1, 1)),
                                ("each_channel_of_tokens", (2, 5, 9), (2, 1, 9)),
                                ("each_token", (2, 5, 9), (2, 5, 1)),
                                ("each_item", (3, 7), (3, 1))):
        a, b = rand(*first), rand(*second)
        cases.add(name, [a, b], a * b)
    a, b = rand(1, 3, 2, 2), torch.tensor([0.0, NAN, INF, 1.0], dtype=torch.float64)
    a[0, :, 0, 0] = INF
    cases.add("nan", [a, b.reshape(1, 1, 2, 2)], a * b.reshape(1, 1, 2, 2))
    return [cases]


def channel_pools():
    cases = Cases("channel_pool")
    for name, shape, axis in (("image", (2, 7, 3, 4), 1), ("one_channel", (1, 1, 2, 3), 1),
                              ("tokens", (2, 5, 33), 2)):
        x = rand(*shape)
        cases.add(f"mean_of_{name}", [x], x.mean(axis, keepdim=True), {"kind": "mean"})
        cases.add(f"max_of_{name}", [x], x.amax(axis, keepdim=True), {"kind": "max"})
    x = rand(1, 3, 2, 2)
    x[0, 0, 0, 0], x[0, 1, 0, 1], x[0, 2, 1, 0], x[0, 2, 1, 1] = NAN, NAN, NAN, -INF
    cases.add("max_with_nan", [x], x.amax(1, keepdim=True), {"kind": "max"})
    return [cases]


def main():
    groups = [*scale(), *slices(), *shapes(), *window_attention(), *grid_attention(),
              *biased_attention(), *other_ranks(), *sides_and_sizes(), *norms(), *factors(), *channel_pools()]
    total = sum(cases.write() for cases in groups)
    print(f"{len(groups)} files, {total} bytes")


if __name__ == "__main__":
    main()
