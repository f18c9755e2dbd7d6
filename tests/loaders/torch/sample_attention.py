"""Attention as people write it: by hand over tokens, over images, in windows and on grids."""

import math

import torch
import torch.nn.functional as F
import torchvision
from torch import nn


class Handwritten(nn.Module):
    """Attention of plain pieces, each way that is in use; `form` says which."""

    def __init__(self, form, heads=3, width=24):
        super().__init__()
        self.form, self.heads, self.scale = form, heads, (width // heads) ** -0.5
        self.norm = nn.LayerNorm(width)
        self.qkv = nn.Linear(width, 3 * width)
        self.q, self.kv = nn.Linear(width, width, bias=False), nn.Linear(width, 2 * width)
        self.proj = nn.Linear(width, width)
        self.drop = nn.Dropout(0.1)
        self.bias = nn.Parameter(torch.randn(heads, 10, 10))

    def forward(self, x):
        return x + self.drop(self.proj(getattr(self, self.form)(self.norm(x))))

    def joint(self, x):
        b, n, c = x.shape
        qkv = self.qkv(x).reshape(b, n, 3, self.heads, c // self.heads).permute(2, 0, 3, 1, 4)
        q, k, v = qkv[0], qkv[1], qkv[2]
        scores = self.drop((q @ k.transpose(-2, -1) * self.scale).softmax(dim=-1))
        return (scores @ v).transpose(1, 2).reshape(b, n, c)

    def unbound(self, x):
        b, n, c = x.shape
        qkv = self.qkv(x).reshape(b, n, 3, self.heads, -1).permute(2, 0, 3, 1, 4)
        q, k, v = qkv.unbind(0)
        q = q * self.scale
        scores = torch.softmax(torch.matmul(q, k.mT) + self.bias.unsqueeze(0), -1)
        return torch.matmul(scores, v).permute(0, 2, 1, 3).flatten(2)

    def apart(self, x):
        b, n, c = x.shape
        q = self.q(x).view(b, n, self.heads, -1).transpose(1, 2) / math.sqrt(c // self.heads)
        kv = self.kv(x).reshape(b, n, 2, self.heads, c // self.heads).permute(2, 0, 3, 1, 4)
        scores = F.softmax(torch.einsum("b h i d, b h j d -> b h i j", q, kv[0]), dim=-1)
        y = torch.einsum("bhij,bhjd->bhid", scores, kv[1])
        return y.transpose(1, 2).contiguous().view(b, -1, c)

    def chunks(self, x):
        b, n, c = x.shape
        q, k, v = (t.unflatten(-1, (self.heads, -1)) for t in self.qkv(x).chunk(3, dim=-1))
        scores = torch.einsum("bnhd,bmhd->bhnm", q, k).mul(0.2).softmax(-1)
        return torch.einsum("bhnm,bmhd->bnhd", scores, v).flatten(-2)

    def one_head(self, x):
        q, k, v = self.qkv(x).split(x.shape[-1], dim=-1)
        scores = torch.bmm(q, k.transpose(1, 2)) * x.size(-1) ** -0.5
        return torch.bmm(F.softmax(scores, -1), v)

    def merged(self, x):
        b, n, c = x.shape
        q, k, v = (
            t.reshape(b, n, self.heads, -1).transpose(1, 2).reshape(b * self.heads, n, -1)
            for t in self.qkv(x).chunk(3, dim=-1)
        )
        y = torch.bmm(torch.softmax(torch.bmm(q * self.scale, k.mT), -1), v)
        return y.view(b, self.heads, n, -1).transpose(1, 2).reshape(b, n, c)

    def function(self, x):
        b, n, c = x.shape
        qkv = self.qkv(x).reshape(b, n, 3, self.heads, -1).permute(2, 0, 3, 1, 4)
        y = F.scaled_dot_product_attention(*qkv.unbind(0), attn_mask=self.bias)
        return y.transpose(1, 2).reshape(b, n, c)


class ImageAttention(nn.Module):
    """Queries, keys and values by 1x1 convolutions, all positions against all."""

    def __init__(self, heads=2):
        super().__init__()
        self.heads = heads
        self.q, self.k, self.v = (nn.Conv2d(8, 8, 1) for _ in range(3))

    def forward(self, x):
        n, c, h, w = x.shape
        q, k, v = (
            f(x).view(n, self.heads, c // self.heads, h * w) for f in (self.q, self.k, self.v)
        )
        scores = torch.softmax(q.transpose(-2, -1) @ k, dim=-1)
        return x + (v @ scores.transpose(-2, -1)).reshape(n, c, h, w)


class Windowed(nn.Module):
    """Attention in windows and on grids, cut by reshapes, with a relative position table."""

    def __init__(self, grid, side=2, heads=2):
        super().__init__()
        self.grid, self.side, self.heads = grid, side, heads
        self.qkv, self.proj = nn.Linear(8, 24), nn.Linear(8, 8)
        self.table = nn.Parameter(torch.randn((2 * side - 1) ** 2, heads))
        place = torch.cartesian_prod(torch.arange(side), torch.arange(side))
        offset = place[:, None] - place[None] + side - 1
        self.register_buffer("index", offset[..., 0] * (2 * side - 1) + offset[..., 1])

    def forward(self, x):
        n, c, h, w = x.shape
        p = self.side
        if self.grid:
            x = x.view(n, c, p, h // p, p, w // p).permute(0, 3, 5, 2, 4, 1)
        else:
            x = x.view(n, c, h // p, p, w // p, p).permute(0, 2, 4, 3, 5, 1)
        x = x.reshape(-1, p * p, c)
        b = x.shape[0]
        qkv = self.qkv(x).reshape(b, p * p, 3, self.heads, -1).permute(2, 0, 3, 1, 4)
        q, k, v = qkv[0] * 0.3, qkv[1], qkv[2]
        bias = self.table[self.index.view(-1)].view(p * p, p * p, -1).permute(2, 0, 1)
        scores = (q @ k.transpose(-2, -1) + bias.unsqueeze(0)).softmax(-1)
        x = self.proj((scores @ v).transpose(1, 2).reshape(b, p * p, c))
        if self.grid:
            return x.view(n, h // p, w // p, p, p, c).permute(0, 5, 3, 1, 4, 2).reshape(n, c, h, w)
        return x.view(n, h // p, w // p, p, p, c).permute(0, 5, 1, 3, 2, 4).reshape(n, c, h, w)


def swin_block(window, shift, second=False):
    blocks = torchvision.models.swin_transformer
    if second:
        layer = blocks.SwinTransformerBlockV2(8, 2, list(window), list(shift))
    else:
        layer = blocks.SwinTransformerBlock(8, 2, list(window), list(shift))
    to_last = torchvision.ops.misc.Permute([0, 2, 3, 1])
    back = torchvision.ops.misc.Permute([0, 3, 1, 2])
    merging = blocks.PatchMergingV2 if second else blocks.PatchMerging
    return nn.Sequential(to_last, layer, merging(8), back)
