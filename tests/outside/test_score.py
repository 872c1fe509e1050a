"""`asterskein score` against the independent scorer of the trials, where they lie beside the
repository: spoiled truth of a made-up campaign, and a result of our own."""

import os
import subprocess
import sys

import pytest

import score_agrees
from conftest import ROOT

HERE = os.path.dirname(os.path.abspath(__file__))


@pytest.fixture(scope="module")
def trials():
    for place in (ROOT.parent / "shared" / "trials", ROOT / "shared" / "trials"):
        if (place / "score.py").exists():
            return str(place)
    pytest.skip("no trials beside the repository")


@pytest.fixture(scope="module")
def campaign(program, tmp_path_factory):
    out = tmp_path_factory.mktemp("score") / "campaign"
    subprocess.run([program, "mock", "--out", str(out), "--stars", "250", "--seed", "21", "--quiet"], check=True)
    return str(out)


@pytest.mark.parametrize("seed", [1, 2, 3, 4])
def test_spoiled_truth(program, trials, campaign, tmp_path, seed):
    spoil = [sys.executable, os.path.join(HERE, "make_score_case.py"), campaign, str(tmp_path), "--seed", str(seed)]
    subprocess.run(spoil + (["--ecsv"] if seed % 2 else []), check=True)
    _, left, ours, best = score_agrees.compare(program, trials, campaign, str(tmp_path))
    assert ours == best
    assert not left


def test_a_result_of_ours(program, trials, campaign, tmp_path):
    out = str(tmp_path / "run")
    subprocess.run([program, "link", os.path.join(campaign, "campaign.toml"), "--out", out, "--quiet"], check=True)
    _, left, ours, best = score_agrees.compare(program, trials, campaign, out)
    assert ours == best
    assert not left
