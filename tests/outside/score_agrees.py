"""Does `asterskein score` give the figures of the external scorer?

usage: score_agrees.py PROGRAM TRIALS_DIR CAMPAIGN RESULT [CAMPAIGN RESULT ...]

TRIALS_DIR holds the independent scorer (`score.py`). Two comparisons, both to 1e-9: as they are,
where figures that hang on a tie of the one-to-one matching may differ (they are counted), and
with the program's own matching handed to the external scorer, where nothing may differ. The
matching must have the same total weight as the external one.
"""
import csv
import importlib
import json
import os
import subprocess
import sys
import tempfile

import numpy as np

TOLERANCE = 1e-9


def leaves(value, place=""):
    """Leaves of a nested result as (place, value)."""
    if isinstance(value, dict):
        for key, inner in value.items():
            yield from leaves(inner, f"{place}.{key}")
    elif isinstance(value, list):
        for k, inner in enumerate(value):
            yield from leaves(inner, f"{place}[{k}]")
    else:
        yield place, value


def same(x, y):
    """Equal, numbers to the tolerance."""
    numbers = all(isinstance(v, (int, float)) for v in (x, y))
    return abs(x - y) <= TOLERANCE * max(1.0, abs(y)) if numbers else x == y


def differences(ours, theirs):
    """Places where two results differ, with both values."""
    a, b = dict(leaves(ours)), dict(leaves(theirs))
    both = [(key, a.get(key, "missing"), b.get(key, "missing")) for key in sorted(a.keys() | b.keys())]
    return [row for row in both if not same(row[1], row[2])]


def compare(program, trials, campaign, result):
    """(differences as they are, differences under our matching, our weight, best weight)."""
    if trials not in sys.path:
        sys.path.insert(0, trials)
    external = importlib.import_module("score")
    plain_matching = external.best_matching
    with tempfile.TemporaryDirectory() as folder:
        pairs = os.path.join(folder, "pairs.csv")
        command = [program, "score", campaign, result, "--json", "--pairs", pairs]
        ours = json.loads(subprocess.run(command, check=True, capture_output=True, text=True).stdout)
        with open(pairs, newline="", encoding="utf-8") as handle:
            chosen = [(row["track"], row["star"]) for row in csv.DictReader(handle)]
    tied = differences(ours, external.score(campaign, result))

    data = external.load(campaign, result)
    track_number = {name: k for k, name in enumerate(data["track_names"])}
    star_number = {str(star): k for k, star in enumerate(data["stars"]["star"])}
    weights = []

    def our_matching(row, col, weight, n_rows, n_cols):
        of_row, of_col = np.full(n_rows, -1), np.full(n_cols, -1)
        for track, star in chosen:
            of_row[track_number[track]] = star_number[star]
            of_col[star_number[star]] = track_number[track]
        best, _ = plain_matching(row, col, weight, n_rows, n_cols)
        weights.extend(int(weight[choice[row] == col].sum()) for choice in (of_row, best))
        return of_row, of_col

    external.best_matching = our_matching
    try:
        left = differences(ours, external.score(campaign, result))
    finally:
        external.best_matching = plain_matching
    return tied, left, *weights


def main():
    program, trials = sys.argv[1:3]
    failed = False
    for campaign, result in zip(sys.argv[3::2], sys.argv[4::2]):
        tied, left, ours, best = compare(program, trials, campaign, result)
        good = not left and ours == best
        failed |= not good
        print(f"{'ok  ' if good else 'FAIL'} {campaign} {result}: matched {ours} of {best}, "
              f"{len(tied)} figures hang on ties")
        for key, x, y in left:
            print(f"     {key}: {x} here, {y} outside")
    sys.exit(failed)


if __name__ == "__main__":
    main()
