"""One browser for all tests of this folder, and the reports that they open."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest

from stresskit.report.html import write_report
from tests.report.browser.chromium import Chromium
from tests.report.report_samples import sample


@pytest.fixture(scope="package")
def browser(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Chromium]:
    chromium = Chromium(tmp_path_factory.mktemp("profile"))
    yield chromium
    chromium.close()


@pytest.fixture(scope="package")
def report(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The invented study: three scenarios and their mean, six segments."""
    path = tmp_path_factory.mktemp("usual") / "report.html"
    write_report(sample(steps=60), path)
    return path
