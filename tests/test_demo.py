"""What the demo shows, at a small size: its spec agrees with its paths, and a copy changed in place is refused."""

from __future__ import annotations

import shutil
import subprocess
import sys
from pathlib import Path

import procgen as pg

ROOT = Path(__file__).parent.parent


def test_a_copy_changed_in_place_is_refused_and_the_place_is_named(tmp_path):
    spec = pg.load(ROOT / "demo" / "island.yaml")
    pg.render(spec, tmp_path / "island", paths=128, steps=1200)
    shutil.copytree(tmp_path / "island", tmp_path / "tampered")
    tamper = [sys.executable, str(ROOT / "demo" / "tamper.py"), str(tmp_path / "tampered"), "water_m3"]
    subprocess.run(tamper, check=True, capture_output=True)
    # False-alarm probability 1e-8 of the suite's 1e-6.
    assert pg.validate(tmp_path / "island", false_alarm=1e-8).agrees is True
    refused = pg.validate(tmp_path / "tampered", false_alarm=1e-8)
    assert refused.agrees is False
    assert "water_m3, path 0, step 1000" in refused.text()
    sizes = [sorted(f.stat().st_size for f in (tmp_path / name).iterdir()) for name in ("island", "tampered")]
    assert sizes[0] == sizes[1]


def test_everything_that_the_demo_shows_is_on_standard_output():
    """The faults of step 4 are messages of a command; here they are part of what is shown, in their place."""
    lines = (ROOT / "demo" / "run.sh").read_text().splitlines()
    shown = [line for line in lines if line.startswith("expect 2 ")]
    assert len(shown) == 1
    command = shown[0].removeprefix("expect 2 ").replace("$procgen", f"{sys.executable} -m procgen")
    done = subprocess.run(["sh", "-c", command], cwd=ROOT, capture_output=True, text=True)
    assert done.returncode == 2 and done.stderr == ""
    assert done.stdout.startswith("procgen: 4 faults in this spec")


def test_the_scripts_are_plain_sh():
    for script in ("demo/run.sh", "tests/run.sh", "tests/venv.sh"):
        subprocess.run(["sh", "-n", str(ROOT / script)], check=True)
        assert (ROOT / script).read_text().startswith("#!/bin/sh\n")
