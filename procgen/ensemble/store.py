"""OUT, the folder of an ensemble: parts that appear whole, the manifest last, and a lock while one is made.

`OUT/.state/` exists only while a render is under way: temporary files, the plan, the states from which
chains go on, and the lock.
"""

from __future__ import annotations

import contextlib
import json
import os
import re
import secrets
import tempfile
import time
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from procgen.ensemble.errors import Damaged, EnsembleError, InUse, system_sentence
from procgen.ensemble.places import ONE_SLASH, Place, Remote, is_url, place_of, readable

MANIFEST = "manifest.json"
PLAN = ".state/plan.json"
TABLES = (".parquet", ".pq")
PART = re.compile(r"(.+\.)?paths-\d{9,}-\d{9,}(\.steps-\d{9,}-\d{9,})?\.parquet")
MOST_JSON = 32 << 20  # bytes: manifests of 20,000 parts, or of the longest specs, have 8 MB
MOST_INSIDE = 1_000_000  # lists and objects in it
PATIENCE = 3.0  # seconds: workers whose parent was killed are gone by then


def folder_path(value: Any, name: str) -> Place:
    """The place of a folder, by path or URL; TypeError for what is neither, EnsembleError for an empty one."""
    if isinstance(value, Remote):
        return value
    if not isinstance(value, str | os.PathLike):
        raise TypeError(f"expected {name} to be the path of a folder, got {type(value).__name__}")
    if not os.fspath(value):
        raise EnsembleError(f"expected {name} to be the path of a folder, got an empty text; give one, such as build/a")
    return place_of(value)


def named_path(value: Any) -> Path:
    """The path of a file to write; TypeError for what is no path, EnsembleError for an empty one."""
    if not isinstance(value, str | os.PathLike):
        raise TypeError(f"expected path to be the path of a file, got {type(value).__name__}")
    if not os.fspath(value):
        raise EnsembleError("expected path to be the path of a file, got an empty text; give one, such as values.csv")
    if is_url(os.fspath(value)) or ONE_SLASH.match(os.fspath(value)):
        raise EnsembleError(f"expected the path of a file on this machine, where exports are written, got {value}")
    return Path(value)


class Folder:
    """The files of one ensemble; errors of the operating system become sentences."""

    def __init__(self, path: Place):
        self.path = path
        self.state = path / ".state"
        self.begun = False  # whether the plan that is there is the one of this render

    @contextlib.contextmanager
    def writing(self, name: str) -> Iterator[Path]:
        """A temporary path that becomes OUT/name when the block ends well, and nothing otherwise."""
        # a token, since processes of several machines may have one number, and one part be drawn twice at once
        token = f"{Path(name).name}.{os.getpid()}-{secrets.token_hex(4)}.tmp"
        temporary = Path(tempfile.gettempdir()) / token if isinstance(self.state, Remote) else self.state / token
        try:
            yield temporary
            place = self.path / name
            if isinstance(place, Remote):
                place.put(temporary, self._remote(token))
            else:
                os.replace(temporary, place)
        except OSError as error:
            raise EnsembleError(system_sentence(error, f"writing {self.path / name}")) from None
        finally:
            with contextlib.suppress(OSError):
                temporary.unlink(missing_ok=True)

    def _remote(self, token: str) -> Remote:
        """Where a store holds a file that is being brought to it."""
        place = self.state / token
        assert isinstance(place, Remote)
        return place

    def write_json(self, name: str, data: Mapping[str, Any]) -> None:
        with self.writing(name) as temporary:
            text = json.dumps(data, indent=1, ensure_ascii=False, allow_nan=False) + "\n"
            temporary.write_text(text, encoding="utf-8")

    def read_json(self, name: str) -> dict[str, Any] | None:
        """A JSON object, or None when there is no such file; EnsembleError when it is anything else."""
        path = self.path / name
        try:
            self._refuse_large(path)
            text = path.read_text(encoding="utf-8")
            if text.count("[") + text.count("{") > MOST_INSIDE:
                raise Damaged(f"{path} has more than {MOST_INSIDE:,} lists and objects; it is damaged, or not ours")
            data = json.loads(text)
        except EnsembleError:
            raise
        except FileNotFoundError:
            return None
        except NotADirectoryError:
            raise EnsembleError(f"{self.path} is not a folder; choose another OUT") from None
        except OSError as error:
            raise EnsembleError(system_sentence(error, f"reading {path}")) from None
        except (ValueError, RecursionError) as error:
            raise Damaged(f"{path} is not JSON ({error}); it is damaged, or not ours") from None
        if not isinstance(data, dict):
            raise Damaged(f"{path} holds {type(data).__name__}, expected a JSON object")
        return data

    def _refuse_large(self, path: Place) -> None:
        """EnsembleError for what is not a file, or larger than any that is written here."""
        if isinstance(path, Path) and path.exists() and not path.is_file():
            raise EnsembleError(f"{path} is a folder or a device, expected a JSON file; choose another OUT")
        if (size := path.stat().st_size) > MOST_JSON:
            raise Damaged(f"{path} has {size:,} bytes, at most {MOST_JSON:,} are read; it is damaged, or not ours")

    def refuse_file(self) -> None:
        """EnsembleError when a file was given where an ensemble is to be read."""
        if isinstance(self.path, Path) and self.path.is_file():
            raise EnsembleError(
                f"{self.path} is a file; expected the folder of an ensemble, as procgen render SPEC -o OUT makes one"
            )

    def size(self, name: str) -> int:
        """Bytes of a file, -1 when it is not there."""
        try:
            return (self.path / name).stat().st_size
        except OSError:
            return -1

    def sizes(self, names: Sequence[str]) -> int:
        """Bytes of several files, -1 when one of them is not there."""
        found = [self.size(name) for name in names]
        return -1 if -1 in found else sum(found)

    def save_state(self, name: str, state: Mapping[str, np.ndarray]) -> None:
        """Keep the carried state at the end of part `name`."""
        with self.writing(f".state/{name}.npz") as temporary, open(temporary, "wb") as file:
            np.savez(file, **state)  # type: ignore[arg-type]

    def load_state(self, name: str) -> dict[str, np.ndarray] | None:
        """The state at the end of part `name`, or None when it is not there or damaged."""
        try:
            with np.load(readable(self.state / f"{name}.npz"), allow_pickle=False) as data:
                if any(item.compress_type for item in data.zip.infolist()):  # ours are not, and could not grow
                    return None
                return dict(data)
        except Exception:  # a damaged archive shows in many ways; all of them mean: draw again
            return None

    def drop_state(self, name: str) -> None:
        with contextlib.suppress(OSError):
            (self.state / f"{name}.npz").unlink(missing_ok=True)

    def part_files(self) -> list[str]:
        """Names in OUT that have the form of a part's name."""
        return sorted(entry.name for entry in self._entries() if PART.fullmatch(entry.name))

    def tables(self) -> list[str]:
        """Names of the files in OUT that readers of a whole folder take for Parquet, whoever wrote them."""
        found = [entry for entry in self._entries() if entry.suffix.lower() in TABLES and entry.is_file()]
        return sorted(entry.name for entry in found)

    def _entries(self) -> list[Any]:
        """What OUT holds, nothing when it is not there."""
        try:
            return [*self.path.iterdir()]
        except FileNotFoundError:
            return []
        except OSError as error:
            raise EnsembleError(system_sentence(error, f"looking through {self.path}")) from None

    def remove(self, names: list[str]) -> None:
        """Remove files of OUT, the manifest first, so that nothing that is left looks whole."""
        for name in sorted(names, key=lambda name: name != MANIFEST):
            try:
                (self.path / name).unlink(missing_ok=True)
            except OSError as error:
                raise EnsembleError(system_sentence(error, f"removing {self.path / name}")) from None

    def clean_state(self, keep_plan: bool) -> None:
        """Remove what earlier renders left in .state: all but the lock and, when asked, plan and states."""
        entry = self.state
        try:
            for entry in self.state.iterdir():
                if entry.suffix == ".tmp" or (entry.suffix in (".json", ".npz") and not keep_plan):
                    entry.unlink(missing_ok=True)
        except OSError as error:
            raise EnsembleError(system_sentence(error, f"removing {entry}")) from None

    @contextlib.contextmanager
    def locked(self, patience: float = PATIENCE) -> Iterator[int | None]:
        """Hold OUT for this process and the workers that inherit the lock's file descriptor.

        The operating system drops the lock when the last of them ends, however it ends. Without `fcntl`
        (Windows) nothing is locked. At the end .state is removed, unless it holds a plan to go on with; after a
        failure that left nothing whole there is nothing to go on with, and folders that were made are removed.
        A store behind a URL has no locks: two renders of one spec into it write the same files, and others are refused.
        """
        if isinstance(self.path, Remote):
            try:
                yield None
            finally:
                with contextlib.suppress(OSError):
                    if not (self.path / PLAN).exists():
                        self.state.rmdir()
            return
        assert isinstance(self.state, Path)
        try:
            made = [folder for folder in (self.path, *self.path.parents) if not folder.exists()]
            if self.state.is_symlink():
                raise EnsembleError(f"{self.state} is a link to another place; remove it, or choose another OUT")
            descriptor = self._lock(time.monotonic() + patience)
        except (NotADirectoryError, FileExistsError) as error:
            above = (*reversed(self.path.parents), self.path)
            wrong = next((place for place in above if place.exists() and not place.is_dir()), error.filename)
            raise EnsembleError(f"{wrong} is not a folder; choose another OUT") from None
        except OSError as error:
            raise EnsembleError(system_sentence(error, f"making {self.path}")) from None
        failed, others = True, (self.path / PLAN).exists()
        try:
            yield descriptor
            failed = False
        finally:
            ours = self.begun or not others
            with contextlib.suppress(OSError, EnsembleError):
                empty = failed and ours and not self.part_files() and self.size(MANIFEST) < 0
                if empty:
                    self.clean_state(keep_plan=False)
                if not (self.path / PLAN).exists():
                    (self.state / "lock").unlink()
                    self.state.rmdir()
                for folder in made if empty else ():
                    folder.rmdir()
            os.close(descriptor)

    def _lock(self, give_up: float) -> int:
        assert isinstance(self.state, Path)
        path = self.state / "lock"
        while True:
            self.state.mkdir(parents=True, exist_ok=True)
            try:
                descriptor = os.open(path, os.O_RDWR | os.O_CREAT | getattr(os, "O_NOFOLLOW", 0), 0o666)
            except FileNotFoundError:
                continue  # the previous holder removed the folder in between
            if _try_lock(descriptor):
                # the previous holder may have removed the file while this process waited for it
                if _same_file(descriptor, path):
                    return _signed(descriptor)
            elif time.monotonic() > give_up:
                holder = os.pread(descriptor, 20, 0).decode("ascii", "replace")
                os.close(descriptor)
                raise InUse(
                    f"another render is at work in {self.path} (process {holder}); wait for it, or choose another OUT"
                )
            os.close(descriptor)
            time.sleep(0.02)

    def tidy(self) -> None:
        """Remove the .state of a render that was killed between its manifest and its end."""
        if self.state.exists():
            with contextlib.suppress(EnsembleError), self.locked(patience=0):
                self.clean_state(keep_plan=False)


def _try_lock(descriptor: int) -> bool:
    try:
        import fcntl
    except ImportError:
        return True
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    return True


def _signed(descriptor: int) -> int:
    """A lock that says whose it is; let go where it cannot."""
    try:
        os.ftruncate(descriptor, 0)
        os.pwrite(descriptor, str(os.getpid()).encode(), 0)
    except OSError:
        os.close(descriptor)
        raise
    return descriptor


def _same_file(descriptor: int, path: Path) -> bool:
    try:
        return os.path.samestat(os.fstat(descriptor), os.stat(path))
    except FileNotFoundError:
        return False
