"""From a picture to the classifiers' input: the one place that says how.

`PREPROCESS` is what a bundle records; `preprocess` carries it out with torchvision,
and `normalise` is its last part alone, for pictures that are already resized.
"""

import torch
from torchvision import transforms

PREPROCESS = {
    "resize": {"shorter_side": 64, "interpolation": "bilinear"},
    "crop": [64, 64],
    "scale": 1 / 255,
    "mean": [0.5, 0.5, 0.5],
    "std": [0.5, 0.5, 0.5],
}

# On a Pillow image this is Pillow's own bilinear filter, which is antialiased.
resize = transforms.Resize(
    PREPROCESS["resize"]["shorter_side"],
    interpolation=transforms.InterpolationMode(PREPROCESS["resize"]["interpolation"]),
)
_crop = transforms.CenterCrop(PREPROCESS["crop"])


def normalise(pixels):
    """uint8 [..., 3, H, W] to float32 of the same shape, around zero."""
    mean = torch.tensor(PREPROCESS["mean"])[:, None, None]
    std = torch.tensor(PREPROCESS["std"])[:, None, None]
    return (pixels.float() * PREPROCESS["scale"] - mean) / std


def preprocess(picture):
    """A Pillow image to a float32 tensor [3, 64, 64]."""
    return normalise(transforms.functional.pil_to_tensor(_crop(resize(picture.convert("RGB")))))
