"""Handwritten digits: the predictions on every test picture equal the reference library's.

Data: UCI "Optical Recognition of Handwritten Digits" (Alpaydin & Kaynak 1998), as scikit-learn
ships it (1,797 pictures of 8 x 8). Both models are trained here, in seconds.
"""

import importlib.util
import json
import pathlib
import shutil
import subprocess
import sys
import tempfile
import unittest

import conform

HAS_LIBRARIES = all(importlib.util.find_spec(m) for m in ("torch", "sklearn"))
if HAS_LIBRARIES:
    import numpy as np
    import torch
    from sklearn.datasets import load_digits
    from torch import nn

    sys.path.insert(0, str(conform.ROOT / "loaders" / "torch"))
    import leadsman_export

    class Attention(nn.Module):
        def __init__(self, width=32, heads=4, patch=2, side=8):
            super().__init__()
            self.patches = nn.Conv2d(1, width, patch, patch)
            self.token = nn.Parameter(torch.zeros(1, 1, width))
            self.position = nn.Parameter(torch.randn(1, (side // patch) ** 2 + 1, width) * 0.02)
            self.norm1 = nn.LayerNorm(width)
            self.attention = nn.MultiheadAttention(width, heads, batch_first=True)
            self.norm2 = nn.LayerNorm(width)
            self.mlp = nn.Sequential(nn.Linear(width, 64), nn.GELU(), nn.Linear(64, width))
            self.norm = nn.LayerNorm(width)
            self.head = nn.Linear(width, 10)

        def forward(self, x):
            x = self.patches(x).flatten(2).transpose(1, 2)
            x = torch.cat([self.token.expand(x.shape[0], -1, -1), x], dim=1) + self.position
            y = self.norm1(x)
            x = x + self.attention(y, y, y, need_weights=False)[0]
            x = x + self.mlp(self.norm2(x))
            return self.head(self.norm(x)[:, 0])

    def convolutions():
        return nn.Sequential(
            nn.Conv2d(1, 16, 3, padding=1, bias=False),
            nn.BatchNorm2d(16),
            nn.ReLU(),
            nn.MaxPool2d(2),
            nn.Conv2d(16, 32, 3, padding=1),
            nn.ReLU(),
            nn.AdaptiveAvgPool2d(2),
            nn.Flatten(),
            nn.Linear(128, 10),
        )


@unittest.skipUnless(HAS_LIBRARIES, "torch or scikit-learn is not installed")
class Digits(unittest.TestCase):
    @classmethod
    def setUpClass(cls):
        torch.set_num_threads(1)  # these models are too small to share out
        data = load_digits()
        pictures = torch.from_numpy(data.images.astype("float32") / 16.0).unsqueeze(1)
        labels = torch.from_numpy(data.target)
        order = torch.randperm(len(labels), generator=torch.Generator().manual_seed(0))
        cls.train = (pictures[order[:1200]], labels[order[:1200]])
        cls.test = (pictures[order[1200:]].contiguous(), labels[order[1200:]])

    def fit(self, model, steps):
        optimizer = torch.optim.Adam(model.parameters(), lr=3e-3)
        generator = torch.Generator().manual_seed(1)
        for _ in range(steps):
            batch = torch.randint(0, len(self.train[1]), (64,), generator=generator)
            loss = nn.functional.cross_entropy(model(self.train[0][batch]), self.train[1][batch])
            optimizer.zero_grad()
            loss.backward()
            optimizer.step()
        return model.eval()

    def check(self, model):
        folder = pathlib.Path(tempfile.mkdtemp(prefix="leadsman-digits-"))
        self.addCleanup(shutil.rmtree, folder)
        pictures, labels = self.test
        with torch.no_grad():
            logits = model(pictures)
        accuracy = float((logits.argmax(1) == labels).float().mean())
        self.assertGreater(accuracy, 0.93)  # trained at all: a constant answer gets 0.1

        leadsman_export.export(model, pictures[:2], folder / "bundle")
        np.save(folder / "pictures.npy", pictures.numpy())
        tool = conform.tool_path()
        done = subprocess.run(
            [tool, "classify", folder / "bundle", "--tensor", folder / "pictures.npy", "--json"],
            capture_output=True, text=True, check=True,
        )
        lines = [json.loads(line) for line in done.stdout.splitlines()]
        self.assertEqual(len(lines), len(labels))
        ours = [line["top"][0]["index"] for line in lines]
        self.assertEqual(ours, logits.argmax(1).tolist())
        probabilities = torch.softmax(logits.double(), 1)
        worst = max(
            abs(line["top"][0]["probability"] - float(probabilities[i, ours[i]]))
            for i, line in enumerate(lines)
        )
        self.assertLess(worst, 1e-5)
        verified = conform.run_json(tool, "verify", folder / "bundle", "--json")
        self.assertIsNone(verified["first_departure"])
        print(f"{type(model).__name__}: accuracy {accuracy:.3f}, {len(labels)} equal predictions")

    def test_convolutional_net(self):
        torch.manual_seed(0)
        self.check(self.fit(convolutions(), 300))

    def test_transformer(self):
        torch.manual_seed(0)
        self.check(self.fit(Attention(), 500))


if __name__ == "__main__":
    unittest.main()
