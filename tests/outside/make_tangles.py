"""Make small tangles and solve each with HiGHS, as a linear and as a 0/1 program.

Writes one JSON object a line to the file named by the first argument. Needs numpy and scipy.
Stars move straight in a small box; stars closer than about 0.85 fwhm merge; some are missed, some
detections are false. The pool holds the true motions, motions with exchanged tails and
shifted ones. Gains are those of a plain Gaussian model, rounded to 0.001 nats. The second half has
errors so large that much could be otherwise and the linear relaxation is not always whole.
"""

import itertools
import json
import sys

import numpy as np
from scipy.optimize import Bounds, LinearConstraint, linprog, milp
from scipy.sparse import coo_array

FWHM, P_SEEN = 55.0, 0.92
LN_FALSE = np.log(2.0 / 4.0e5)


def make(rng, n_star, n_epoch, box, error, mag_error):
    t = np.sort(rng.uniform(-6.0, 6.0, n_epoch))
    p0 = rng.uniform(-box, box, (n_star, 2))
    v = rng.normal(0.0, 6.0, (n_star, 2))
    mag = rng.uniform(13.0, 16.0, n_star)
    detections = []
    for e in range(n_epoch):
        at = p0 + v * t[e]
        left = set(range(n_star))
        while left:
            group = [left.pop()]
            for k in list(left):
                if any(np.hypot(*(at[k] - at[j])) < 0.85 * FWHM for j in group):
                    group.append(k)
                    left.discard(k)
            if rng.random() < P_SEEN:
                flux = 10 ** (-0.4 * mag[group])
                place = (flux[:, None] * at[group]).sum(0) / flux.sum()
                m = -2.5 * np.log10(flux.sum())
                detections.append((e, *(place + rng.normal(0, error, 2)), m + rng.normal(0, mag_error)))
        for _ in range(rng.poisson(0.4)):
            detections.append((e, *rng.uniform(-box, box, 2), rng.uniform(13.0, 16.0)))
    return t, p0, v, mag, detections


def pool(rng, t, p0, v, mag):
    """Tracks as (position per epoch, magnitude, mark of its family)."""
    tracks = [(p0[k] + np.outer(t, v[k]), mag[k], k) for k in range(len(mag))]
    n = len(mag)
    for a, b in itertools.combinations(range(n), 2):
        if rng.random() < 0.25:
            cut = rng.integers(2, len(t) - 1)
            path = np.vstack([tracks[a][0][:cut], tracks[b][0][cut:]])
            line = np.polyfit(t, path, 1)
            tracks.append((np.outer(t, line[0]) + line[1], 0.5 * (mag[a] + mag[b]), n + len(tracks)))
    for k in range(n):
        if rng.random() < 0.4:
            shift = rng.normal(0.0, 4.0, 2)
            tracks.append((tracks[k][0] + shift, mag[k] + rng.normal(0, 0.2), k))
    return tracks


def program(rng, n_star, n_epoch, box, error, mag_error):
    t, p0, v, mag, detections = make(rng, n_star, n_epoch, box, error, mag_error)
    tracks = pool(rng, t, p0, v, mag)
    ln_miss = np.log(1.0 - P_SEEN)
    base = [round(float(-8.0 + n_epoch * ln_miss), 3) for _ in tracks]
    order = {}
    for k, (_, _, mark) in enumerate(tracks):
        order.setdefault(mark, k)
    family = [order[mark] for _, _, mark in tracks]
    sources = []
    for d, (e, x, y, m) in enumerate(detections):
        near = [k for k, (path, _, _) in enumerate(tracks) if np.hypot(*(path[e] - (x, y))) < 70.0]
        for size in (1, 2, 3):
            for group in itertools.combinations(near, size):
                if len({family[k] for k in group}) < size:
                    continue
                at = np.array([tracks[k][0][e] for k in group])
                far = max([np.hypot(*(a - b)) for a, b in itertools.combinations(at, 2)], default=0.0)
                if far > 1.2 * FWHM:
                    continue
                flux = np.array([10 ** (-0.4 * tracks[k][1]) for k in group])
                place = (flux[:, None] * at).sum(0) / flux.sum()
                var = (error + 1.5) ** 2 + (0.05 * far) ** 2
                gain = -((x - place[0]) ** 2 + (y - place[1]) ** 2) / (2 * var) - np.log(2 * np.pi * var)
                dm = m + 2.5 * np.log10(flux.sum())
                mag_var = mag_error**2 + 0.1**2
                gain += -dm * dm / (2 * mag_var) - 0.5 * np.log(2 * np.pi * mag_var)
                gain += np.log(P_SEEN) - LN_FALSE - size * ln_miss
                if size > 1:
                    gain += np.log(0.5)
                if gain > 0.0:
                    sources.append([e, d, list(group), round(float(gain), 3)])
    return {"base": base, "family": family, "sources": sources}


def solve(p):
    n_track = len(p["base"])
    n = n_track + len(p["sources"])
    cost = -np.array(p["base"] + [s[3] for s in p["sources"]])
    rows, upper = [], []
    by_detection, by_cell, by_family = {}, {}, {}
    for j, (e, d, group, _) in enumerate(p["sources"]):
        by_detection.setdefault(d, []).append(n_track + j)
        for k in group:
            by_cell.setdefault((k, e), []).append(n_track + j)
    for k, f in enumerate(p["family"]):
        by_family.setdefault(f, []).append(k)
    for columns in [*by_detection.values(), *by_family.values()]:
        rows.append([(c, 1.0) for c in columns])
        upper.append(1.0)
    for (k, _), columns in by_cell.items():
        rows.append([(c, 1.0) for c in columns] + [(k, -1.0)])
        upper.append(0.0)
    flat = [(i, c, w) for i, row in enumerate(rows) for c, w in row]
    i, c, w = zip(*flat)
    matrix = coo_array((w, (i, c)), shape=(len(rows), n)).tocsr()
    lp = linprog(cost, A_ub=matrix, b_ub=upper, bounds=(0, 1), method="highs")
    ip = milp(cost, constraints=LinearConstraint(matrix, -np.inf, upper), integrality=np.ones(n),
              bounds=Bounds(0, 1), options={"mip_rel_gap": 0.0})
    assert lp.success and ip.success
    return -lp.fun, -ip.fun


def main(path):
    rng = np.random.default_rng(20240607)
    with open(path, "w", encoding="ascii") as out:
        for number in range(50):
            n_star = int(rng.integers(2, 9))
            n_epoch = int(rng.integers(5, 10))
            box = float(rng.uniform(25.0, 32.0) * np.sqrt(n_star) + 10.0)
            error, mag_error = (2.0, 0.15) if number < 25 else (8.0, 0.5)
            p = program(rng, n_star, n_epoch, box, error, mag_error)
            while len(p["sources"]) > 800:
                p = program(rng, n_star, n_epoch, box, error, mag_error)
            lp, ip = solve(p)
            p = {"name": f"tangle-{number + 1:02}", **p, "lp": round(lp, 6), "optimum": round(ip, 6)}
            out.write(json.dumps(p, separators=(",", ":")) + "\n")


if __name__ == "__main__":
    main(sys.argv[1])
