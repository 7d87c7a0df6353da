"""Good files, which the tests of this folder spoil."""

import pytest

import procgen as pg
from tests.studies.hostile import SPEC


@pytest.fixture(scope="module")
def good(tmp_path_factory):
    folder = tmp_path_factory.mktemp("good")
    (folder / "spec.yaml").write_text(SPEC, encoding="utf-8")
    pg.render(folder / "spec.yaml", folder / "out").export(folder / "data.csv")
    return folder
