"""Names that are markup, quotes, formulas or very long: a real browser shows them as text and runs nothing of them.

The names go through the report of the invented study, and through a study that the engine computes from files.
"""

from __future__ import annotations

import dataclasses
from pathlib import Path

import pytest

from stresskit.report.html import write_report
from stresskit.runs.cautions import STANDING
from tests.report.browser.chromium import Chromium
from tests.report.report_samples import sample

MARK = "window.ran=(window.ran||0)+1"
PRODUCTS = (
    f"<script>{MARK}</script>",
    f"<img src=x onerror={MARK}>",
    f'"><svg onload={MARK}>',
    "=1+1",
)
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
