"""The two classifiers: one convolutional, one with attention.

Both are plain modules whose forward pass holds no constant taken from an image size.
"""

import torch
from torch import nn
from torch.nn import functional as F


class ResidualBlock(nn.Module):
    """Two 3x3 convolutions beside a shortcut (after He et al. 2016)."""

    def __init__(self, in_channels, out_channels, stride=1):
        super().__init__()
        self.conv1 = nn.Conv2d(in_channels, out_channels, 3, stride, 1, bias=False)
        self.bn1 = nn.BatchNorm2d(out_channels)
        self.conv2 = nn.Conv2d(out_channels, out_channels, 3, 1, 1, bias=False)
        self.bn2 = nn.BatchNorm2d(out_channels)
        self.shortcut = nn.Identity()
        if stride != 1 or in_channels != out_channels:
            self.shortcut = nn.Sequential(
                nn.Conv2d(in_channels, out_channels, 1, stride, bias=False),
                nn.BatchNorm2d(out_channels),
            )

    def forward(self, x):
        y = F.relu(self.bn1(self.conv1(x)))
        y = self.bn2(self.conv2(y))
        return F.relu(y + self.shortcut(x))


class SeparableBlock(nn.Module):
    """A depthwise 3x3 convolution, then a pointwise one (after Howard et al. 2017)."""

    def __init__(self, in_channels, out_channels, stride=1):
        super().__init__()
        self.depthwise = nn.Conv2d(
            in_channels, in_channels, 3, stride, 1, groups=in_channels, bias=False
        )
        self.bn1 = nn.BatchNorm2d(in_channels)
        self.pointwise = nn.Conv2d(in_channels, out_channels, 1, bias=False)
        self.bn2 = nn.BatchNorm2d(out_channels)

    def forward(self, x):
        x = F.relu(self.bn1(self.depthwise(x)))
        return F.relu(self.bn2(self.pointwise(x)))


class ButtonConvNet(nn.Module):
    """A small residual network; any image of at least 32x32 will do."""

    def __init__(self, classes=8):
        super().__init__()
        self.stem = nn.Conv2d(3, 24, 3, stride=2, padding=1, bias=False)
        self.stem_bn = nn.BatchNorm2d(24)
        self.pool = nn.MaxPool2d(3, stride=2, padding=1)
        self.stage1 = ResidualBlock(24, 32)
        self.stage2 = ResidualBlock(32, 64, stride=2)
        self.separable = SeparableBlock(64, 96)
        self.stage3 = ResidualBlock(96, 96)
        self.average = nn.AdaptiveAvgPool2d(1)
        self.head = nn.Linear(96, classes)

    def forward(self, x):
        x = self.pool(F.relu(self.stem_bn(self.stem(x))))
        x = self.stage2(self.stage1(x))
        x = self.stage3(self.separable(x))
        return self.head(torch.flatten(self.average(x), 1))


class TransformerBlock(nn.Module):
    """Attention and a two-layer perceptron, each normalised first."""

    def __init__(self, width, heads):
        super().__init__()
        self.norm1 = nn.LayerNorm(width)
        self.attention = nn.MultiheadAttention(width, heads, batch_first=True)
        self.norm2 = nn.LayerNorm(width)
        self.mlp = nn.Sequential(
            nn.Linear(width, 4 * width),
            nn.GELU(),
            nn.Linear(4 * width, width),
        )

    def forward(self, x):
        y = self.norm1(x)
        x = x + self.attention(y, y, y, need_weights=False)[0]
        return x + self.mlp(self.norm2(x))


class ButtonViT(nn.Module):
    """A small vision transformer (after Dosovitskiy et al. 2021)."""

    def __init__(self, classes=8, image=64, patch=8, width=64, depth=4, heads=4):
        super().__init__()
        self.patch_embed = nn.Conv2d(3, width, patch, stride=patch)
        self.class_token = nn.Parameter(torch.zeros(1, 1, width))
        tokens = (image // patch) ** 2 + 1
        self.position = nn.Parameter(torch.empty(1, tokens, width).normal_(std=0.02))
        self.blocks = nn.ModuleList(TransformerBlock(width, heads) for _ in range(depth))
        self.norm = nn.LayerNorm(width)
        self.head = nn.Linear(width, classes)

    def forward(self, x):
        x = self.patch_embed(x).flatten(2).transpose(1, 2)
        x = torch.cat([self.class_token.expand(x.shape[0], -1, -1), x], dim=1)
        x = x + self.position
        for block in self.blocks:
            x = block(x)
        return self.head(self.norm(x)[:, 0])
