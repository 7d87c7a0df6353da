"""What strangers leave in OUT: links to other places, and what looks like a state of a render."""

import shutil

import numpy as np
from typer.testing import CliRunner

import procgen as pg
from procgen.app import app
from tests.hostile.commands import HEAD


def test_links_in_out_are_not_followed_when_writing(good, tmp_path):
    victim = tmp_path / "victim"
    victim.mkdir()
    (victim / "lock").write_text("mine")
    for name in (".state", "tables"):
        shutil.copytree(good / "out", tmp_path / name)
        (tmp_path / name / name).symlink_to(victim)
        draw = "series: {flow: {white_noise: {sd: {draw: {uniform: [1, 2]}, over: path}}}}\n"
        (tmp_path / "b.yaml").write_text(HEAD + draw, encoding="utf-8")
        result = CliRunner().invoke(
            app, ["render", str(tmp_path / "b.yaml"), "-o", str(tmp_path / name), "--overwrite"]
        )
        assert result.exit_code == 2 and "is a link to another place" in result.output
    lock = tmp_path / "lock"
    (lock / ".state").mkdir(parents=True)
    (lock / ".state" / "lock").symlink_to(victim / "lock")
    result = CliRunner().invoke(app, ["render", str(good / "spec.yaml"), "-o", str(lock)])
    assert result.exit_code == 2 and "the system refused making" in result.output
    part = next((good / "out").glob("*.parquet")).name
    (lock / ".state" / "lock").unlink()
    shutil.copy(good / "out" / "manifest.json", victim)
    kept = {path.name: path.read_text() for path in victim.iterdir()}
    for name, of in ((part, "lock"), ("manifest.json", "manifest.json")):
        (lock / name).symlink_to(victim / of)
    result = CliRunner().invoke(app, ["render", str(good / "spec.yaml"), "-o", str(lock), "--overwrite"])
    assert result.exit_code == 0, result.output
    assert pg.check_digest(lock).ok and not (lock / part).is_symlink()
    assert {path.name: path.read_text() for path in victim.iterdir()} == kept and kept["lock"] == "mine"


def test_what_a_render_left_is_not_unpacked(tmp_path):
    from procgen.ensemble.store import Folder

    (tmp_path / ".state").mkdir()
    np.savez_compressed(tmp_path / ".state" / "a.npz", x=np.zeros(1000))
    np.savez(tmp_path / ".state" / "b.npz", x=np.zeros(1000))
    np.savez(tmp_path / ".state" / "c.npz", x=np.array([{}], dtype=object))
    assert [Folder(tmp_path).load_state(name) is None for name in "abc"] == [True, False, True]
