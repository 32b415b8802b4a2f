"""A folder that a sweep fills case by case and that nothing can leave half-written.

Rows go to their place in one file; a line in the journal, written once the rows are safe on disk, says that they count.
Whatever ends the process, the next one reads the journal, drops a torn last line, and goes on with what is missing.
"""

from __future__ import annotations

import json
import os
import zlib
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gravbasin.errors import CannotFinish, InputError
from gravbasin.runs.store import write_text

__all__ = ["CASES", "CaseStore", "synced"]

Array = NDArray[np.float64]

HEAD, JOURNAL, RECORDS, LOCK, CASES = "sweep.json", "journal.jsonl", "records.f64", ".lock", "cases.nc"


class CaseStore:
    """The rows of a sweep on disk.

    Use as a context manager: it holds the folder's lock, which goes when the process does, however it ends.

    Parameters
    ----------
    folder : Path
        New, empty, or of the same sweep.
    head : mapping
        What makes this sweep this one: ``scenario`` as a tree, ``map`` as a hash or None, ``versions``.
    cases, width, tile : int
        Number of cases, numbers per case, and cases per journal entry at least.

    Raises
    ------
    InputError
        The folder holds something else, or a sweep that differs; the difference is named.
    CannotFinish
        Another process is at work in it, it cannot be written, or the disk is full.
    """

    def __init__(self, folder: Path, head: Mapping[str, Any], *, cases: int, width: int, tile: int) -> None:
        self.folder, self.head = folder.absolute(), dict(head)
        self.cases, self.width, self.tile = cases, width, tile
        self.failed: dict[int, str] = {}
        self._done = np.zeros(-(-cases // tile), dtype=bool)
        self._lock = -1

    def __enter__(self) -> CaseStore:
        with self._told():
            self._claim_folder()
            self._claim_lock()
        try:
            with self._told():
                self._claim_sweep()
                if self.complete:
                    self.clear()
                else:
                    self._journal_end = self._read_journal()
        except BaseException:
            os.close(self._lock)
            raise
        return self

    def __exit__(self, *fault: object) -> None:
        os.close(self._lock)

    @property
    def complete(self) -> bool:
        """Whether the sweep was finished before."""
        return (self.folder / CASES).exists() and not (self.folder / JOURNAL).exists()

    @property
    def count(self) -> int:
        """Cases done."""
        last = self.cases - (self._done.size - 1) * self.tile
        return int(self.tile * self._done[:-1].sum() + last * self._done[-1])

    def missing(self, batch: int) -> Iterator[tuple[int, int]]:
        """Runs of cases still to do, (first, behind the last), of at most `batch` tiles; looked up as it goes."""
        start = 0
        while start < self._done.size:
            if self._done[start]:
                later = np.flatnonzero(~self._done[start:])
                if later.size == 0:
                    return
                start += int(later[0])
            ahead = np.flatnonzero(self._done[start : start + batch])
            stop = min(start + (int(ahead[0]) if ahead.size else batch), self._done.size)
            yield start * self.tile, min(stop * self.tile, self.cases)
            start = stop

    def put(self, first: int, rows: Array, failed: Mapping[int, str]) -> None:
        """Keep the rows of the cases from number `first` on; when this returns, they are safe."""
        data = np.ascontiguousarray(rows, dtype="<f8").tobytes()
        reasons = {str(number): reason for number, reason in failed.items()}
        entry = {"first": first, "count": len(rows), "crc": zlib.crc32(data), "failed": reasons}
        with self._told():
            self._write(RECORDS, data, 8 * self.width * first)
            line = (json.dumps(entry, ensure_ascii=False) + "\n").encode()
            self._write(JOURNAL, line, self._journal_end)
        self._journal_end += len(line)
        self._count(entry)

    def records(self) -> Array:
        """All rows, read from disk as they are looked at."""
        return np.memmap(self.folder / RECORDS, dtype="<f8", mode="r", shape=(self.cases, self.width))

    def clear(self) -> None:
        """Drop rows and journal once everything made of them is in place."""
        with self._told():
            (self.folder / JOURNAL).unlink(missing_ok=True)
            (self.folder / RECORDS).unlink(missing_ok=True)

    @contextmanager
    def told(self) -> Iterator[None]:
        """Faults of the disk in one line that says what is kept."""
        with self._told():
            yield

    @contextmanager
    def _told(self) -> Iterator[None]:
        try:
            yield
        except OSError as error:
            raise CannotFinish(
                f"output folder {self.folder}: cannot be written ({error.strerror or error}); {self.count} of "
                f"{self.cases} cases are kept, and the same command continues once there is room and leave to write"
            ) from error

    def _claim_folder(self) -> None:
        if self.folder.exists() and not self.folder.is_dir():
            raise InputError("output folder", self.folder, "is a file", "choose another folder with -o")
        self.folder.mkdir(parents=True, exist_ok=True)
        known = {LOCK, "sweep.log"}
        others = [p.name for p in self.folder.iterdir() if p.name not in known and not p.name.endswith(".partial")]
        if others and HEAD not in others:
            raise InputError(
                "output folder", self.folder, "holds files that are not a gravbasin sweep", "choose another with -o"
            )

    def _claim_lock(self) -> None:
        import fcntl

        self._lock = os.open(self.folder / LOCK, os.O_RDWR | os.O_CREAT, 0o644)
        try:
            fcntl.flock(self._lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            owner = os.pread(self._lock, 64, 0).decode(errors="replace").strip()
            os.close(self._lock)
            raise CannotFinish(
                f"output folder {self.folder}: another sweep is at work in it (process {owner or 'unknown'}); "
                "wait for it, or choose another folder with -o"
            ) from None
        os.ftruncate(self._lock, 0)
        os.pwrite(self._lock, f"{os.getpid()}\n".encode(), 0)

    def _claim_sweep(self) -> None:
        path = self.folder / HEAD
        former = _tree(path)
        difference = ("", None, None) if former is None else _difference(former, json.loads(json.dumps(self.head)))
        if difference is None:
            return
        if self._begun():
            name, old, new = difference
            raise InputError(
                name.removeprefix("scenario.") or "output folder",
                new,
                f"was {old} when the sweep in {self.folder} began",
                "put it back to continue that sweep, or choose another folder with -o",
            )
        (self.folder / RECORDS).unlink(missing_ok=True)
        write_text(path, json.dumps(self.head, indent=1, ensure_ascii=False) + "\n")
        synced(path)

    def _begun(self) -> bool:
        """Whether the folder holds a case, so that another sweep must not take its place."""
        journal = self.folder / JOURNAL
        return (self.folder / CASES).exists() or (journal.exists() and journal.stat().st_size > 0)

    @property
    def reserved(self) -> int:
        """Bytes of disk that the rows have already."""
        records = self.folder / RECORDS
        return records.stat().st_size if records.exists() else 0

    def reserve(self) -> None:
        """Take all the room that rows will need, so that a disk too small is told before any work is done."""
        size, before = 8 * self.width * self.cases, self.reserved
        with self._told():
            descriptor = os.open(self.folder / RECORDS, os.O_RDWR | os.O_CREAT, 0o644)
            try:
                if hasattr(os, "posix_fallocate"):
                    os.posix_fallocate(descriptor, 0, size)
                else:
                    os.ftruncate(descriptor, size)
            except BaseException:
                os.ftruncate(descriptor, before)  # a disk filled for nothing is given back
                raise
            finally:
                os.close(descriptor)

    def _read_journal(self) -> int:
        """Count what the journal vouches for and the records still hold; returns where its last whole line ends."""
        path, end = self.folder / JOURNAL, 0
        if not path.exists():
            return 0
        if not self.reserved:
            path.unlink()
            return 0
        with open(path, "rb") as journal, open(self.folder / RECORDS, "rb") as records:
            for line in journal:
                try:
                    entry = json.loads(line)
                except ValueError:
                    break
                if not line.endswith(b"\n"):
                    break
                end += len(line)
                records.seek(8 * self.width * entry["first"])
                if zlib.crc32(records.read(8 * self.width * entry["count"])) == entry["crc"]:
                    self._count(entry)
        os.truncate(path, end)
        return end

    def _count(self, entry: Mapping[str, Any]) -> None:
        first, count = entry["first"], entry["count"]
        self._done[first // self.tile : -(-(first + count) // self.tile)] = True
        self.failed |= {int(number): reason for number, reason in entry["failed"].items()}

    def _write(self, name: str, data: bytes, offset: int) -> None:
        """Bytes at a place in a file, safe on disk when this returns."""
        descriptor = os.open(self.folder / name, os.O_WRONLY | os.O_CREAT, 0o644)
        try:
            view = memoryview(data)
            while view:
                written = os.pwrite(descriptor, view, offset)
                view, offset = view[written:], offset + written
            os.fdatasync(descriptor)
        finally:
            os.close(descriptor)


def synced(path: Path) -> None:
    """Make a file and its name in the folder outlast a power failure."""
    for each in (path, path.parent):
        descriptor = os.open(each, os.O_RDONLY)
        try:
            os.fsync(descriptor)
        finally:
            os.close(descriptor)


def _tree(path: Path) -> Any:
    try:
        return json.loads(path.read_text(encoding="utf-8"))
    except (FileNotFoundError, ValueError):
        return None


def _difference(old: Any, new: Any, name: str = "") -> tuple[str, Any, Any] | None:
    """The first place at which two trees differ, with both values."""
    if isinstance(old, dict) and isinstance(new, dict):
        for key in [*old, *(k for k in new if k not in old)]:
            found = _difference(old.get(key), new.get(key), f"{name}.{key}" if name else key)
            if found is not None:
                return found
        return None
    if isinstance(old, list) and isinstance(new, list) and len(old) == len(new):
        for i, pair in enumerate(zip(old, new, strict=True)):
            found = _difference(*pair, f"{name}.{i}")
            if found is not None:
                return found
        return None
    return None if old == new else (name, _shown(old), _shown(new))


def _shown(value: Any) -> Any:
    return "(not given)" if value is None else value
