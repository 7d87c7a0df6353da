"""Manifests from strangers."""

import json
import shutil

import pytest

from procgen.ensemble.seal import SEAL, seal
from tests.hostile.commands import refused


def changed(good, folder, change):
    """A copy of a good ensemble whose manifest was changed and sealed again."""
    shutil.copytree(good / "out", folder)
    data = json.loads((folder / "manifest.json").read_text(encoding="utf-8"))
    change(data)
    text = json.dumps({**data, SEAL: seal(data)}, ensure_ascii=False)
    (folder / "manifest.json").write_text(text, encoding="utf-8")
    return folder


def huge(data):
    data.update(paths=2**61, steps=2**61)
    data["identity"] |= {"paths": 2**61, "steps": 2**61}
    data["parts"][0] |= {"paths": 2**61, "steps": 2**61}


def long(data):
    data["identity"]["paths"] = data["paths"] = data["parts"][0]["paths"] = 2**40
    data["parts"][0]["file"] = f"paths-000000000-{2**40 - 1}.parquet"


def outside(data):
    data["parts"][0]["file"] = "../../secret.parquet"


def absolute(data):
    data["parts"][0]["file"] = "/etc/passwd"


def column(data):
    data["identity"]["partition"] = "series"
    data["columns"][0]["name"] = "../../flow"


def unit(data):
    data["columns"][0]["unit"] = {"a": 1}


def escape(data):
    data["identity"]["\x1b[2J\u202e"] = data["identity"]["layout"] = "\x1b]0;x\x07"


def reveals(data):
    data["identity"]["reveal"] = [1.5]


def opens(data):
    body = [{"given": {"file": "/etc/passwd", "column": "x", "step": "step"}}]
    data["spec"]["raw"]["series"]["flow"] = body


MANIFESTS = {
    huge: "is not a manifest of procgen, or is damaged: a part is named",
    long: "expected 32985348833280 rows",
    outside: "a part is named '../../secret.parquet', expected",
    absolute: "a part is named '/etc/passwd', expected",
    column: "a column is",
    unit: "a column is",
    escape: "expected layout",
    reveals: "what it reveals is not a list of names",
    opens: "expected the numbers themselves, as render keeps them, got the name of a file",
}


@pytest.mark.parametrize("change", MANIFESTS, ids=lambda change: change.__name__)
def test_manifests(good, tmp_path, change):
    out = changed(good, tmp_path / "out", change)
    if change is long:
        next(out.glob("*.parquet")).rename(out / f"paths-000000000-{2**40 - 1}.parquet")
    code = 1 if change in (long, opens) else 2
    refused(good, "digest", out, says=MANIFESTS[change], code=code)


@pytest.mark.parametrize(
    "text", ["[" * 100_000, '{"procgen": ' + "9" * 5000 + "}", '{"a": [' + "[]," * 1_100_000 + "1]}"]
)
def test_manifests_that_are_no_manifest(good, tmp_path, text):
    shutil.copytree(good / "out", tmp_path / "out")
    (tmp_path / "out" / "manifest.json").write_text(text)
    refused(good, "digest", tmp_path / "out", says="it is damaged, or not ours")


def test_a_manifest_that_never_ends(good, tmp_path):
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "manifest.json").symlink_to("/dev/zero")
    refused(good, "digest", tmp_path / "out", says="is a folder or a device")
    (tmp_path / "out" / "manifest.json").unlink()
    with open(tmp_path / "out" / "manifest.json", "wb") as file:
        file.truncate(10 << 30)
    refused(good, "digest", tmp_path / "out", says="at most 33,554,432 are read")
