"""The study of hostile files, in its quick mode."""

import re
import subprocess
import sys

from tests.studies import hostile


def test_the_study_in_its_quick_mode():
    told = []
    found = hostile.study(lambda inputs: inputs >= 16, 7, 16, told.append)
    assert told == [] and found["inputs"] >= 16


def test_the_study_sees_what_it_looks_for(tmp_path):
    bench = hostile.Bench(tmp_path)
    assert [*bench.run(["terms", "garch"])] == []
    script = (
        "import os, sys\nfrom pathlib import Path\nfrom tests.studies import hostile\n"
        "work = Path(sys.argv[1])\nhostile.watch(work)\n"
        "open(work / 'in', 'w').close(); open(work.parent / 'out', 'w').close(); os.remove(work.parent / 'out')\n"
        "os.mkdir(work / 'a'); os.system('true')\nprint(*hostile.EVENTS, sep='\\n')"
    )
    (tmp_path / "work").mkdir()
    words = [sys.executable, "-c", script, str(tmp_path / "work")]
    said = subprocess.run(words, cwd=hostile.ROOT, capture_output=True, text=True, check=True).stdout
    assert [re.split(r"[ /]", line)[0] for line in said.splitlines()] == ["opens", "os.remove", "os.system"]
