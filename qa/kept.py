"""What earlier audits computed, kept in a folder that the user can see, so that unchanged lines are not computed again.

A record is one small file and the bigger ones that belong to it, under a name that says all that the result depends
on. The small file is written last and holds the others' hashes: what was cut short or damaged is as if it were not
there. Nothing here is needed: the folder may be emptied at any time.
"""

from __future__ import annotations

import contextlib
import hashlib
import io
import json
import os
import pickle
import shutil
import tempfile
import time
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from qa.fingerprints import fingerprint
from qa.model.errors import OutputError

VARIABLE = "PINGWORTHY_KEPT"
"""Environment variable that names the folder."""
BUDGET = 2_000_000_000
"""Bytes above which the records used longest ago go."""
SETTLED = 2_000_000_000
"""A file changed less than so many nanoseconds ago may change again within one step of its clock (FAT: 2 s)."""
_TAG = "CACHEDIR.TAG"
_TAG_TEXT = "Signature: 8a477f597d28d172789f06886806bc55\n# Kept by pingworthy; may be emptied at any time.\n"
_HEAD = b"pingworthy kept 1\n"
_RECORD, _SEEN, _UNFINISHED = ".record", ".seen", ".part"
_OLD = 3600.0
_PLAIN = {
    ("fractions", "Fraction"),
    *(("builtins", name) for name in ("set", "frozenset", "slice", "complex")),
}
_NUMPY = {"_reconstruct", "_frombuffer", "ndarray", "dtype", "scalar"}


def kept_folder(named: Path | None = None) -> Path:
    """The folder: the one named, else that of the environment variable, else in the user's folder for caches."""
    if named is not None:
        return named
    if os.environ.get(VARIABLE):
        return Path(os.environ[VARIABLE])
    from platformdirs import user_cache_path

    return user_cache_path("pingworthy", appauthor=False)


@dataclass(frozen=True, slots=True)
class Content:
    """What a file held when it was looked at."""

    sha256: str
    bytes: int
    changed: int

    def still(self, path: Path) -> bool:
        """Whether size and time of change are the same now."""
        try:
            now = path.stat()
        except OSError:
            return False
        return (now.st_size, now.st_mtime_ns) == (self.bytes, self.changed)

    def settled(self, path: Path) -> bool:
        """Whether they are the same now and will tell this content from any other, within a file system's clock."""
        return self.still(path) and time.time_ns() - self.changed > SETTLED


@dataclass(slots=True)
class Kept:
    """A folder of records.

    Parameters
    ----------
    folder : Path
        Where to; made when the first record is written.
    budget : int
        Bytes that records may take; :meth:`trim` holds to it.
    rehash : bool
        Whether every file is read again to know its content, whatever its size and time of change.
    taken, added : int
        Records used and written since this was made.
    trouble : str
        Why records cannot be written, if they cannot.
    """

    folder: Path
    budget: int = BUDGET
    rehash: bool = False
    taken: int = 0
    added: int = 0
    trouble: str = ""

    def content(self, path: Path) -> Content:
        """A file's content: known from earlier if neither its size nor its time of change differ, else read.

        Raises
        ------
        OSError
            If the file cannot be read.
        """
        path = path.resolve()
        seen = self.folder / (fingerprint(str(path)) + _SEEN)
        now = path.stat()
        if not self.rehash:
            with contextlib.suppress(OSError, ValueError, TypeError):
                known = Content(**json.loads(seen.read_text(encoding="utf-8")))
                if (known.bytes, known.changed) == (now.st_size, now.st_mtime_ns):
                    return known
        with path.open("rb") as stream:
            sha = hashlib.file_digest(stream, "sha256").hexdigest()
        found = Content(sha, now.st_size, now.st_mtime_ns)
        if found.settled(path):
            text = json.dumps(
                {"sha256": sha, "bytes": found.bytes, "changed": found.changed}
            ).encode()
            with self._writing():
                self._write(seen, text)
        return found

    def get(self, key: str, into: Path | None = None) -> Any:
        """A line's record, or None; files that belong to it are put into a folder under their own names."""
        found = self.look(key, into)
        self.taken += found is not None
        return found

    def look(self, key: str, into: Path | None = None) -> Any:
        """As :meth:`get`, for a record that is not of a line and does not count as one."""
        try:
            raw = (self.folder / (key + _RECORD)).read_bytes()
            head, digest, content = raw.split(b"\n", 2)
            if head + b"\n" != _HEAD or hashlib.sha256(content).hexdigest().encode() != digest:
                return None
            value, files = _Reader(io.BytesIO(content)).load()
            for name, sha in files.items():
                if into is None:
                    return None
                _linked(self._beside(key, name), into / name)
                with (into / name).open("rb") as stream:
                    if hashlib.file_digest(stream, "sha256").hexdigest() != sha:
                        (into / name).unlink()
                        return None
            for file in (key + _RECORD, *(self._beside(key, n).name for n in files)):
                os.utime(self.folder / file)
        except (OSError, ValueError, TypeError, AttributeError, ImportError, EOFError, IndexError):
            return None
        except (KeyError, pickle.UnpicklingError):
            return None
        return value

    def put(self, key: str, value: Any, files: Mapping[str, Path] | None = None) -> None:
        """Write a line's record, and files that shall not be changed afterwards, by the names to find them under."""
        if self.store(key, value, files):
            self.added += 1

    def store(self, key: str, value: Any, files: Mapping[str, Path] | None = None) -> bool:
        """As :meth:`put`, for a record that is not of a line; tells whether it was written."""
        if self.trouble:
            return False
        with self._writing():
            hashes = {}
            for name, path in (files or {}).items():
                with path.open("rb") as stream:
                    hashes[name] = hashlib.file_digest(stream, "sha256").hexdigest()
                part = self._part()
                part.unlink()
                _linked(path, part)
                part.replace(self._beside(key, name))
            content = pickle.dumps((value, hashes), protocol=5)
            digest = hashlib.sha256(content).hexdigest().encode()
            self._write(self.folder / (key + _RECORD), _HEAD + digest + b"\n" + content)
            return True
        return False

    def size(self) -> tuple[int, int]:
        """Lines' records, and bytes of all files. A record that is not of a line has a word and a hyphen before its key."""
        found = self._files()
        lines = sum(p.suffix == _RECORD and "-" not in p.name for p, _, _ in found)
        return lines, sum(size for _, size, _ in found)

    def clear(self) -> int:
        """Remove every record, and nothing that is not of this program; returns the bytes freed."""
        return sum(_removed(path, size) for path, size, _ in self._files())

    def trim(self) -> int:
        """Hold to the budget: the records used longest ago go; returns the bytes freed."""
        found = self._files()
        freed = sum(
            _removed(path, size)
            for path, size, used in found
            if path.suffix == _UNFINISHED and used < time.time() - _OLD
        )
        records: dict[str, list[tuple[Path, int, float]]] = {}
        for path, size, used in found:
            if path.suffix != _UNFINISHED:
                records.setdefault(path.name.split(".")[0], []).append((path, size, used))
        total = sum(size for files in records.values() for _, size, _ in files)
        for files in sorted(records.values(), key=lambda files: max(used for _, _, used in files)):
            if total <= self.budget:
                break
            # The record goes before what belongs to it.
            for path, size, _ in sorted(files, key=lambda file: file[0].suffix != _RECORD):
                total -= size
                freed += _removed(path, size)
        return freed

    def _beside(self, key: str, name: str) -> Path:
        return self.folder / f"{key}.{name}.kept"

    def _files(self) -> list[tuple[Path, int, float]]:
        """This program's files with their sizes and times of last use."""
        found = []
        if not (self.folder / _TAG).is_file():
            return []
        with contextlib.suppress(OSError), os.scandir(self.folder) as entries:
            for entry in entries:
                path = Path(entry.path)
                if path.suffix in (_RECORD, _SEEN, _UNFINISHED, ".kept"):
                    with contextlib.suppress(OSError):
                        about = entry.stat()
                        found.append((path, about.st_size, about.st_mtime))
        return found

    @contextlib.contextmanager
    def _writing(self) -> Iterator[None]:
        """What cannot be kept is no reason to fail: it is remembered, and said once."""
        try:
            yield
        except OSError as error:
            self.trouble = f"{self.folder}: {error.strerror or error}"

    def _part(self) -> Path:
        if not (self.folder / _TAG).is_file():
            self.folder.mkdir(parents=True, exist_ok=True, mode=0o700)
            (self.folder / _TAG).write_text(_TAG_TEXT, encoding="utf-8")
        handle, name = tempfile.mkstemp(_UNFINISHED, dir=self.folder)
        os.close(handle)
        return Path(name)

    def _write(self, path: Path, content: bytes) -> None:
        """Whole or not at all."""
        part = self._part()
        try:
            part.write_bytes(content)
            part.replace(path)
        except OSError:
            part.unlink(missing_ok=True)
            raise


def checked_folder(folder: Path) -> Path:
    """The folder, if it is new, empty or holds records; else one clear error."""
    if folder.exists() and not folder.is_dir():
        raise OutputError("The folder for kept lines is a file.", where=str(folder))
    if folder.is_dir() and not (folder / _TAG).is_file() and any(folder.iterdir()):
        raise OutputError(
            "The folder holds something else.",
            where=str(folder),
            expected="an empty or new folder for kept lines",
            advice="Name another folder with --keep-in.",
        )
    return folder


def _linked(source: Path, target: Path) -> None:
    """The same file under a second name; a copy where the file system has no such thing."""
    target.unlink(missing_ok=True)
    try:
        os.link(source, target)
    except OSError:
        shutil.copyfile(source, target)


def _removed(path: Path, size: int) -> int:
    try:
        path.unlink()
    except OSError:
        return 0
    return size


class _Reader(pickle.Unpickler):
    """Reads records made of this program's own records, arrays, fractions, paths and dates, and refuses the rest."""

    def find_class(self, module: str, name: str) -> Any:
        own = module.startswith("qa.")
        numpy = module.split(".")[0] == "numpy" and name in _NUMPY
        plain = module.split(".")[0] in ("pathlib", "datetime") or (module, name) in _PLAIN
        if not (own or numpy or plain):
            raise pickle.UnpicklingError(f"{module}.{name} does not belong into a record")
        found = super().find_class(module, name)
        if own and not isinstance(found, type):
            raise pickle.UnpicklingError(f"{module}.{name} is no record")
        return found
