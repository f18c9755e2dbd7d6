#!/usr/bin/env python3
"""Models of the package timm, of families that torchvision does not have, layer by layer.

    python3 tests/conformance/timm_models.py [--tool build/release/leadsman] [--models NAME,NAME]
                                             [--table FILE.md]

Needs timm and a torch that it takes, from PyPI (`pip install timm`); no part of the tests, since
Debian has no such package. Weights are seeded and settled as those of conform.py are. What cannot
be exported is listed with the exporter's reason.
"""

import argparse
import pathlib
import shutil
import sys
import tempfile

import conform

# One or two of each family, small ones.
MODELS = [
    "beit_base_patch16_224", "cait_xxs24_224", "coat_lite_tiny", "convmixer_768_32",
    "convnext_atto", "convnextv2_atto", "cspdarknet53", "darknet53", "deit3_small_patch16_224",
    "dla34", "dpn48b", "edgenext_xx_small", "efficientformer_l1", "efficientnet_lite0",
    "ese_vovnet19b_dw", "fbnetc_100", "ghostnet_050", "gmlp_s16_224", "hgnet_tiny",
    "hrnet_w18_small", "inception_next_tiny", "inception_v4", "lcnet_050", "levit_128s",
    "mixer_s32_224", "mobileone_s0", "mobilevit_xxs", "nf_resnet26", "pit_ti_224",
    "poolformer_s12", "regnety_002", "repvgg_a0", "repvit_m0_9", "res2net50_26w_4s",
    "resmlp_12_224", "rexnet_100", "selecsls42", "seresnet18", "skresnet18", "starnet_s1",
    "swin_tiny_patch4_window7_224", "tiny_vit_5m_224", "tinynet_e", "twins_svt_small",
    "visformer_tiny", "vit_tiny_patch16_224", "xception41", "xcit_nano_12_p16_224",
]  # fmt: skip


def check(tool, name):
    """A row of conform's table, or of the exporter's refusal; whether all is well."""
    import leadsman_export
    import timm
    import torch

    torch.manual_seed(1)
    with conform.quick_initialisation():
        module = timm.create_model(name, pretrained=False, num_classes=100).eval()
    size = module.default_cfg["input_size"][1:]
    leadsman_export.settle(module, size, seed=1)
    example = leadsman_export.picture_like(1, *size, seed=2)
    folder = pathlib.Path(tempfile.mkdtemp(prefix=f"leadsman-{name}-"))
    try:
        summary = leadsman_export.export(module, example, folder)
        described = conform.run_json(tool, "describe", folder, "--json")
        verified = conform.run_json(tool, "verify", folder, "--json")
    except leadsman_export.ExportError as error:
        return f"| {name} | refused: {error.reason} | | | | |", False
    finally:
        shutil.rmtree(folder)
    departures = sum(row["departs"] for row in verified["layers"])
    return (
        f"| {name} | {summary['parameters']:,} | {described['macs']:,} | {departures} "
        f"| {verified['worst_ratio']:.3f} | {verified['output_relative_l2']:.1e} |"
    ), departures == 0


HEADER = (
    "| model | parameters | MACs | departures | ratio nearest the limit | logits' error |\n"
    "|---|---:|---:|---:|---:|---:|"
)


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--tool", help="the leadsman binary (default: build/release/leadsman)")
    parser.add_argument("--models", help="names by commas (default: one of each family)")
    parser.add_argument("--table", metavar="FILE", help="write the table there, too")
    options = parser.parse_args()
    import timm
    import torch

    lines = [f"timm {timm.__version__}, torch {torch.__version__}.\n", HEADER]
    print("\n".join(lines), flush=True)
    passed = 0
    names = options.models.split(",") if options.models else MODELS
    for name in names:
        line, good = check(conform.tool_path(options.tool), name)
        lines.append(line)
        print(line, flush=True)
        passed += good
    lines.append(f"\n{passed} of {len(names)} agree.")
    print(lines[-1])
    if options.table:
        pathlib.Path(options.table).write_text("\n".join(lines) + "\n", encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main())
