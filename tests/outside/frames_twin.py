"""Twin of a made-up campaign whose frames are unknown: the same lists in mas, taken there with
the true transformations. What linking loses against the twin is what the frames cost.

usage: frames_twin.py CAMPAIGN_DIR TWIN_DIR

Reads campaign.toml, lists/ and truth/epochs.csv (list = c0 + c1 x + c2 y + c3 x^2 + c4 x y +
c5 y^2, x and y in mas, quadratic terms per arcsec^2); copies truth/ for the scorer.
"""
import csv
import os
import re
import shutil
import sys
import tomllib

import numpy as np


def terms(xy):
    x, y = xy.T
    return np.stack([np.ones_like(x), x, y, x * x / 1e6, x * y / 1e6, y * y / 1e6], 1)


def to_sky(uv, coef):
    """List places to mas by fixed-point steps on the mild quadratic part."""
    back = np.linalg.inv(coef[:, 1:3])
    xy = (uv - coef[:, 0]) @ back.T
    for _ in range(40):
        xy = xy + (uv - terms(xy) @ coef.T) @ back.T
    return xy


def main():
    source, out = sys.argv[1:3]
    with open(os.path.join(source, "campaign.toml"), encoding="utf-8") as handle:
        text = handle.read()
    campaign = tomllib.loads(text)
    with open(os.path.join(source, "truth", "epochs.csv"), encoding="utf-8") as handle:
        truth = list(csv.DictReader(handle))
    os.makedirs(os.path.join(out, "lists"), exist_ok=True)
    for epoch, row in zip(campaign["epoch"], truth):
        coef = np.array([[float(row[f"c{a}{k}"]) for k in range(6)] for a in (0, 1)])
        unit = 1.0 / np.sqrt(abs(np.linalg.det(coef[:, 1:3])))
        with open(os.path.join(source, epoch["file"]), encoding="utf-8") as handle:
            lines = list(csv.DictReader(handle))
        xy = to_sky(np.array([[float(l["x"]), float(l["y"])] for l in lines]), coef)
        for line, (x, y) in zip(lines, xy):
            line["x"], line["y"] = f"{x:.4f}", f"{y:.4f}"
            for name in ("x_err", "y_err"):
                line[name] = f"{float(line[name]) * unit:.4f}"
        with open(os.path.join(out, epoch["file"]), "w", encoding="utf-8", newline="") as handle:
            writer = csv.DictWriter(handle, lines[0].keys())
            writer.writeheader()
            writer.writerows(lines)
    text = re.sub(r'unit = "pixel"', 'unit = "mas"', text)
    text = re.sub(r'frame = "\w+"', 'frame = "known"', text)
    text = re.sub(r"(?m)^(scale_mas|angle_deg|handedness|distortion) = .*\n", "", text)
    with open(os.path.join(out, "campaign.toml"), "w", encoding="utf-8") as handle:
        handle.write(text)
    shutil.copytree(os.path.join(source, "truth"), os.path.join(out, "truth"), dirs_exist_ok=True)


if __name__ == "__main__":
    main()
