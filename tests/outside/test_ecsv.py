"""astropy opens our ECSV with units, descriptions and masked cells.

Source: astropy's own reader of its format (Aldcroft 2018, astropy proposal for enhancement 6).
"""

import csv
import json

import numpy as np
import pytest
from astropy import units as u
from astropy.io.votable.ucd import check_ucd
from astropy.table import Table

TABLES = ["tracks", "members", "leftovers", "epochs", "tangles", "rivals"]


def plain_rows(path):
    """The file as any CSV reader sees it: comment lines skipped."""
    with open(path, encoding="utf-8", newline="") as f:
        return list(csv.DictReader(line for line in f if not line.startswith("#")))


@pytest.mark.parametrize("name", TABLES)
def test_opens_with_units_and_descriptions(result, name):
    t = Table.read(result / f"{name}.ecsv", format="ascii.ecsv")
    assert t.meta["name"] == name
    for c in t.columns.values():
        assert c.description, f"{name}.{c.name} has no description"
        if c.unit is not None:
            assert not isinstance(c.unit, u.UnrecognizedUnit), (c.name, c.unit)
        ucd = c.meta.get("ucd")
        if ucd:
            assert check_ucd(ucd, check_controlled_vocabulary=True), (c.name, ucd)


@pytest.mark.parametrize("name", TABLES)
def test_values_equal_the_text(result, name):
    t = Table.read(result / f"{name}.ecsv", format="ascii.ecsv")
    rows = plain_rows(result / f"{name}.ecsv")
    assert len(t) == len(rows)
    for column in t.colnames:
        masked = np.ma.getmaskarray(np.ma.asarray(t[column]))
        for k in range(0, len(rows), max(1, len(rows) // 200)):
            text = rows[k][column]
            assert text.lower() not in ("nan", "inf", "-inf")
            if text == "":
                assert masked[k] or t[column][k] == "", (column, k)
            elif t[column].dtype.kind == "f":
                assert float(text) == t[column][k], (column, k)
            elif t[column].dtype.kind == "i":
                assert int(text) == t[column][k], (column, k)


def test_units_are_those_of_the_registry(result):
    t = Table.read(result / "tracks.ecsv", format="ascii.ecsv")
    assert t["x_mas"].unit == u.mas
    assert t["vx_mas_yr"].unit == u.mas / u.yr
    assert t["ax_mas_yr2"].unit == u.mas / u.yr**2
    assert t["cov_x_vx"].unit == u.mas**2 / u.yr
    assert t["mag"].unit == u.mag
    assert t["first_yr"].unit == u.yr


def test_every_detection_stands_somewhere(result):
    members = Table.read(result / "members.ecsv", format="ascii.ecsv")
    leftovers = Table.read(result / "leftovers.ecsv", format="ascii.ecsv")
    epochs = Table.read(result / "epochs.ecsv", format="ascii.ecsv")
    held = {(e, str(i)) for e, i in zip(members["epoch"], members["id"])}
    free = {(e, str(i)) for e, i in zip(leftovers["epoch"], leftovers["id"])}
    assert not held & free
    assert len(held) + len(free) == sum(epochs["n_list"])
    counts = json.loads((result / "run.json").read_text())["counts"]
    assert counts["memberships"] == len(members)
    assert counts["leftovers"] == len(leftovers)
