"""Options of the commands explain and reverse over the study's own section, and sections that contradict themselves."""

from __future__ import annotations

import pytest
from pydantic import ValidationError

from stresskit.cli_analyses import GONE, spec_with
from stresskit.cli_explain import _pairs
from stresskit.core.errors import UsageError
from stresskit.spec.analyses import Analyses


def analyses(text: str) -> Analyses:
    return Analyses.model_validate_json(text)


def test_a_percent_of_the_study_survives_an_option_of_the_command() -> None:
    own = analyses(
        '{"reverse": {"loss_rise": "7%", "afterwards": {"house_price_index": {"grow_by": "0.7%"}}}}'
    )
    spec = spec_with(own, "reverse", {"within": 2.0})
    assert spec.loss_rise == 0.07
    assert spec.within == 2.0
    assert spec.afterwards["house_price_index"].grow_by == pytest.approx(0.007, rel=1e-15)


def test_a_threshold_of_the_command_takes_the_place_of_the_studys() -> None:
    own = analyses('{"reverse": {"loss_rise": "50%", "periods": 8}}')
    spec = spec_with(own, "reverse", {"el": 5000.0, "loss_rise": GONE})
    assert (spec.el, spec.loss_rise, spec.periods) == (5000.0, None, 8)
    with pytest.raises(UsageError, match="give one threshold, not loss_rise and el"):
        spec_with(own, "reverse", {"el": 5000.0})


def test_pairs_of_the_command_line() -> None:
    assert _pairs(["product = floating", "region=north=west"], "--segment") == {
        "product": "floating",
        "region": "north=west",
    }
    assert _pairs(None, "--segment") is None
    with pytest.raises(
        UsageError, match=r"^--segment 'floating': expected name=value, such as product=floating$"
    ):
        _pairs(["floating"], "--segment")


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ('{"reverse": {"loss_rise": "-5%"}}', "a rise is above 0%"),
        ('{"reverse": {"pd_12m": "100%"}}', "a PD lies between 0% and 100%"),
        (
            '{"reverse": {"capital": {"amount": 5.0}, "segment": {"a": "b"}}}',
            "capital use is that of the whole book",
        ),
        ('{"reverse": {"surface": ["a", "a"]}}', "a surface needs two different variables"),
        ('{"reverse": {"loss_rise": 0.5}}', "write a relative change with a percent sign"),
        ('{"attribution": {"groups": {"g": []}}}', "group 'g' has no variable"),
        ('{"attribution": {"groups": {"g": ["a"], "h": ["b", "a"]}}}', "'a' is in group 'g' already"),
    ],
)
def test_sections_that_contradict_themselves_are_refused(text: str, message: str) -> None:
    with pytest.raises(ValidationError, match=message):
        analyses(text)
