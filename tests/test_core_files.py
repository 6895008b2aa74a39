"""Files that are whole or absent."""

from __future__ import annotations

import hashlib
import os
import signal
import subprocess
import sys

import pytest

from circuitgen.core.files import sha256_of, whole_file


def test_a_block_that_ends_well_replaces_the_old_file(tmp_path):
    path = tmp_path / "deep" / "er" / "table.csv"
    for text in ("old", "new"):
        with whole_file(path) as partial:
            partial.write_text(text)
            assert not path.exists() or path.read_text() == "old"
        assert path.read_text() == text
    assert list(path.parent.iterdir()) == [path]


def _write_half(path, error):
    with whole_file(path) as partial:
        partial.write_text("half")
        raise error


@pytest.mark.parametrize("error", [ValueError, KeyboardInterrupt, SystemExit])
@pytest.mark.parametrize("old", [None, "old"])
def test_a_failing_block_leaves_nothing_behind(tmp_path, error, old):
    path = tmp_path / "table.csv"
    if old:
        path.write_text(old)
    with pytest.raises(error):
        _write_half(path, error)
    assert [p.name for p in tmp_path.iterdir()] == (["table.csv"] if old else [])
    if old:
        assert path.read_text() == old


def test_a_block_that_writes_nothing_is_an_error_and_keeps_the_old_file(tmp_path):
    path = tmp_path / "table.csv"
    path.write_text("old")
    with pytest.raises(FileNotFoundError), whole_file(path):
        pass
    assert path.read_text() == "old"


@pytest.mark.skipif(os.name != "posix", reason="needs SIGKILL")
def test_a_kill_in_the_middle_leaves_the_old_file(tmp_path):
    path = tmp_path / "table.csv"
    path.write_text("old")
    script = (
        "import os, signal, sys\n"
        "from circuitgen.core.files import whole_file\n"
        "with whole_file(sys.argv[1]) as partial:\n"
        "    partial.write_text('half')\n"
        "    os.kill(os.getpid(), signal.SIGKILL)\n"
    )
    ended = subprocess.run([sys.executable, "-c", script, str(path)], check=False)
    assert ended.returncode == -signal.SIGKILL
    assert path.read_text() == "old"


def test_sha256_of_a_file_and_of_a_folder_by_name(tmp_path):
    one, two = tmp_path / "b", tmp_path / "a"
    one.write_bytes(b"x" * (3 << 20))
    two.write_bytes(b"first")
    assert sha256_of(one) == hashlib.sha256(one.read_bytes()).hexdigest()
    together = hashlib.sha256(two.read_bytes() + one.read_bytes()).hexdigest()
    assert sha256_of(tmp_path) == together
