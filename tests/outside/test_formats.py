"""Every format holds the same values, units and descriptions as the ECSV tables.

Source: astropy's readers of FITS, VOTable and Parquet (the last through pyarrow).
"""

import subprocess

import numpy as np
import pytest
from astropy import units as u
from astropy.io import fits
from astropy.io.votable import parse_single_table
from astropy.table import Table

TABLES = ["tracks", "members", "leftovers", "epochs", "tangles", "rivals"]
SUFFIX = {"fits": "fits", "votable": "vot", "parquet": "parquet"}


@pytest.fixture(scope="session", params=list(SUFFIX))
def formatted(request, program, demo, tmp_path_factory):
    """The demo campaign, linked and written in a further format."""
    out = tmp_path_factory.mktemp(request.param) / "run"
    command = [program, "link", str(demo), "--out", str(out), "--quiet", "--format", request.param]
    subprocess.run(command, check=True)
    return request.param, out


def read(path, kind):
    if kind == "votable":
        return parse_single_table(str(path)).to_table()
    if kind == "parquet":
        return Table.read(path, format="parquet")
    return Table.read(path, format="fits")


@pytest.mark.parametrize("name", TABLES)
def test_values_and_units_equal_the_ecsv(formatted, name):
    kind, out = formatted
    ours = Table.read(out / f"{name}.ecsv", format="ascii.ecsv")
    theirs = read(out / f"{name}.{SUFFIX[kind]}", kind)
    assert theirs.colnames == ours.colnames
    assert len(theirs) == len(ours)
    for c in ours.colnames:
        a, b = ours[c], theirs[c]
        assert (a.unit or u.one) == (b.unit or u.one), c
        if a.dtype.kind in "fi":
            empty = np.ma.getmaskarray(np.ma.asarray(a))
            # Binary formats keep every bit, text the digits that mean something.
            x = np.ma.asarray(a, dtype=float).filled(np.nan)
            y = np.ma.asarray(b, dtype=float).filled(np.nan)
            gone = np.isnan(y)
            assert (gone == (empty | np.isnan(x))).all(), c
            assert np.allclose(x[~gone], y[~gone], rtol=3e-7, atol=6e-5), c
        elif a.dtype.kind == "b":
            keep = ~np.ma.getmaskarray(np.ma.asarray(a))
            assert (np.asarray(a)[keep] == np.asarray(b)[keep]).all(), c
        else:
            text = lambda col: ["" if v is np.ma.masked or v is None else str(v).strip() for v in col]
            assert text(a) == text(b), c


def test_descriptions_and_descriptors_travel(formatted):
    kind, out = formatted
    path = out / f"tracks.{SUFFIX[kind]}"
    ours = Table.read(out / "tracks.ecsv", format="ascii.ecsv")
    if kind == "votable":
        fields = parse_single_table(str(path)).fields
        assert [f.description for f in fields] == [c.description for c in ours.columns.values()]
        assert [f.ucd for f in fields] == [c.meta.get("ucd") for c in ours.columns.values()]
    elif kind == "fits":
        with fits.open(path) as hdus:
            hdus.verify("exception")
            header = hdus[1].header
            for k, c in enumerate(ours.columns.values(), start=1):
                assert header[f"TCOMM{k}"] == c.description
                assert header.get(f"TUCD{k}") == c.meta.get("ucd")
    else:
        theirs = Table.read(path, format="parquet")
        for c in ours.colnames:
            assert theirs[c].description == ours[c].description, c


def test_votable_follows_the_standard(formatted):
    """astropy's own validator finds nothing to warn of."""
    kind, out = formatted
    if kind != "votable":
        pytest.skip("VOTable only")
    from astropy.io.votable.exceptions import VOTableSpecWarning

    import warnings

    with warnings.catch_warnings():
        warnings.simplefilter("error", VOTableSpecWarning)
        for name in TABLES:
            parse_single_table(str(out / f"{name}.vot"), verify="exception")
