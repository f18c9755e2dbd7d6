"""The page of a sweep in headless Chromium: every figure and every mark equals the JSON."""

import json
import math
import os
import pathlib
import re
import subprocess
import tempfile
import unittest

from selenium import webdriver
from selenium.webdriver.chrome.service import Service

BUNDLES = pathlib.Path(__file__).resolve().parents[2] / "examples/buttons/bundles"

# Everything that the checks need, in one call: figures, dots with their axes, bars, resources.
READ = """
const data = e => ({...e.dataset});
return {
  figures: [...document.querySelectorAll('[data-json]')].map(e => ({...data(e), text: e.textContent})),
  dots: [...document.querySelectorAll('[data-y]')].map(e => ({...data(e),
    cx: +e.getAttribute('cx'), cy: +e.getAttribute('cy'), axes: data(e.closest('svg'))})),
  bars: [...document.querySelectorAll('[data-share]')].map(e => ({...data(e),
    width: +e.getAttribute('width')})),
  paper: getComputedStyle(document.body).backgroundColor,
  resources: performance.getEntriesByType('resource').map(e => e.name),
};"""


def resolve(document, pointer):
    for part in pointer.split("/")[1:]:
        document = document[int(part)] if isinstance(document, list) else document[part]
    return document


def place(axis, value):
    low, high, scale, begin, end = axis.split()
    low, high, begin, end = float(low), float(high), float(begin), float(end)
    if scale == "log":
        share = math.log(value / low) / math.log(high / low)
    else:
        share = (value - low) / (high - low)
    return begin + (end - begin) * share


class Page(unittest.TestCase):
    @classmethod
    def setUpClass(cls):
        cls.folder = tempfile.TemporaryDirectory()
        cls.addClassCleanup(cls.folder.cleanup)
        page = pathlib.Path(cls.folder.name) / "sweep.html"
        command = [os.environ["LEADSMAN_TOOL"], "sweep", BUNDLES / "conv", BUNDLES / "vit"]
        command += ["--sizes", "32:80:16", "--threads", "1", "--repeat", "5", "--memory", "1GiB"]
        printed = subprocess.run(
            [*command, "--json", "--html", page], check=True, capture_output=True, text=True
        ).stdout
        cls.json = json.loads(printed)
        cls.source = page.read_text(encoding="utf-8")
        options = webdriver.ChromeOptions()
        for argument in ("--headless", "--no-sandbox", "--disable-gpu", "--disable-dev-shm-usage"):
            options.add_argument(argument)
        options.set_capability("goog:loggingPrefs", {"browser": "ALL"})
        cls.browser = webdriver.Chrome(service=Service("/usr/bin/chromedriver"), options=options)
        cls.addClassCleanup(cls.browser.quit)
        cls.browser.get(page.as_uri())
        cls.seen = cls.browser.execute_script(READ)

    def test_figures_equal_the_json(self):
        self.assertGreater(len(self.seen["figures"]), 60)
        for figure in self.seen["figures"]:
            value = resolve(self.json, figure["json"]) * float(figure["factor"])
            decimals = len(figure["text"].partition(".")[2])
            self.assertAlmostEqual(
                float(figure["text"]), value, delta=0.5000001 * 10**-decimals, msg=figure["json"]
            )

    def test_marks_lie_where_the_json_says(self):
        # Latency, memory and roofline: a dot each for 8 points.
        self.assertEqual(len(self.seen["dots"]), 24)
        for dot in self.seen["dots"]:
            x = place(dot["axes"]["xaxis"], resolve(self.json, dot["x"]))
            y = place(dot["axes"]["yaxis"], resolve(self.json, dot["y"]) * float(dot["factor"]))
            self.assertAlmostEqual(dot["cx"], x, delta=0.01, msg=dot["x"])
            self.assertAlmostEqual(dot["cy"], y, delta=0.01, msg=dot["y"])
        self.assertAlmostEqual(sum(bar["width"] for bar in self.seen["bars"]), 2 * 480, delta=0.1)
        for bar in self.seen["bars"]:
            self.assertAlmostEqual(bar["width"], 480 * resolve(self.json, bar["share"]), delta=0.01)

    def test_stands_alone_and_logs_nothing(self):
        self.assertEqual(self.browser.get_log("browser"), [])
        self.assertEqual([name for name in self.seen["resources"] if not name.startswith("data:")], [])
        self.assertIsNone(re.search(r"https?:|<script|@import|url\(", self.source))

    def test_is_light_and_dark(self):
        colours = set()
        for scheme in ("light", "dark"):
            features = [{"name": "prefers-color-scheme", "value": scheme}]
            self.browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"features": features})
            colours.add(self.browser.execute_script(READ)["paper"])
        self.assertEqual(len(colours), 2)


if __name__ == "__main__":
    unittest.main()
