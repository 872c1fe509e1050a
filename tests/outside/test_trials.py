"""Made-up fields of an independent kit: how much of the truth does a run recover?

The kit stands beside the repository when the project's own checks run; elsewhere these are
skipped. The limits are those of a baseline linker that takes one star per detection.
"""

import json
import pathlib
import shutil
import subprocess
import sys

import pytest

KIT = pathlib.Path(__file__).resolve().parents[2].parent / "shared" / "trials"
LIMITS = {"quiet": 0.99, "core": 0.86}


@pytest.mark.skipif(not (KIT / "make_field.py").exists(), reason="no trials beside the repository")
@pytest.mark.parametrize("scenario", LIMITS)
def test_identities_are_recovered(program, tmp_path, scenario):
    field, blind, out = tmp_path / "field", tmp_path / "blind", tmp_path / "run"
    make = [sys.executable, str(KIT / "make_field.py"), scenario, "--seed", "5", "--out", str(field)]
    subprocess.run(make, check=True, stdout=subprocess.DEVNULL)
    # The program gets a folder without the truth.
    shutil.copytree(field, blind, ignore=shutil.ignore_patterns("truth"))
    link = [program, "link", str(blind / "campaign.toml"), "--out", str(out), "--quiet"]
    subprocess.run(link, check=True)
    score = [sys.executable, str(KIT / "score.py"), str(field), str(out), "--json"]
    figures = json.loads(subprocess.run(score, check=True, capture_output=True, text=True).stdout)
    found = figures["figures"]["identity_f1"]
    print(f"{scenario}: identity_f1 {found:.4f}")
    assert found >= LIMITS[scenario]
