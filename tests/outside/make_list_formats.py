"""Write one small detection list in every format with astropy: python make_list_formats.py DIR.

The same seven rows everywhere: coordinates in arcsec, errors in mas, a masked magnitude, texts as
identifiers. `list.csv` holds them with all units as the campaign states them (mas).
"""

import pathlib
import sys

import numpy as np
from astropy import units as u
from astropy.table import MaskedColumn, Table

X_ARCSEC = [0.125, -0.25, 1.5, -1.75, 0.5, 0.0625, -0.03125]
Y_ARCSEC = [1.0, 0.5, -0.75, 0.25, -1.5, 2.0, -2.25]
ERR_MAS = [1.5, 2.25, 0.5, 0.75, 3.0, 1.25, 2.5]
MAG = [14.5, 15.25, 12.0, None, 13.75, 14.0, 16.5]
IDS = [f"s{k}" for k in (3, 1, 4, 15, 9, 2, 6)]
RV_M_S = [12500.0, None, -250.0, None, None, 0.0, 75000.0]


def masked(values, **more):
    data = np.array([0.0 if v is None else v for v in values])
    return MaskedColumn(data, mask=[v is None for v in values], **more)


def table():
    t = Table()
    t["id"] = IDS
    t["x"] = np.array(X_ARCSEC) * u.arcsec
    t["y"] = np.array(Y_ARCSEC) * u.arcsec
    t["x_err"] = np.array(ERR_MAS) * u.mas
    t["y_err"] = np.array(ERR_MAS) * u.mas
    t["mag"] = masked(MAG, unit=u.mag)
    t["mag_err"] = masked([None if m is None else 0.125 for m in MAG], unit=u.mag)
    t["rv_km_s"] = masked(RV_M_S, unit=u.m / u.s)
    t["rv_err_km_s"] = masked([None if v is None else 500.0 for v in RV_M_S], unit=u.m / u.s)
    t["x"].description = "offset toward east"
    return Table(t)


def plain_csv(path):
    cell = lambda v: "" if v is None else repr(v)
    lines = ["id,x,y,x_err,y_err,mag,mag_err,rv_km_s,rv_err_km_s"]
    for row in zip(IDS, X_ARCSEC, Y_ARCSEC, ERR_MAS, MAG, RV_M_S):
        name, x, y, err, mag, rv = row
        kms = None if rv is None else rv / 1000
        cells = [1000 * x, 1000 * y, err, err, mag, None if mag is None else 0.125]
        cells += [kms, None if rv is None else 0.5]
        lines.append(",".join([name, *map(cell, cells)]))
    path.write_text("\n".join(lines) + "\n")


def main(folder):
    folder = pathlib.Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    plain_csv(folder / "list.csv")
    t = table()
    t.write(folder / "list.ecsv", overwrite=True)
    t.write(folder / "comma.ecsv", delimiter=",", overwrite=True)
    t.write(folder / "list.fits", overwrite=True)
    for layout in ("tabledata", "binary", "binary2"):
        t.write(folder / f"{layout}.vot", format="votable", tabledata_format=layout, overwrite=True)
    t.write(folder / "list.parquet", overwrite=True)


if __name__ == "__main__":
    main(sys.argv[1])
