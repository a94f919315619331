"""Places that cannot take a run: a full disk, files that may not grow, read-only folders, another run that was quicker."""

from __future__ import annotations

import contextlib
import os
import subprocess
import sys
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest

import stresskit as sk
from stresskit.core.errors import OutputError
from stresskit.runs.manifest import check_outputs, read_manifest
from stresskit.runs.place import whole_folder
from tests.cli.small_study import write_small_study


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> tuple[object, object]:
    """A result that is ready to be written, and its fits."""
    file = sk.load_study(write_small_study(tmp_path_factory.mktemp("book"), loans=60))
    data = sk.prepare(file)
    fits = sk.fit(file, data)
    return sk.project(file, data, fits), fits


@contextlib.contextmanager
def small_disk(place: Path, size: str) -> Iterator[None]:
    """A file system of that size in memory; skips where one may not be mounted."""
    place.mkdir()
    done = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", f"size={size}", "tmpfs", str(place)],
        capture_output=True,
        text=True,
        check=False,
    )
    if done.returncode != 0:
        pytest.skip(f"a small file system cannot be mounted here: {done.stderr.strip()}")
    try:
        yield
    finally:
        subprocess.run(["umount", str(place)], check=True)


needs_mount = pytest.mark.skipif(
    sys.platform != "linux" or os.geteuid() != 0, reason="only root on Linux can mount a small file system"
)


@needs_mount
def test_a_full_disk(finished: tuple, tmp_path: Path) -> None:
    """At every size at which the run does not fit, nothing is left; where it fits, it is whole."""
    result, fits = finished
    disk = tmp_path / "disk"
    with small_disk(disk, "32k"):
        for size in ("32k", "64k", "128k", "200k"):
            subprocess.run(["mount", "-o", f"remount,size={size}", str(disk)], check=True)
            with pytest.raises(OutputError) as caught:
                sk.write_run(result, fits, disk / "run")
            assert str(caught.value) == (
                f"writing {disk / 'run'} failed: No space left on device; nothing was left there"
            )
            assert list(disk.iterdir()) == []
        subprocess.run(["mount", "-o", "remount,size=20m", str(disk)], check=True)
        sk.write_run(result, fits, disk / "run")
        assert check_outputs(read_manifest(disk / "run")).sound


@needs_mount
def test_a_full_disk_keeps_the_run_that_is_there(finished: tuple, tmp_path: Path) -> None:
    result, fits = finished
    disk = tmp_path / "disk"
    with small_disk(disk, "20m"):
        sk.write_run(result, fits, disk / "run")
        used = sum(f.stat().st_blocks * 512 for f in disk.rglob("*"))
        subprocess.run(["mount", "-o", f"remount,size={(used + 60_000) // 4096 * 4}k", str(disk)], check=True)
        with pytest.raises(OutputError, match="No space left on device; nothing was left there"):
            sk.write_run(result, fits, disk / "run", replace=True)
        assert check_outputs(read_manifest(disk / "run")).sound
        assert [p.name for p in disk.iterdir()] == ["run"]


@needs_mount
def test_a_read_only_place(finished: tuple, tmp_path: Path) -> None:
    result, fits = finished
    disk = tmp_path / "disk"
    with small_disk(disk, "1m"):
        subprocess.run(["mount", "-o", "remount,ro", str(disk)], check=True)
        with pytest.raises(OutputError) as caught:
            sk.write_run(result, fits, disk / "run")
        assert str(caught.value) == f"cannot write to {disk}: Read-only file system"


@pytest.mark.skipif(
    os.name == "nt" or os.geteuid() == 0, reason="permissions do not bind root; see the read-only mount"
)
def test_a_place_without_permission(finished: tuple, tmp_path: Path) -> None:
    result, fits = finished
    closed = tmp_path / "closed"
    closed.mkdir(mode=0o555)
    with pytest.raises(OutputError) as caught:
        sk.write_run(result, fits, closed / "run")
    assert str(caught.value) == f"cannot write to {closed}: Permission denied"


#: The command line with a limit on the size of any file it writes.
LIMITED = """
import resource, sys
from stresskit import cli
resource.setrlimit(resource.RLIMIT_FSIZE, (int(sys.argv[1]), resource.RLIM_INFINITY))
cli.main(sys.argv[2:])
"""


@pytest.mark.skipif(os.name == "nt", reason="there is no limit on file sizes on Windows")
def test_files_that_may_not_grow(tmp_path: Path) -> None:
    book = tmp_path / "book"
    book.mkdir()
    study = write_small_study(book, loans=60)
    before = {f.name: f.read_bytes() for f in book.iterdir()}
    words = [
        sys.executable,
        "-c",
        LIMITED,
        "60000",
        "run",
        str(study),
        "--no-evidence",
        "--out",
        str(tmp_path / "run"),
    ]
    done = subprocess.run(words, capture_output=True, text=True, check=False, timeout=200)
    assert done.returncode == 2, done.stderr
    assert (
        done.stderr
        == f"stresskit: writing {tmp_path / 'run'} failed: File too large; nothing was left there\n"
    )
    assert {f.name: f.read_bytes() for f in book.iterdir()} == before
    assert [p.name for p in tmp_path.iterdir()] == ["book"]


@pytest.mark.parametrize("replace", [False, True])
def test_many_runs_into_one_place_at_once(replace: bool, tmp_path: Path) -> None:
    """Without --replace one wins and the others say so; with it the place always holds one of them, whole."""
    out, together, said = tmp_path / "run", threading.Barrier(8), list[str]()
    manifest = '{"study_digest": "x", "outputs": {"who": ""}}'
    if replace:
        with whole_folder(out) as part:
            (part / "manifest.json").write_text(manifest)

    def one(k: int) -> None:
        try:
            with whole_folder(out, replace=replace) as part:
                (part / "manifest.json").write_text(manifest)
                (part / "who").write_text(str(k))
                together.wait(30)
            said.append("won")
        except OutputError as e:
            said.append(str(e))

    threads = [threading.Thread(target=one, args=(k,)) for k in range(8)]
    for t in threads:
        t.start()
    for t in threads:
        t.join()
    assert sorted(f.name for f in out.iterdir()) == ["manifest.json", "who"]
    assert [p.name for p in tmp_path.iterdir()] == ["run"]
    lost = [s for s in said if s != "won"]
    if replace:
        known = f"{out} was replaced by another run while this one was working; that one was kept"
        assert all(s == known for s in lost)
    else:
        assert said.count("won") == 1
        assert set(lost) == {f"{out} appeared while this run was working; nothing was overwritten"}


def test_two_processes_into_one_place(tmp_path: Path) -> None:
    book = tmp_path / "book"
    book.mkdir()
    study = write_small_study(book, loans=60)
    out = tmp_path / "run"
    words = [sys.executable, "-m", "stresskit.cli", "run", str(study), "--no-evidence", "--out", str(out)]
    two = [
        subprocess.Popen(words, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True)
        for _ in range(2)
    ]
    told = [p.communicate(timeout=200)[1] for p in two]
    codes = sorted(p.returncode for p in two)
    assert codes == [0, 2], told
    (error,) = (t for t in told if t)
    assert error in (
        f"stresskit: {out} appeared while this run was working; nothing was overwritten\n",
        f"stresskit: {out} exists already; choose another --out, or add --replace to overwrite it\n",
    )
    assert check_outputs(read_manifest(out)).sound
    assert sorted(p.name for p in tmp_path.iterdir()) == ["book", "run"]


def test_a_run_that_was_killed_while_it_replaced_another_gives_it_back(tmp_path: Path) -> None:
    """Between the two renames of a replacement the earlier run lies under another name; the next run puts it back."""
    gone = subprocess.Popen([sys.executable, "-c", ""])
    gone.wait()
    left = tmp_path / f".run.partial-{gone.pid}-old-abc" / "run"
    left.mkdir(parents=True)
    (left / "manifest.json").write_text('{"study_digest": "earlier", "outputs": {}}')
    (tmp_path / f".run.partial-{gone.pid}-xyz").mkdir()
    with pytest.raises(OutputError, match="exists already"), whole_folder(tmp_path / "run"):
        pass
    assert "earlier" in (tmp_path / "run" / "manifest.json").read_text()
    assert [p.name for p in tmp_path.iterdir()] == ["run"]
