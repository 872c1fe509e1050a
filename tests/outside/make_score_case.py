"""Spoil the truth of a campaign into a result with every kind of mistake, for tests of `score`.

usage: make_score_case.py CAMPAIGN_DIR RESULT_DIR --seed N [--ecsv]

Tracks are the true stars, then: tails swapped between two stars, tracks cut in two, members
lost, members of other stars picked up, false detections strung together, merged detections
given to one star only or to strangers, rows repeated, rows that name no detection, tracks of one
member, missing probabilities and shares. Positions and velocities get Gaussian errors.
"""
import argparse
import csv
import os
import random


def read(path):
    with open(path, newline="", encoding="utf-8") as handle:
        return list(csv.DictReader(handle))


def spoil(rng, members, stars):
    """Rows of (track, epoch, id, share) and the star each track began as."""
    by_star, false = {}, []
    for row in members:
        key = (int(row["epoch"]), row["id"])
        if row["star"] == "":
            false.append(key)
        elif float(row["share"]) > 0.03:
            by_star.setdefault(row["star"], []).append((*key, float(row["share"])))
    tracks = {f"T{star:>04}": (star, sorted(rows)) for star, rows in by_star.items()}
    names = sorted(tracks)
    for _ in range(len(names) // 8):                      # tails swapped
        a, b = rng.sample(names, 2)
        when = rng.choice(tracks[a][1])[0]
        head = lambda n: [r for r in tracks[n][1] if r[0] < when]
        tail = lambda n: [r for r in tracks[n][1] if r[0] >= when]
        tracks[a], tracks[b] = (tracks[a][0], head(a) + tail(b)), (tracks[b][0], head(b) + tail(a))
    for name in rng.sample(names, len(names) // 10):      # cut in two
        star, rows = tracks[name]
        cut = len(rows) // 2
        tracks[name] = (star, rows[:cut])
        tracks[name + "b"] = (star, rows[cut:])
    pool = [(int(r["epoch"]), r["id"], float(r["share"])) for r in members if r["star"] != ""]
    for name in sorted(tracks):                           # lost and picked up
        star, rows = tracks[name]
        rows = [r for r in rows if rng.random() > 0.06]
        while rng.random() < 0.3:
            rows.append(rng.choice(pool))
        tracks[name] = (star, rows)
    for k in range(len(names) // 12):                     # false detections strung together
        tracks[f"F{k:03d}"] = (None, [(*key, 1.0) for key in rng.sample(false, min(4, len(false)))])
    return tracks


def member_rows(rng, tracks):
    rows = []
    for name in sorted(tracks):
        for epoch, ident, share in tracks[name][1]:
            p = min(1.0, max(0.0, rng.betavariate(8, 1)))
            rows.append([name, epoch, ident,
                         "" if rng.random() < 0.02 else f"{p:.4f}",
                         "" if rng.random() < 0.03 else f"{share:.4f}",
                         rng.choice(["", "", "", "merged", "merged;ambiguous", "ambiguous"])])
    rows += rng.sample(rows, len(rows) // 60)             # repeated
    rows += [["T0001", 0, "999999", "0.9", "1", ""], ["T0002", 77, "1", "0.9", "1", ""]]
    rows.append(["lone", *rows[0][1:]])
    rng.shuffle(rows)
    return rows


def track_rows(rng, tracks, stars):
    rows = []
    for name in sorted(tracks):
        star = stars.get(tracks[name][0])
        row = [name]
        for column, size in (("x_mas", 1.0), ("y_mas", 1.0), ("vx_mas_yr", 0.1), ("vy_mas_yr", 0.1)):
            if star is None or rng.random() < 0.01:
                row += ["", ""]
            else:
                err = size * rng.uniform(0.5, 2.0)
                row += [repr(float(star[column]) + rng.gauss(0.0, 1.2 * err) + 0.3 * size), repr(err)]
        rows.append(row)
    rng.shuffle(rows)
    return rows


def write(path, names, rows, ecsv):
    with open(path, "w", newline="", encoding="utf-8") as handle:
        if ecsv:
            handle.write("# %ECSV 1.0\n# ---\n# delimiter: ','\n# datatype:\n")
            for name in names:
                handle.write(f"# - {{name: {name}, datatype: string}}\n")
        out = csv.writer(handle, lineterminator="\n")
        out.writerow(names)
        out.writerows(rows)


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("campaign")
    parser.add_argument("result")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--ecsv", action="store_true")
    args = parser.parse_args()
    rng = random.Random(args.seed)
    truth = os.path.join(args.campaign, "truth")
    stars = {row["star"]: row for row in read(os.path.join(truth, "stars.csv"))}
    tracks = spoil(rng, read(os.path.join(truth, "members.csv")), stars)
    os.makedirs(args.result, exist_ok=True)
    ending = ".ecsv" if args.ecsv else ".csv"
    write(os.path.join(args.result, "members" + ending),
          ["track", "epoch", "id", "probability", "share", "flags"], member_rows(rng, tracks), args.ecsv)
    write(os.path.join(args.result, "tracks" + ending),
          ["track", "x_mas", "x_err_mas", "y_mas", "y_err_mas",
           "vx_mas_yr", "vx_err_mas_yr", "vy_mas_yr", "vy_err_mas_yr"],
          track_rows(rng, tracks, stars), args.ecsv)


if __name__ == "__main__":
    main()
