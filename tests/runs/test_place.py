"""Run folders: whole or not there, never overwritten unasked."""

from __future__ import annotations

import errno
import os
import subprocess
import sys
from pathlib import Path

import pytest

from stresskit.core.errors import OutputError
from stresskit.runs.place import whole_folder

FIRST, SECOND = ('{"study_digest": "first", "outputs": {}}', '{"study_digest": "second", "outputs": {}}')


def test_appears_only_when_the_block_ends(tmp_path: Path) -> None:
    out = tmp_path / "run"
    with whole_folder(out) as part:
        (part / "manifest.json").write_text("{}")
        assert not out.exists()
    assert (out / "manifest.json").read_text() == "{}"
    assert [p.name for p in tmp_path.iterdir()] == ["run"]


def test_an_error_leaves_nothing(tmp_path: Path) -> None:
    with pytest.raises(KeyError), whole_folder(tmp_path / "run") as part:
        (part / "half.csv").write_text("a")
        raise KeyError("stop")
    assert list(tmp_path.iterdir()) == []


def test_a_full_disk_is_said_and_leaves_nothing(tmp_path: Path) -> None:
    with pytest.raises(
        OutputError, match=r"writing .*run failed: No space left on device; nothing was left there"
    ):
        with whole_folder(tmp_path / "run") as part:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC), str(part / "x"))
    assert list(tmp_path.iterdir()) == []


def test_existing_folders_are_kept(tmp_path: Path) -> None:
    out = tmp_path / "run"
    with whole_folder(out) as part:
        (part / "manifest.json").write_text(FIRST)
    with pytest.raises(OutputError, match="exists already; choose another --out, or add --replace"):
        with whole_folder(out):
            raise AssertionError("must not be entered")
    with whole_folder(out, replace=True) as part:
        (part / "manifest.json").write_text(SECOND)
    assert (out / "manifest.json").read_text() == SECOND
    assert [p.name for p in tmp_path.iterdir()] == ["run"]


def test_a_failing_replacement_keeps_the_old_run(tmp_path: Path) -> None:
    out = tmp_path / "run"
    with whole_folder(out) as part:
        (part / "manifest.json").write_text(FIRST)
    with pytest.raises(ValueError), whole_folder(out, replace=True):
        raise ValueError("no")
    assert (out / "manifest.json").read_text() == FIRST


def test_replace_refuses_a_folder_that_is_no_run(tmp_path: Path) -> None:
    out = tmp_path / "thesis"
    out.mkdir()
    (out / "chapter1.txt").write_text("irreplaceable")
    with pytest.raises(OutputError, match="is not a run folder"), whole_folder(out, replace=True):
        pass
    assert (out / "chapter1.txt").read_text() == "irreplaceable"


def test_an_empty_folder_may_be_filled(tmp_path: Path) -> None:
    out = tmp_path / "run"
    out.mkdir()
    with whole_folder(out) as part:
        (part / "a").write_text("1")
    assert (out / "a").exists()


def test_two_runs_into_one_place(tmp_path: Path) -> None:
    out = tmp_path / "run"
    with pytest.raises(OutputError, match="appeared while this run was working"), whole_folder(out) as slow:
        with whole_folder(out) as quick:
            (quick / "who").write_text("quick")
        (slow / "who").write_text("slow")
    assert (out / "who").read_text() == "quick"
    assert [p.name for p in tmp_path.iterdir()] == ["run"]


def test_leftovers_of_dead_processes_go(tmp_path: Path) -> None:
    code = f"""
import os, pathlib
from stresskit.runs.place import whole_folder
with whole_folder(pathlib.Path({str(tmp_path / "run")!r})) as part:
    (part / "half").write_text("x")
    os.kill(os.getpid(), 9)
"""
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == -9
    assert not (tmp_path / "run").exists()
    assert len(list(tmp_path.glob(".run.partial-*"))) == 1
    with whole_folder(tmp_path / "run") as part:
        (part / "a").write_text("1")
    assert [p.name for p in tmp_path.iterdir()] == ["run"]


def test_a_place_that_is_a_file(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("x")
    with pytest.raises(OutputError, match="cannot write to"), whole_folder(tmp_path / "file" / "run"):
        pass


def test_replace_keeps_what_a_user_added_to_a_run(tmp_path: Path) -> None:
    out = tmp_path / "run"
    with whole_folder(out) as part:
        (part / "manifest.json").write_text(FIRST)
    (out / "my notes.txt").write_text("irreplaceable")
    with pytest.raises(OutputError, match=r"files that the run did not write \(1, first my notes.txt\)"):
        with whole_folder(out, replace=True):
            pass
    assert (out / "my notes.txt").read_text() == "irreplaceable"


def test_replace_refuses_the_manifest_of_another_program(tmp_path: Path) -> None:
    out = tmp_path / "extension"
    out.mkdir()
    (out / "manifest.json").write_text('{"name": "my extension"}')
    with pytest.raises(OutputError, match="is not a run folder"), whole_folder(out, replace=True):
        pass
    assert (out / "manifest.json").exists()


@pytest.mark.parametrize("kind", ["dangling", "empty", "run"])
def test_a_link_is_followed(kind: str, tmp_path: Path) -> None:
    real, link = tmp_path / "real", tmp_path / "link"
    if kind == "run":
        with whole_folder(real) as part:
            (part / "manifest.json").write_text(FIRST)
    elif kind == "empty":
        real.mkdir()
    link.symlink_to(real)
    with whole_folder(link, replace=kind == "run") as part:
        (part / "manifest.json").write_text(SECOND)
    assert link.is_symlink()
    assert (real / "manifest.json").read_text() == SECOND


@pytest.mark.parametrize("name", ["a[1]", "b*", "**"])
def test_names_that_look_like_patterns(name: str, tmp_path: Path) -> None:
    with whole_folder(tmp_path / name) as part:
        (part / "a").write_text("1")
    assert (tmp_path / name / "a").exists()
