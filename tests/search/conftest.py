from __future__ import annotations

import pytest

from stresskit.runs.api import Prepared, StudyFile
from stresskit.search.api import search_specifications
from stresskit.search.result import SearchResult
from tests.search.world import search_text, write_world

#: Everything at once: right lag among decoys, wrong sign, collinear twin, random walk, a feature that never moves.
WIDE = """\
search: drivers
cause: default
candidates:
  - {of: driver, transforms: [difference], over: [2], lags: [0, 1, 2, 3], expect: positive}
  - {of: mirror, transforms: [difference], over: [2], lags: [2], expect: positive}
  - {of: twin, transforms: [difference], over: [2], lags: [2], expect: positive}
  - {of: decoy, lags: [1]}
  - {of: walk, lags: [0]}
  - {of: flat}
most_terms: 2
rules: {stationarity: {require: both}}
out_of_time: {folds: 3, window: 6}
"""

World = tuple[StudyFile, Prepared]


@pytest.fixture(scope="session")
def world(tmp_path_factory: pytest.TempPathFactory) -> World:
    return write_world(tmp_path_factory.mktemp("quay"))


@pytest.fixture(scope="session")
def wide(world: World, tmp_path_factory: pytest.TempPathFactory) -> SearchResult:
    return search_specifications(*world, search_text(tmp_path_factory.mktemp("wide"), WIDE))
