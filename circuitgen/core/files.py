"""Files that are either whole or absent."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path


@contextmanager
def whole_file(path: Path) -> Iterator[Path]:
    """Give a temporary path; move it to `path` only if the block ends well.

    A kill at any moment leaves the old file, the new file or no file, never half.
    """
    path = Path(path)
    path.parent.mkdir(parents=True, exist_ok=True)
    partial = path.with_name(f".{path.name}.part-{os.getpid()}")
    try:
        yield partial
        os.replace(partial, path)
    finally:
        partial.unlink(missing_ok=True)


def sha256_of(path: Path) -> str:
    """Return the SHA-256 of a file, or of a folder's files in order of name."""
    digest = hashlib.sha256()
    path = Path(path)
    parts = sorted(path.iterdir()) if path.is_dir() else [path]
    for part in parts:
        with part.open("rb") as stream:
            while chunk := stream.read(1 << 20):
                digest.update(chunk)
    return digest.hexdigest()
