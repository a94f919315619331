"""Names that are markup, quotes, formulas or very long: a real browser shows them as text and runs nothing of them.

The names go through the report of the invented study, and through a study that the engine computes from files.
"""

from __future__ import annotations

import dataclasses
import json
import subprocess
from pathlib import Path

import pandas as pd
import pytest

from stresskit.report.html import write_report
from stresskit.runs.cautions import STANDING
from tests.cli.small_study import write_small_study
from tests.program import stresskit
from tests.report.browser.chromium import Chromium
from tests.report.report_samples import sample

MARK = "window.ran=(window.ran||0)+1"
PRODUCTS = (
    f"<script>{MARK}</script>",
    f"<img src=x onerror={MARK}>",
    f'"><svg onload={MARK}>',
    "=1+1",
)
TURNS = "\x1b[31mred\x1b[0m \u202etfel"
REGIONS = ("a & b 'c' \"d\"", "北海道 Ärger", "long" * 60, f"</script><script>{MARK}//", "javascript:" + MARK)


@pytest.fixture(scope="module")
def hostile(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("hostile") / "re port & 'x' <b>.html"
    result = sample(products=PRODUCTS, regions=REGIONS, steps=12)
    bad = PRODUCTS[0]
    renamed = {"deep_recession": bad, "rates_up": "rates 'up' & <i>away</i>"}
    tables = {
        name: getattr(result, name).assign(scenario=getattr(result, name)["scenario"].replace(renamed))
        for name in ("summary", "segments", "paths", "features")
    }
    hard = {"policy_rate": PRODUCTS[1]}
    tables["paths"] = tables["paths"].assign(variable=tables["paths"]["variable"].replace(hard))
    tables["features"] = tables["features"].assign(
        feature=tables["features"]["feature"].replace({"house_price_growth": PRODUCTS[2]})
    )
    responses = result.hazard_by_macro
    assert responses is not None
    tables["hazard_by_macro"] = responses.assign(
        feature=responses["feature"].replace({"house_price_growth": PRODUCTS[2]})
    )
    result = dataclasses.replace(result, **tables, cautions=(*PRODUCTS, *STANDING))
    write_report(result, path)
    return path


@pytest.mark.parametrize("width", [1280, 420])
def test_nothing_of_a_name_runs_and_every_name_is_shown(browser: Chromium, hostile: Path, width: int) -> None:
    browser.size(width, 900)
    browser.media("")
    browser.open(hostile)
    assert browser.value("window.ran") is None
    assert browser.complaints() == []
    assert len(browser.requests()) == 1
    assert browser.value("document.scripts.length") == 1
    assert browser.value("document.images.length") == 0
    words = str(browser.value("document.body.textContent"))
    for name in (*PRODUCTS, *REGIONS):
        assert name in words, name
    assert browser.value("document.documentElement.scrollWidth") <= width


def test_switch_and_readout_take_such_names_as_text(browser: Chromium, hostile: Path) -> None:
    browser.size(1280, 900)
    browser.media("")
    browser.open(hostile)
    browser.click("#switch summary")
    browser.click("#switch label:has(input[value='0'])")
    assert PRODUCTS[0] in browser.value("document.getElementById('switch-state').textContent")
    browser.value("document.querySelector('#switch select').value = '3'")
    browser.value(
        "document.querySelector('#switch select').dispatchEvent(new Event('change', {bubbles: true}))"
    )
    chosen = browser.value("document.querySelector('#switch select').selectedOptions[0].textContent")
    assert str(browser.value("document.getElementById('switch-state').textContent")).endswith(chosen)
    browser.point("svg[aria-label^='Cumulative PD of the book']", 0.5, 0.5)
    assert PRODUCTS[0] in browser.value("document.querySelector('.tip').textContent")
    assert browser.value("document.querySelector('.tip').querySelectorAll('script,img,svg').length") == 0
    assert browser.value("window.ran") is None
    assert browser.complaints() == []


@pytest.fixture(scope="module")
def computed(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, subprocess.CompletedProcess[str]]:
    """The small study of the commands' tests with such names in its loan file, in a folder with such a name."""
    folder = tmp_path_factory.mktemp("engine") / "a folder & 'its' <b>name"
    folder.mkdir()
    study = write_small_study(folder, loans=250)
    loans = pd.read_csv(folder / "loans.csv")
    loans["product"] = loans["product"].map({"fixed": PRODUCTS[0], "floating": PRODUCTS[3]})
    loans["place"] = loans["place"].map({"east": TURNS, "west": PRODUCTS[2]})
    loans["id"] = "<i>" + loans["id"] + "</i>"
    loans.rename(columns={"place": 'pl"ace <u>'}).to_csv(folder / "loans.csv", index=False)
    text = study.read_text()
    for old, new in (("fixed", PRODUCTS[0]), ("floating", PRODUCTS[3])):
        text = text.replace(f"reference: {old}", f"reference: {json.dumps(new)}").replace(
            f"{old}: 0.", f"{json.dumps(new)}: 0."
        )
    study.write_text(text.replace("[product, place]", """[product, 'pl"ace <u>']"""))
    done = stresskit("run", study, "--out", folder / "my run", "--no-evidence", cwd=folder)
    return folder / "my run", done


@pytest.mark.slow
def test_a_computed_report_shows_such_names_as_text(
    browser: Chromium, computed: tuple[Path, subprocess.CompletedProcess[str]]
) -> None:
    run, done = computed
    assert done.returncode == 0, done.stderr
    # a terminal gets to see the names, not to obey them
    assert "\x1b" not in done.stdout + done.stderr
    assert "=1+1" in done.stdout
    browser.size(1280, 900)
    browser.media("")
    browser.open(run / "report.html")
    assert browser.value("window.ran") is None
    assert browser.complaints() == []
    assert len(browser.requests()) == 1
    assert browser.value("document.querySelectorAll('main u, main i:not(.tip i), main img').length") == 0
    words = str(browser.value("document.body.textContent"))
    for name in (PRODUCTS[0], PRODUCTS[2], PRODUCTS[3], 'pl"ace <u>', "␛[31mred␛[0m \ufffdtfel"):
        assert name in words, name
    assert "\x1b" not in words
    assert "\u202e" not in words
