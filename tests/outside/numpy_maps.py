"""Records least-squares maps made with numpy, for tests/frames/maps.rs.

usage: numpy_maps.py > numpy_maps.csv

Places are exact under a quadratic map; the affine case is fitted to places made with its own
affine map, so that every weight of a robust fit is the same and the answers must agree.
"""
import numpy as np

rng = np.random.default_rng(5)
n = 24
u, v = rng.uniform(-1400, 1400, (2, n)).round(3)
err = rng.uniform(0.5, 3.0, n).round(3)
s, t = u / 1000, v / 1000
full = np.stack([np.ones(n), s, t, s * s, s * t, t * t], 1)
truth = np.array([[120.0, 830.0, -560.0, 0, 0, 0], [-75.0, 555.0, 835.0, 0, 0, 0]])
place = full @ truth.T
print("# stars: u_mas, v_mas, x_mas, y_mas, error_mas; then x and y coefficients per freedom, chart unit 1000 mas")
for k in range(n):
    print("star", u[k], v[k], *(repr(float(z)) for z in place[k]), err[k], sep=",")
for name, terms in (("affine", 3), ("quadratic", 6)):
    design = full[:, :terms] / err[:, None]
    x = np.linalg.lstsq(design, place[:, 0] / err, rcond=None)[0]
    y = np.linalg.lstsq(design, place[:, 1] / err, rcond=None)[0]
    print(name, *(repr(float(z)) for z in np.concatenate([x, y])), sep=",")
