"""The rules of husbandry that are warned with, against the table of what was published."""

from __future__ import annotations

from monitor.dosing.husbandry import FASTEST, SUGGESTIONS, crossed
from tests.reference.tables import checks, figures, rows


def test_suggestions_agree_with_the_rules_they_quote() -> None:
    checks("the sources in husbandry_salinity_rules.csv; ppt near 1 kg/L are tenths of a %")
    quoted = {
        round(float(rule[end]) / 10.0, 6)
        for rule in rows("husbandry_salinity_rules.csv")
        for end in ("low", "high")
        if rule[end] and rule["unit"] in ("ppt", "ppt/h", "g/L")
    }
    derived = figures("suggested_alarm_defaults.json")
    quoted.add(derived["rate_of_change"]["warn_ppt_per_h"] / 10.0)
    for suggestion in SUGGESTIONS:
        assert suggestion.value in quoted
        assert suggestion.which in ("high", "low", "fast")
        assert suggestion.source
        assert suggestion.confidence
    assert FASTEST.value == derived["rate_of_change"]["alarm_ppt_per_h"] / 10.0


def test_only_bounds_that_are_crossed_outwards_are_named() -> None:
    assert {rule.value for rule in crossed(0.04, 0.08)} == {0.05, 0.075}
    assert [rule.kept for rule in crossed(0.03, 0.02)] == ["zebrafish, adult, laboratory"]
    assert crossed(0.08, 0.04) == []
