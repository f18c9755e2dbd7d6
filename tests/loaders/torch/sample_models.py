"""Models for the exporter's tests: published ones made small, one for each way to write things."""

import importlib.util
import os

import torch
import torch.nn.functional as F
import torchvision
from sample_attention import Handwritten, ImageAttention, Windowed, swin_block
from torch import nn

_ROOT = os.path.abspath(os.path.join(os.path.dirname(__file__), "..", "..", ".."))


def _buttons():
    path = os.path.join(_ROOT, "examples", "buttons", "models.py")
    spec = importlib.util.spec_from_file_location("button_models", path)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def small_vgg(name):
    """VGG-11's layers; its classifier, 120 million weights, narrowed to 64 channels."""
    model = getattr(torchvision.models, name)(weights=None, num_classes=10)
    model.classifier[0] = nn.Linear(512 * 7 * 7, 64)
    model.classifier[3] = nn.Linear(64, 64)
    model.classifier[6] = nn.Linear(64, 10)
    return model


def small_vit(**more):
    return torchvision.models.VisionTransformer(
        image_size=64, patch_size=16, num_layers=2, num_heads=3, hidden_dim=48, mlp_dim=96,
        num_classes=10, **more,
    )  # fmt: skip


class Windows(nn.Module):
    """Kernels, strides, paddings and dilations that differ by side; one input channel."""

    def __init__(self):
        super().__init__()
        self.tall = nn.Conv2d(1, 8, (5, 3), stride=(2, 1), padding=(2, 0))
        self.same = nn.Conv2d(8, 8, (3, 5), padding="same", dilation=(2, 1), groups=4)
        self.even = nn.Conv2d(8, 6, (4, 2), padding="same", bias=False)
        self.valid = nn.Conv2d(6, 6, 1, padding="valid")
        self.max = nn.MaxPool2d((3, 2), stride=(2, 1), padding=(1, 0), ceil_mode=True)
        self.wide = nn.MaxPool2d(2, stride=1, dilation=2)
        self.average = nn.AvgPool2d(3, padding=1, count_include_pad=False)
        self.coarse = nn.AdaptiveAvgPool2d((3, 2))

    def forward(self, picture):
        x = self.valid(self.even(self.same(self.tall(picture))))
        return self.coarse(self.average(self.wide(self.max(x))))


class Functions(nn.Module):
    """Everything by functions and methods, weights as bare parameters; five input channels."""

    def __init__(self):
        super().__init__()
        self.kernel = nn.Parameter(torch.randn(6, 5, 3, 3) * 0.2)
        self.shift = nn.Parameter(torch.randn(6))
        self.gain = nn.Parameter(torch.rand(6) + 0.5)
        self.register_buffer("mean", torch.randn(6))
        self.register_buffer("variance", torch.rand(6) + 0.5)
        self.matrix = nn.Parameter(torch.randn(4, 24))

    def forward(self, x):
        x = F.conv2d(x, self.kernel, self.shift, stride=(1, 2), padding=1)
        x = F.batch_norm(x, self.mean, self.variance, self.gain, self.shift, eps=1e-3)
        x = F.relu(x, inplace=True) + F.max_pool2d(x, 3, stride=1, padding=1)
        x = torch.cat((x, F.avg_pool2d(x, (3, 3), 1, 1)), dim=1)
        x = x * F.adaptive_avg_pool2d(x, 1).sigmoid()
        x = F.adaptive_avg_pool2d(x, (2, 1))
        x = F.dropout(x, 0.5, training=self.training)
        x = F.linear(torch.flatten(x, 1), self.matrix)
        return F.softmax(F.layer_norm(x, (4,)), dim=-1)


class Activations(nn.Module):
    """Each kind as a module, as a function and, where there is one, as a method."""

    modules_ = (
        nn.ReLU(), nn.ReLU(inplace=True), nn.ReLU6(), nn.LeakyReLU(), nn.LeakyReLU(0.2), nn.GELU(),
        nn.GELU(approximate="tanh"), nn.SiLU(), nn.Sigmoid(), nn.Hardsigmoid(), nn.Hardswish(),
        nn.Tanh(), nn.ELU(), nn.ELU(0.5), nn.Softplus(), nn.Mish(),
    )  # fmt: skip
    functions = (
        F.relu, F.relu6, F.leaky_relu, lambda x: F.leaky_relu(x, 0.3), F.gelu,
        lambda x: F.gelu(x, approximate="tanh"), F.silu, torch.sigmoid, F.hardsigmoid,
        F.hardswish, torch.tanh, torch.relu, lambda x: x.relu(), lambda x: x.sigmoid(),
        lambda x: x.tanh(), lambda x: F.silu(x, inplace=True), lambda x: F.elu(x, 1.5), F.softplus,
        F.mish,
    )  # fmt: skip

    def __init__(self):
        super().__init__()
        self.before = nn.ModuleList(nn.Conv2d(4, 4, 1) for _ in (*self.modules_, *self.functions))
        self.kinds = nn.ModuleList(self.modules_)

    def forward(self, x):
        steps = (*self.kinds, *self.functions)
        return tuple(step(conv(x)) for step, conv in zip(steps, self.before))


class InPlace(nn.Module):
    """Changes in place that a later reader of the same tensor sees."""

    def __init__(self):
        super().__init__()
        self.norm = nn.BatchNorm2d(4)
        self.relu = nn.ReLU(inplace=True)
        self.conv = nn.Conv2d(4, 4, 3, padding=1)

    def forward(self, x):
        x = self.norm(x)
        y = self.conv(self.relu(x))  # the shortcut below is relu(x)
        y += x
        z = y
        z *= x.detach()
        F.relu_(y)
        return y + z


class Shared(nn.Module):
    """One module called three times, with names that functions might take."""

    def __init__(self):
        super().__init__()
        self.add = nn.Conv2d(4, 4, 3, padding=1)
        self.relu = nn.ReLU()

    def forward(self, image):
        x = image + self.relu(self.add(image))
        x = x + self.relu(self.add(x))
        return F.relu(self.add(x))


class Squeeze(nn.Module):
    """Channel weights by a mean over the positions; the factor stands first."""

    def __init__(self):
        super().__init__()
        self.down, self.up = nn.Conv2d(8, 2, 1), nn.Conv2d(2, 8, 1)
        self.head = nn.Linear(8, 3)

    def forward(self, x):
        scale = x.mean((2, 3), keepdim=True)
        scale = F.hardsigmoid(self.up(F.relu(self.down(scale))))
        return self.head((scale * x).mean([-2, -1]))


class Gates(nn.Module):
    """Factors of every kind: for channels and positions (Woo et al. 2018), of images and tokens."""

    def __init__(self):
        super().__init__()
        self.channels, self.positions = nn.Linear(8, 8), nn.Conv2d(2, 1, 3, padding=1)
        self.features, self.tokens = nn.Linear(8, 8), nn.Linear(8, 1)
        self.again = nn.Conv2d(2, 1, 1)
        self.head = nn.Linear(8, 3)

    def forward(self, x):
        n, c, h, w = x.shape
        x = torch.sigmoid(self.channels(x.mean((2, 3)))).view(n, c, 1, 1) * x
        seen = torch.cat((x.mean(1, keepdim=True), x.amax(1, keepdim=True)), 1)
        x = torch.sigmoid(self.positions(seen)) * x
        seen = torch.cat((torch.max(x, 1)[0].unsqueeze(1), torch.mean(x, 1).unsqueeze(1)), 1)
        x = x * torch.sigmoid(self.again(seen))
        tokens = x.flatten(2).transpose(1, 2)
        tokens = tokens * torch.sigmoid(self.features(tokens.mean(1, keepdim=True)))
        tokens = tokens * torch.sigmoid(self.tokens(tokens) + tokens.max(-1, keepdim=True)[0])
        y = tokens.mean(1)
        return self.head(y * torch.sigmoid(self.tokens(y)))


class ChannelsLast(nn.Module):
    """Images normalised over their channels, through a permutation there and back."""

    def __init__(self):
        super().__init__()
        self.norm = nn.LayerNorm(6, eps=1e-6)
        self.conv = nn.Conv2d(6, 6, 3, padding=1)

    def forward(self, x):
        y = F.gelu(self.norm(x.permute(0, 2, 3, 1))).permute(0, 3, 1, 2)
        return x + self.conv(y)


class Perceptron(nn.Module):
    """Features in, features out."""

    def __init__(self):
        super().__init__()
        self.layers = nn.Sequential(
            nn.Linear(12, 16, bias=False), nn.BatchNorm1d(16), nn.ReLU(), nn.Dropout(),
            nn.Identity(), nn.Linear(16, 5), nn.Softmax(-1),
        )  # fmt: skip

    def forward(self, x):
        return self.layers(x)


class Patches(nn.Module):
    """The ways to tokens, a two-row class token, positions as [T, C], a mean over tokens."""

    def __init__(self, way):
        super().__init__()
        self.way = way
        self.embed = nn.Conv2d(3, 12, 8, 8)
        self.first = nn.Parameter(torch.randn(1, 2, 12))
        self.place = nn.Parameter(torch.randn(18, 12))
        self.norm = nn.LayerNorm(12)

    def forward(self, x):
        x = self.embed(x)
        n, c = x.shape[:2]
        x = {
            "flatten": lambda: x.flatten(2).transpose(1, 2),
            "reshape": lambda: x.reshape(n, c, x.size(2) * x.size(3)).permute(0, 2, 1),
            "view": lambda: x.view(n, c, -1).transpose(-1, -2).contiguous(),
            "last": lambda: x.permute(0, 2, 3, 1).reshape(n, -1, c),
            "between": lambda: x.permute(0, 2, 3, 1).flatten(1, 2),
        }[self.way]()
        x = torch.cat([self.first.repeat(n, 1, 1), x], dim=1) + self.place
        rows = self.norm(x).view(-1, c).view(n, -1, c)
        return rows.mean(dim=1), rows.mean(1, keepdim=True), rows[:, 1], x.flatten(1)


class Attention(nn.Module):
    """Joint, cross and differently sized attention, batch first or second, weights by head."""

    def __init__(self):
        super().__init__()
        self.joint = nn.MultiheadAttention(12, 3, bias=False, batch_first=True)
        self.second = nn.MultiheadAttention(12, 4)
        self.cross = nn.MultiheadAttention(12, 2, batch_first=True)
        self.sized = nn.MultiheadAttention(12, 2, kdim=8, vdim=10, batch_first=True)
        self.norm = nn.LayerNorm(12)

    def forward(self, query, key, value):
        x, scores = self.joint(query, query, query, average_attn_weights=False)
        y = query.transpose(0, 1)
        x = x + self.second(y, y, y)[0].transpose(0, 1)
        x, _ = self.cross(self.norm(x), query, query, need_weights=False)
        return self.sized(x, key, value, need_weights=False)[0], scores


def encoder(layers=0, **options):
    layer = nn.TransformerEncoderLayer(12, 4, 20, batch_first=True, **options)
    return nn.TransformerEncoder(layer, layers) if layers else layer


class SecondBatch(nn.Module):
    """torch's own encoder layer in its default order, [T, N, C]."""

    def __init__(self):
        super().__init__()
        self.layer = encoder_layer = nn.TransformerEncoderLayer(12, 2, 20)
        encoder_layer.self_attn.batch_first = False

    def forward(self, x):
        return self.layer(x.transpose(0, 1)).transpose(0, 1)


class Rearranged(nn.Module):
    """Channels shuffled, cut, scaled; tokens mixed, cut and made images again."""

    def __init__(self):
        super().__init__()
        self.conv = nn.Conv2d(6, 6, 1)
        self.gain = nn.Parameter(torch.randn(12, 1, 1))
        self.shift = nn.Parameter(torch.randn(12))
        self.first = nn.Parameter(torch.randn(1, 1, 12))
        self.mix = nn.Linear(20, 20)
        self.down, self.up = nn.Linear(12, 4), nn.Linear(4, 12)
        self.groups, self.local = nn.GroupNorm(3, 12), nn.LocalResponseNorm(3, 0.5, 0.75, 2.0)
        self.register_buffer("mean", torch.randn(1, 12, 1, 1))
        self.register_buffer("spread", torch.rand(1, 12, 1, 1) + 0.5)

    def forward(self, x):
        n, c, h, w = x.shape
        x = (x - self.mean) / self.spread
        a, b = x.chunk(2, dim=1)
        x = torch.cat((a, self.conv(b)), dim=1)
        x = x.view(n, 3, 4, h, w).transpose(1, 2).reshape(n, c, h, w)
        x = torch.cat([x[:, :5], x[:, 5:] * 2.0 - 0.5], 1) * self.gain
        x = x + self.shift.view(1, -1, 1, 1)
        x = x + (F.avg_pool2d(x, 3, 1, 1) - x) * self.gain
        x = torch.addcmul(self.shift.view(-1, 1, 1), self.gain, x)
        s = x.mean((2, 3))
        x = x * torch.sigmoid(self.up(F.relu(self.down(s)))).view(n, c, 1, 1)
        tokens = torch.cat((self.first.expand(n, -1, -1), x.flatten(2).transpose(1, 2)), 1)
        tokens = tokens[:, 1:] + self.shift
        tokens = tokens + self.shift * self.mix(tokens.transpose(1, 2)).transpose(1, 2)
        y = tokens.transpose(1, 2).reshape(n, c, h, w)
        y = F.pad(y, (1, 0, 2, 1))[:, :, ::2, ::2]
        y = self.local(self.groups(F.interpolate(y, scale_factor=2, mode="nearest")))
        y = F.pad(y, (1, 1, 0, 2), mode="reflect")
        y = y + F.interpolate(
            F.adaptive_max_pool2d(y, (5, 4)), scale_factor=2, mode="bilinear", align_corners=False
        )
        return -y, tokens.permute(0, 2, 1), F.normalize(tokens, dim=-1).mean(1)


class Wrapped(nn.Module):
    """Channels of the input picked and scaled one by one, as pretrained Inception models do."""

    def forward(self, x):
        first = torch.unsqueeze(x[:, 0], 1) * (0.229 / 0.5) + (0.485 - 0.5) / 0.5
        second = torch.unsqueeze(x[:, 1], 1) * (0.224 / 0.5) + (0.456 - 0.5) / 0.5
        return torch.cat((first, second, x[:, 2:3]), 1)


# name -> (how to build it, shapes of its inputs)
SAMPLES = {
    "resnet18": (lambda: torchvision.models.resnet18(num_classes=10), [(1, 3, 64, 64)]),
    "resnet50": (lambda: torchvision.models.resnet50(num_classes=10), [(1, 3, 64, 48)]),
    "vgg11": (lambda: small_vgg("vgg11"), [(1, 3, 64, 64)]),
    "vgg11_bn": (lambda: small_vgg("vgg11_bn"), [(2, 3, 32, 64)]),
    "mobilenet_v2": (lambda: torchvision.models.mobilenet_v2(num_classes=10), [(1, 3, 64, 64)]),
    "vit": (small_vit, [(2, 3, 64, 64)]),
    "vit_with_hidden_head": (lambda: small_vit(representation_size=20), [(1, 3, 64, 64)]),
    "button_conv": (lambda: _buttons().ButtonConvNet(), [(1, 3, 64, 64)]),
    "button_vit": (lambda: _buttons().ButtonViT(), [(1, 3, 64, 64)]),
    "windows": (Windows, [(1, 1, 31, 26)]),
    "functions": (Functions, [(2, 5, 13, 18)]),
    "activations": (Activations, [(1, 4, 5, 5)]),
    "in_place": (InPlace, [(1, 4, 6, 5)]),
    "shared": (Shared, [(1, 4, 6, 5)]),
    "squeeze": (Squeeze, [(2, 8, 6, 5)]),
    "gates": (Gates, [(2, 8, 6, 5)]),
    "channels_last": (ChannelsLast, [(1, 6, 6, 5)]),
    "perceptron": (Perceptron, [(3, 12)]),
    "attention": (Attention, [(2, 5, 12), (2, 7, 8), (2, 7, 10)]),
    "encoder_layer": (encoder, [(1, 6, 12)]),
    "encoder_layer_norm_first": (
        lambda: encoder(norm_first=True, activation="gelu"), [(2, 6, 12)]
    ),
    "encoder": (lambda: encoder(layers=2), [(1, 6, 12)]),
    "second_batch": (SecondBatch, [(2, 6, 12)]),
    **{
        f"handwritten_{form}": (lambda form=form: Handwritten(form), [(2, 10, 24)])
        for form in ("joint", "unbound", "apart", "chunks", "one_head", "merged")
        + (("function",) if hasattr(F, "scaled_dot_product_attention") else ())
    },
    "image_attention": (ImageAttention, [(2, 8, 4, 5)]),
    "windows_of_images": (lambda: Windowed(False), [(2, 8, 6, 4)]),
    "grids_of_images": (lambda: Windowed(True), [(2, 8, 6, 4)]),
    "swin": (lambda: swin_block((3, 2), (1, 1)), [(2, 8, 7, 6)]),
    "swin_small": (lambda: swin_block((4, 4), (2, 2)), [(1, 8, 3, 7)]),
    "swin_v2": (lambda: swin_block((3, 3), (1, 1), second=True), [(1, 8, 7, 6)]),
    "convnext": (
        lambda: torchvision.models.convnext.CNBlock(8, 1.0, 0.0), [(2, 8, 7, 9)]
    ),
    "shufflenet": (
        lambda: torchvision.models.shufflenetv2.InvertedResidual(8, 8, 1), [(1, 8, 6, 5)]
    ),
    "squeeze_excitation": (
        lambda: torchvision.ops.SqueezeExcitation(8, 2), [(2, 8, 6, 5)]
    ),
    "rearranged": (Rearranged, [(2, 12, 5, 4)]),
    "picked_channels": (Wrapped, [(2, 3, 4, 5)]),
    **{
        f"patches_{way}": (lambda way=way: Patches(way), [(2, 3, 32, 32)])
        for way in ("flatten", "reshape", "view", "last", "between")
    },
}  # fmt: skip
