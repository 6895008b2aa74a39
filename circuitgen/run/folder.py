"""The run folder: unfinished until everything in it is done, then moved into place.

A build works in ``RUN.unfinished``. A kill leaves that folder, and the same command goes
on from the parts that are whole; a finished run appears under its own name at once.
"""

from __future__ import annotations

import fcntl
import json
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from circuitgen.core.errors import RunFolderError
from circuitgen.core.files import whole_file

PROVENANCE = "provenance.json"
_FINGERPRINT = "fingerprint.json"


class RunFolder:
    """Paths of one run, finished or not."""

    def __init__(self, path: Path):
        self.path = Path(path)
        self.unfinished = self.path.with_name(self.path.name + ".unfinished")
        self.work = self.unfinished / "work"

    def finished_fingerprint(self) -> str | None:
        """Fingerprint of the finished run in place, None when there is none."""
        try:
            text = (self.path / PROVENANCE).read_text(encoding="utf-8")
            return json.loads(text)["fingerprint"]
        except (OSError, ValueError, KeyError):
            return None

    def check_free(self, *, force: bool) -> None:
        """Refuse to replace anything that is not to be replaced."""
        if not self.path.exists() or force:
            return
        if self.finished_fingerprint() is not None:
            raise RunFolderError(
                f"{self.path} holds a finished run of another spec, input or version;"
                " choose another --out or add --force to replace it"
            )
        if not self.path.is_dir() or any(self.path.iterdir()):
            raise RunFolderError(
                f"{self.path} exists and is no run; choose another --out"
            )

    @contextmanager
    def locked(self) -> Iterator[None]:
        """Hold the unfinished folder for this process alone."""
        try:
            self.unfinished.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise RunFolderError(
                f"{self.unfinished} cannot be made: {error.strerror}"
            ) from None
        with (self.unfinished.parent / f".{self.unfinished.name}.lock").open(
            "w"
        ) as lock:
            try:
                fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except OSError:
                raise RunFolderError(
                    f"another process is building {self.path}; wait for it"
                ) from None
            try:
                yield
            finally:
                Path(lock.name).unlink(missing_ok=True)

    def begin(self, fingerprint: str) -> bool:
        """Make ready to build; return True when an earlier try is continued."""
        note = self.unfinished / _FINGERPRINT
        try:
            same = json.loads(note.read_text(encoding="utf-8")) == fingerprint
        except (OSError, ValueError):
            same = False
        if not same:
            shutil.rmtree(self.unfinished, ignore_errors=True)
        self.work.mkdir(parents=True, exist_ok=True)
        with whole_file(note) as partial:
            partial.write_text(json.dumps(fingerprint), encoding="utf-8")
        return same

    def finish(self) -> None:
        """Move the finished run into place, replacing what was there."""
        shutil.rmtree(self.work)
        (self.unfinished / _FINGERPRINT).unlink()
        old = self.path.with_name(self.path.name + ".replaced")
        shutil.rmtree(old, ignore_errors=True)
        if self.path.exists():
            self.path.rename(old)
        self.unfinished.rename(self.path)
        shutil.rmtree(old, ignore_errors=True)
