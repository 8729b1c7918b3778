"""The files of jobs: requests, pieces of results, whole results and outcomes, in one folder a job.

Large inputs and outputs do not belong in the rows of a store. A file appears whole or not at all, and is never changed:
it is written beside its place, forced to the disk where that matters, and linked to its name, which fails where that is
taken. So whoever is second to write a piece that was computed twice changes nothing, and a job has one outcome, decided
once, even when it is cancelled in the instant it ends. The folder may be shared by several hosts.
"""

from __future__ import annotations

import os
import secrets
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Final

__all__ = ["Blobs"]

_PIECES: Final = "pieces"
_TRIES: Final = "tries"


class Blobs:
    """Files of jobs under one folder, which is made with the first file."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder

    def put(self, job: str, name: str, data: bytes, *, force: bool = True) -> bool:
        """Write a file once; whether it was this call that wrote it. Raises OSError where the folder fails. Without
        ``force`` it may be lost, or be empty, after a loss of power."""
        place = self._place(job) / name
        self._folder.mkdir(mode=0o700, parents=True, exist_ok=True)
        place.parent.mkdir(parents=True, exist_ok=True)
        beside = place.with_name(f".{place.name}.{secrets.token_hex(8)}")
        try:
            with beside.open("wb") as file:
                file.write(data)
                if force:
                    file.flush()
                    os.fsync(file.fileno())
            os.link(beside, place)
        except FileExistsError:
            return False
        finally:
            beside.unlink(missing_ok=True)
        return True

    def get(self, job: str, name: str) -> bytes | None:
        """The bytes of a file, or None."""
        try:
            return (self._place(job) / name).read_bytes()
        except FileNotFoundError:
            return None

    def has(self, job: str, name: str) -> bool:
        """Whether a file is there."""
        return (self._place(job) / name).exists()

    def put_piece(self, job: str, index: int, data: bytes) -> None:
        """Keep the result of one piece of work."""
        self.put(job, f"{_PIECES}/{index}", data)

    def piece(self, job: str, index: int) -> bytes | None:
        """The result of one piece, or None: one without a byte is none."""
        return self.get(job, f"{_PIECES}/{index}") or None

    def pieces_done(self, job: str) -> int:
        """How many pieces are there."""
        try:
            with os.scandir(self._place(job) / _PIECES) as entries:
                return sum(not entry.name.startswith(".") for entry in entries)
        except FileNotFoundError:
            return 0

    def count_try(self, job: str, index: int) -> int:
        """Note that a piece is begun; how many times it has been, this time included."""
        place = self._place(job) / _TRIES / str(index)
        place.parent.mkdir(parents=True, exist_ok=True)
        with place.open("ab") as file:
            file.write(b".")
            return file.tell()

    def drop_pieces(self, job: str) -> None:
        """Forget pieces and tries once the whole result is there."""
        for name in (_PIECES, _TRIES):
            shutil.rmtree(self._place(job) / name, ignore_errors=True)

    def remove(self, job: str) -> None:
        """Forget everything about a job."""
        shutil.rmtree(self._place(job), ignore_errors=True)

    def older_than(self, moment: float) -> Iterator[str]:
        """Jobs whose folder has not been changed since ``moment`` (seconds since 1970)."""
        for group in self._subfolders(self._folder):
            for one in self._subfolders(group):
                try:
                    if one.stat().st_mtime < moment:
                        yield one.name
                except FileNotFoundError:
                    continue

    def _place(self, job: str) -> Path:
        return self._folder / job[:2] / job

    @staticmethod
    def _subfolders(folder: Path) -> list[Path]:
        try:
            return [one for one in folder.iterdir() if one.is_dir()]
        except FileNotFoundError:
            return []
