"""One small run for the tests of this folder; those that change anything take a copy."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from tests.cli.small_study import write_small_study
from tests.repeat.made import make_run


@pytest.fixture(scope="session")
def kept(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with study.yaml, its inputs, and the run folder ``run``. Not to be changed."""
    folder = tmp_path_factory.mktemp("kept") / "book"
    folder.mkdir()
    study = write_small_study(folder, loans=200)
    study.write_text(
        study.read_text().replace("segments: [product, place]", "segments: [product]") + "horizon: 24\n"
    )
    make_run(study, folder / "run")
    return folder


@pytest.fixture
def book(kept: Path, tmp_path: Path) -> Path:
    """A copy that may be changed."""
    return Path(shutil.copytree(kept, tmp_path / "book"))
