"""Files in and out: every input is read once and remembered with its hash; every output is moved into place whole."""

from __future__ import annotations

import hashlib
import os
import shutil
import tempfile
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path

from .errors import InputError


def sha256(data: bytes) -> str:
    """Return the hash of bytes as 64 hexadecimal digits.

    Examples
    --------
    >>> sha256(b"")[:8]
    'e3b0c442'
    """
    return hashlib.sha256(data).hexdigest()


def read_bytes(path: Path, where: str | None = None) -> bytes:
    """Read a whole file, or say in one line why not.

    Parameters
    ----------
    path : Path
    where : str, optional
        ``file:line:column: key`` of the place that names the file.
    """
    lead = f"{where}: " if where else ""
    try:
        if path.exists() and not path.is_file():
            raise InputError(f"{lead}{path}: expected a file, got a folder or a device")
        return path.read_bytes()
    except FileNotFoundError:
        raise InputError(f"{lead}{path}: no such file; paths are relative to the file that names them") from None
    except OSError as error:
        raise InputError(f"{lead}{path}: cannot be read ({error.strerror})") from None


@dataclass
class Inputs:
    """The files that one piece of work reads: each once, by the path of the file that names it.

    A frozen plan keeps copies of its inputs. `frozen` maps (name of the naming file, path as written there) to the
    copy, so that a plan never reaches back to the originals.

    Parameters
    ----------
    frozen : mapping, optional
        Of a plan; without it, relative paths are relative to the file that names them.
    """

    frozen: Mapping[tuple[str, str], Path] | None = None
    read: dict[Path, bytes] = field(default_factory=dict)
    links: dict[tuple[Path, str], Path] = field(default_factory=dict)

    def open(self, written: str, named_by: Path | None = None, where: str | None = None) -> tuple[Path, bytes]:
        """Return the path and the bytes of a file that `named_by` names as `written`."""
        path = self._resolve(written, named_by, where)
        if path not in self.read:
            self.read[path] = read_bytes(path, where)
        if named_by is not None:
            self.links[named_by, written] = path
        return path, self.read[path]

    def _resolve(self, written: str, named_by: Path | None, where: str | None) -> Path:
        if named_by is None:
            return Path(written)
        if self.frozen is None:
            return named_by.parent / written
        try:
            return self.frozen[named_by.name, written]
        except KeyError:
            lead = f"{where}: " if where else ""
            raise InputError(f"{lead}{written}: the plan holds no copy of this file; make the plan anew") from None


def write_files(folder: Path, files: Mapping[str, bytes], *, force: bool = False) -> list[Path]:
    """Write files into a folder, all or none: under temporary names first, then moved into place.

    Parameters
    ----------
    folder : Path
        Made if it is missing.
    files : mapping from relative name to bytes
    force : bool
        Whether files that exist with other bytes may be replaced.

    Raises
    ------
    InputError
        A file exists and would change, or the disk refuses; then nothing new is left behind.
    """
    changed = [name for name in files if _would_change(folder / name, files[name])]
    if changed and not force:
        raise InputError(
            *(f"{folder / name}: exists and would change; name another place or say --force" for name in changed)
        )
    made = _first_missing(folder)
    try:
        folder.mkdir(parents=True, exist_ok=True)
        staging = Path(tempfile.mkdtemp(prefix=".coilwright-", dir=folder))
        try:
            for name, data in files.items():
                _write_synced(staging / name, data)
            for name in files:
                (folder / name).parent.mkdir(parents=True, exist_ok=True)
                (staging / name).replace(folder / name)
        finally:
            shutil.rmtree(staging, ignore_errors=True)
    except OSError as error:
        if made is not None:
            shutil.rmtree(made, ignore_errors=True)
        raise InputError(f"{folder}: cannot be written ({error.strerror or error}); nothing was left there") from None
    return [folder / name for name in files]


def _would_change(path: Path, data: bytes) -> bool:
    if path.is_symlink() and not path.exists():
        return True  # a link to somewhere: never replaced without a word
    try:
        return path.read_bytes() != data
    except (FileNotFoundError, NotADirectoryError):
        return False
    except OSError:
        return True


def _first_missing(folder: Path) -> Path | None:
    """The topmost folder that writing would have to make, so that a failure can take it away again."""
    missing = None
    while not folder.exists():
        missing, folder = folder, folder.parent
    return missing


def _write_synced(path: Path, data: bytes) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    with path.open("wb") as stream:
        stream.write(data)
        stream.flush()
        os.fsync(stream.fileno())


def stream_file(path: Path, chunks: Iterable[bytes], *, force: bool = False) -> Path:
    """Write a file that is too large for memory: under a temporary name, then moved into place.

    Raises
    ------
    InputError
        The file exists with other bytes and `force` is not said, or the disk refuses; then nothing is left behind.
    """
    made = _first_missing(path.parent)
    digest = hashlib.sha256()
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        handle, staged = tempfile.mkstemp(prefix=".coilwright-", dir=path.parent)
        try:
            with os.fdopen(handle, "wb") as stream:
                for chunk in chunks:
                    digest.update(chunk)
                    stream.write(chunk)
                stream.flush()
                os.fsync(stream.fileno())
            if path.exists() and not force and _file_sha256(path) != digest.hexdigest():
                raise InputError(f"{path}: exists and would change; name another place or say --force")
            Path(staged).replace(path)
        finally:
            Path(staged).unlink(missing_ok=True)
    except OSError as error:
        if made is not None:
            shutil.rmtree(made, ignore_errors=True)
        raise InputError(f"{path}: cannot be written ({error.strerror or error}); nothing was left there") from None
    return path


def _file_sha256(path: Path) -> str:
    with path.open("rb") as stream:
        return (
            hashlib.file_digest(stream, "sha256").hexdigest()
            if hasattr(hashlib, "file_digest")
            else sha256(stream.read())
        )
