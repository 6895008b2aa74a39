"""`circuitgen inspect` as a user meets it: table, JSON, page, exit codes, messages."""

from __future__ import annotations

import json
import os

import pytest
from builders_inspection import STAND_INS, cut, scaled, stand_in, turned
from builders_morphology import PLAIN, write_table

from circuitgen.cli import main
from circuitgen.commands.arguments import BAD_INPUT, DISAGREES, FINE

GOOD = str(STAND_INS[0])


def run(capsys, *words):
    """Run the command; return exit code, standard output and standard error."""
    code = main(["inspect", *map(str, words)])
    captured = capsys.readouterr()
    return code, captured.out, captured.err


def test_good_files_give_a_table_of_80_columns(capsys):
    paths = STAND_INS[::5]
    code, out, err = run(capsys, *paths)
    assert code == FINE
    assert err == ""
    lines = out.splitlines()
    assert max(map(len, lines)) <= 80
    assert out.isascii()
    rows = [line for line in lines if line.startswith("  L")]
    assert len(rows) == len(paths)
    assert len({len(row) for row in rows}) == 1
    assert f"{len(paths)} of {len(paths)} files can be used" in out


def test_spoilt_files_are_told_in_80_columns_with_effect_and_remedy(capsys, tmp_path):
    table = stand_in("L5_thick_1")
    paths = [
        write_table(
            tmp_path / ("long name " * 9 + "cut.swc"), cut(table, (0, 0, 1), 30)
        ),
        write_table(tmp_path / "turned.swc", turned(table, (1, 0, 2))),
        write_table(tmp_path / "voxels.swc", scaled(table, *(125,) * 4)),
    ]
    code, out, _ = run(capsys, *paths)
    assert code == DISAGREES
    assert max(map(len, out.splitlines())) <= 80
    for words in ("X turned.swc", "-> Dendrites and axon", "do: Set upright: "):
        assert words in out
    assert "1 of 3 files can be used" in out


def test_json_holds_what_the_table_holds(capsys, tmp_path):
    path = write_table(tmp_path / "cut.swc", cut(stand_in("L5_thick_1"), (0, 0, 1), 30))
    code, out, _ = run(capsys, path, GOOD, "--json")
    result = json.loads(out)
    assert code == FINE
    one, other = result["files"]
    assert one["file"] == str(path)
    assert one["usable"] is True
    assert {"severity", "code", "seen", "effect", "remedy", "line"} == set(
        one["remarks"][0]
    )
    assert other["remarks"] == []
    assert other["measures"]["axon_um"] > 5_000


@pytest.mark.parametrize(
    ("name", "content", "words"),
    [
        ("empty.swc", b"", "is empty"),
        ("blank.swc", b" \n\n", "is empty"),
        ("binary.swc", bytes(range(256)), "is binary"),
        ("absent.swc", None, "cannot be read: No such file"),
    ],
)
def test_unreadable_arguments_give_one_message_and_the_others_go_on(
    capsys, tmp_path, name, content, words
):
    path = tmp_path / name
    if content is not None:
        path.write_bytes(content)
    code, out, err = run(capsys, path, GOOD)
    assert code == BAD_INPUT
    assert len(err.splitlines()) == 1
    assert err.startswith(f"{path}: ")
    assert words in err
    assert "1 of 1 files can be used" in out


def test_a_folder_is_refused_with_what_to_type(capsys, tmp_path):
    code, out, err = run(capsys, tmp_path)
    assert (code, out) == (BAD_INPUT, "")
    assert f"name its files, for instance {tmp_path}/*.swc" in err
    assert len(err.splitlines()) == 1


@pytest.mark.skipif(os.geteuid() == 0, reason="root may read everything")
def test_a_file_without_permission_is_unreadable(capsys, tmp_path):
    path = tmp_path / "cell.swc"
    path.write_text(PLAIN)
    path.chmod(0)
    assert run(capsys, path)[0] == BAD_INPUT


def test_text_that_is_no_reconstruction_cannot_be_used(capsys, tmp_path):
    path = tmp_path / "notes.md"
    path.write_text("# Notes\n\nThis is prose, not a neuron.\nAnd more.\n")
    code, out, err = run(capsys, path)
    assert (code, err) == (DISAGREES, "")
    assert "0 of 1 files can be used" in out
    assert len(out.splitlines()) <= 8


def test_no_files_is_bad_input(capsys):
    code, _, err = run(capsys)
    assert code == BAD_INPUT
    assert "name SWC files" in err


def test_a_spec_gives_files_and_axes(capsys, tmp_path):
    assert main(["new", str(tmp_path)]) == FINE
    capsys.readouterr()
    spec = tmp_path / "circuit.yaml"
    code, out, _ = run(capsys, "--spec", spec, "--json")
    files = json.loads(out)["files"]
    assert code == FINE
    assert len(files) == 5
    assert {file["upright"] for file in files} == {"y"}
    text = spec.read_text().replace("upright: y", "upright: -z")
    spec.write_text(text)
    code, out, _ = run(capsys, "--spec", spec, files[0]["file"], "--json")
    assert json.loads(out)["files"][0]["upright"] == "-z"


def test_upright_is_an_option(capsys, tmp_path):
    path = write_table(tmp_path / "a.swc", turned(stand_in("L5_thick_1"), (1, 0, 2)))
    assert run(capsys, path)[0] == DISAGREES
    assert run(capsys, path, "--upright", "x")[0] == FINE


def test_page_and_mended_files_are_written(capsys, tmp_path):
    path = tmp_path / "cell.swc"
    path.write_text("n type x y z r parent\n" + STAND_INS[4].read_text())
    page, folder = tmp_path / "out" / "page.html", tmp_path / "mended"
    code, out, _ = run(capsys, path, GOOD, "--html", page, "--fix-to", folder)
    assert code == FINE
    assert "cell.swc" in page.read_text("utf-8")
    assert [p.name for p in folder.iterdir()] == ["cell.swc"]
    assert "1 of 2 files mended" in out
    # Once more: the mended file is there, so nothing is written.
    page.unlink()
    code, out, err = run(capsys, path, "--html", page, "--fix-to", folder)
    assert code == BAD_INPUT
    assert "exists already" in err
    assert not page.exists()


def test_a_page_replaces_no_other_kind_of_file(capsys, tmp_path):
    path = tmp_path / "cell.swc"
    path.write_text(PLAIN)
    code, _, err = run(capsys, path, "--html", path)
    assert code == BAD_INPUT
    assert "must end in .html" in err
    assert path.read_text() == PLAIN


@pytest.mark.skipif(os.name != "posix", reason="names are text here")
def test_a_name_that_is_no_text_is_told_and_mended(capsys, tmp_path):
    path = os.path.join(os.fsencode(tmp_path), b"b\xff\n.swc")
    with open(path, "w") as stream:
        stream.write("n type x y z r parent\n" + STAND_INS[4].read_text())
    words = [
        os.fsdecode(path),
        "--html",
        tmp_path / "p.html",
        "--fix-to",
        tmp_path / "m",
    ]
    code, out, _ = run(capsys, *words)
    assert code == FINE
    assert "  b??.swc " in out
    assert "b??.swc" in (tmp_path / "p.html").read_text("utf-8")
    [mended] = (tmp_path / "m").iterdir()
    assert mended.read_text("utf-8").startswith("# Mended by circuitgen")


def test_the_same_file_twice_is_told_once(capsys):
    _, out, _ = run(capsys, GOOD, GOOD)
    assert "1 of 1 files" in out
