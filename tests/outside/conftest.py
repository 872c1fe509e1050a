"""What the outside checks share: the program, the demo campaign and one result of it."""

import os
import pathlib
import subprocess

import pytest

ROOT = pathlib.Path(__file__).resolve().parents[2]


@pytest.fixture(scope="session")
def program():
    """Path of the built program (set ASTERSKEIN, or build the release profile)."""
    path = os.environ.get("ASTERSKEIN", str(ROOT / "target" / "release" / "asterskein"))
    if not os.path.exists(path):
        pytest.fail(f"{path} does not exist; run `cargo build --release` first")
    return path


@pytest.fixture(scope="session")
def demo():
    path = ROOT / "demo-data" / "campaign.toml"
    if not path.exists():
        pytest.skip("no demo-data/campaign.toml")
    return path


@pytest.fixture(scope="session")
def result(program, demo, tmp_path_factory):
    """The demo campaign, linked."""
    out = tmp_path_factory.mktemp("result") / "run"
    subprocess.run([program, "link", str(demo), "--out", str(out), "--quiet"], check=True)
    return out
