"""Ensembles as pytest fixtures: drawn once, kept in pytest's cache, and held against a digest that a test file states.

from procgen.testing import ensemble_fixture

cold_store = ensemble_fixture("specs/cold-store.yaml", paths=50, expect="9f2c…")

def test_the_load_is_positive(cold_store):
    assert cold_store["load_kw"].min() > 0
"""

from __future__ import annotations

import hashlib
import json
import sys
import warnings
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import pytest

    from procgen.ensemble.ensemble import Ensemble
    from procgen.spec.model import Spec

SHORT = 16  # hex digits in the name of a folder


def ensemble_fixture(
    spec: str | Path | Mapping[str, Any] | Spec,
    *,
    expect: str | None = None,
    paths: int | None = None,
    steps: int | None = None,
    seed: int | None = None,
    first_path: int = 0,
    variant: str | None = None,
    reveal: Sequence[str] | str | None = None,
) -> Any:
    """A pytest fixture of session scope that gives the ensemble of a spec, opened from files.

    The fixture has the name that it is bound to, in a test module or a conftest.py. The ensemble is drawn when a test
    first asks for it and kept in pytest's cache, one folder for whatever is drawn alike; later runs hold its values
    against their digests and draw damaged parts again. Workers of pytest-xdist draw it once: one draws, the others
    wait. Without the cache (`-p no:cacheprovider`) it is drawn into pytest's temporary folder. `pytest --cache-clear`
    removes what is kept.

    Parameters
    ----------
    spec : what `procgen.load` takes; a file that is not absolute is looked for beside the
        test file, and then from pytest's rootdir on.
    expect : the digest that the ensemble should have, 64 hex digits. When it has another, tests that ask for it fail
        with the digest of today, and what moved where the old ensemble is still in the cache. None: nothing is held
        against it, and a warning says which digest to write.
    paths, steps, seed, first_path, reveal : as in `procgen.render`.
    variant : name of a variant of the spec.

    Raises ValueError when `expect` is no digest; ModuleNotFoundError without pytest.
    """
    try:
        import pytest
    except ModuleNotFoundError as error:
        raise ModuleNotFoundError("procgen.testing makes fixtures of pytest; pip install pytest") from error

    caller = sys._getframe(1)
    changes = {"paths": paths, "steps": steps, "seed": seed}
    asked = Asked(
        spec,
        _digest(expect),
        {name: value for name, value in changes.items() if value is not None},
        first_path,
        variant,
        reveal,
        (caller.f_code.co_filename, caller.f_lineno),
    )

    def fixture(request: pytest.FixtureRequest) -> Ensemble:
        return asked.give(request)

    fixture.__doc__ = f"The ensemble of {spec if isinstance(spec, str | Path) else 'a spec'}."
    return pytest.fixture(scope="session")(fixture)


def _digest(expect: str | None) -> str | None:
    from procgen.ensemble.expected import HEX

    if expect is not None and not (isinstance(expect, str) and HEX.fullmatch(expect)):
        raise ValueError(f"expected expect to be a digest of 64 hex digits, got {expect!r}; `procgen digest` prints it")
    return None if expect is None else expect.lower()


@dataclass(frozen=True)
class Asked:
    """What one fixture is asked for, and where that is written."""

    spec: Any
    expect: str | None
    changes: Mapping[str, int]
    first_path: int
    variant: str | None
    reveal: Sequence[str] | str | None
    written: tuple[str, int]

    def give(self, request: pytest.FixtureRequest) -> Ensemble:
        """The ensemble, drawn or from the cache; ends the test with a clear failure when it is not the one expected."""
        import pytest

        from procgen.ensemble.errors import EnsembleError
        from procgen.spec.model import SpecError

        store, root = _store(request), request.config.rootpath
        where = f"{request.fixturename} ({_shown(self.written[0], root)}, line {self.written[1]})"
        found, fault = None, None
        try:
            found = self._drawn(store, root)
        except (SpecError, EnsembleError) as error:
            fault = error
        if found is None:  # outside of the handler, so that no traceback stands before the sentence
            pytest.fail(f"{where} cannot be drawn: {fault}", pytrace=False)
        if self.expect is None:
            text = f'{where} has no digest to be held against; write expect="{found.digest}"'
            warnings.warn(pytest.PytestWarning(text), stacklevel=2)
        elif found.digest != self.expect:
            pytest.fail("\n".join([f"{where}: its digest moved", *self._moved(found, store)]), pytrace=False)
        return found

    def _drawn(self, store: Path, root: Path) -> Ensemble:
        import procgen as pg
        from procgen.ensemble.errors import InUse

        given = self.spec
        if isinstance(given, str | Path):
            given = self._file(Path(given), root)
        spec = pg.load(given)
        spec = spec if self.variant is None else spec.variant(self.variant)
        spec = spec.changed(**self.changes)
        folder = store / self._name(spec)
        while True:
            try:
                return pg.render(spec, folder, first_path=self.first_path, reveal=self.reveal, resume=True)
            except InUse:  # by another worker: its lock ends with it, however it ends
                continue

    def _file(self, given: Path, root: Path) -> Path:
        """The file of the spec: looked for beside the test file, and then from pytest's rootdir on."""
        from procgen.spec.model import Fault, Place, SpecError

        folders = list(dict.fromkeys([Path(self.written[0]).absolute().parent, root]))
        found = next((folder / given for folder in folders if (folder / given).exists()), None)
        if found is None:
            tried = " or ".join([str(folder / given) for folder in folders]) if not given.is_absolute() else str(given)
            raise SpecError((Fault(Place(None, 0, 0, ""), f"there is no file {tried}; check the path of the spec"),))
        return found

    def _name(self, spec: Spec) -> str:
        """The name of a folder for whatever is drawn alike: by this spec, and by code that draws the same first path.

        Values that other code drew are thus never taken for those of today.
        """
        import procgen as pg
        from procgen.ensemble.manifest import versions

        first = pg.render(spec, paths=1, first_path=self.first_path, reveal=self.reveal)
        made = [spec.digest(), self.first_path, [column.name for column in first.columns], first.digest, versions()]
        key = hashlib.sha256(json.dumps(made).encode()).hexdigest()[:SHORT]
        return f"{Path(spec.file).stem}-{key}" if spec.file else key

    def _moved(self, found: Ensemble, store: Path) -> Iterator[str]:
        """What is known of a digest that moved, line by line."""
        from procgen.ensemble.expected import departure, expected

        assert self.expect is not None
        old = _kept(store, self.expect)
        yield f"now      {found.digest}"
        if old is None:
            yield f"expected {self.expect}, which is not in {store}"
            yield "to see where they differ: run the test once with the old spec, then with the new one"
        else:
            yield from departure(found, expected(old)).splitlines()
        yield f'to accept the new values: expect="{found.digest}"'


def _store(request: pytest.FixtureRequest) -> Path:
    """The folder of all ensembles: in pytest's cache, or else in the temporary folder that all its workers share."""
    cache = getattr(request.config, "cache", None)
    if cache is not None:
        return cache.mkdir("procgen")
    base = request.getfixturevalue("tmp_path_factory").getbasetemp()
    return (base.parent if hasattr(request.config, "workerinput") else base) / "procgen"


def _kept(store: Path, digest: str) -> Path | None:
    """The folder of the ensemble with a digest, None when there is none."""
    for file in sorted(store.glob("*/manifest.json")):
        try:
            if json.loads(file.read_text(encoding="utf-8"))["digest"] == digest:
                return file.parent
        except (OSError, ValueError, LookupError, TypeError):
            continue  # damaged; the render of its own fixture draws it again
    return None


def _shown(file: str, root: Path) -> str:
    path = Path(file)
    return str(path.relative_to(root)) if path.is_relative_to(root) else file
