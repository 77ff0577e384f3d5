"""Rules of husbandry on salinity that somebody published: suggestions, each with its source.

They are to warn with, and first limits to start from. Species and life stages differ; the keeper,
a vet or the facility's licensed practice decides.
"""

from __future__ import annotations

from typing import NamedTuple


class Suggestion(NamedTuple):
    """A rule of husbandry that may serve as a first limit; the keeper must confirm it."""

    kept: str
    which: str  # high, low or fast
    value: float  # % by mass, fast: % by mass an hour
    source: str
    confidence: str


SUGGESTIONS = (
    Suggestion(
        "fish in general",
        "fast",
        0.1,
        "not more than 1 ppt/h: Indian Agricultural Statistics Research Institute, Fish health, "
        "Improper salinity (2011)",
        "medium: one teaching source, rule of thumb",
    ),
    Suggestion(
        "fish in general, early warning",
        "fast",
        0.05,
        "half of the 1 ppt/h rule",
        "derived",
    ),
    Suggestion(
        "fresh water",
        "high",
        0.05,
        "0.5 ppt bounds fresh water: same source (2011)",
        "medium",
    ),
    Suggestion(
        "zebrafish, adult, laboratory",
        "low",
        0.025,
        "0.25 to 0.75 ppt: humane-endpoints.info, ZebraVis, Physical factors in the environment",
        "medium: the same page's 250 to 600 uS/cm is only 0.12 to 0.29 ppt at 25 C",
    ),
    Suggestion(
        "zebrafish, adult, laboratory",
        "high",
        0.075,
        "0.25 to 0.75 ppt: humane-endpoints.info, ZebraVis, Physical factors in the environment",
        "medium: the same page's 250 to 600 uS/cm is only 0.12 to 0.29 ppt at 25 C",
    ),
    Suggestion(
        "fresh-water fish, lasting salt treatment",
        "low",
        0.1,
        "1 to 3 g/L supportive treatment: common veterinary rule, from memory",
        "low",
    ),
    Suggestion(
        "fresh-water fish, lasting salt treatment",
        "high",
        0.3,
        "1 to 3 g/L supportive treatment: common veterinary rule, from memory",
        "low",
    ),
    Suggestion(
        "whiteleg shrimp, low salinity",
        "low",
        0.15,
        "over 85 % of post-larvae live above 1.5 ppt: Jayasankar et al., JARQ 43(4), 345 (2009)",
        "high",
    ),
    Suggestion(
        "any short bath",
        "high",
        3.0,
        "30 ppt dip: Francis-Floyd, The Use of Salt in Aquaculture, UF/IFAS VM 86 (1995)",
        "high",
    ),
)


def crossed(now_pct: float, lands_pct: float) -> list[Suggestion]:
    """Bounds that a change of salinity, in %, leads across, outwards."""
    return [
        rule
        for rule in SUGGESTIONS
        if (rule.which == "high" and now_pct <= rule.value < lands_pct)
        or (rule.which == "low" and lands_pct < rule.value <= now_pct)
    ]


FASTEST = next(rule for rule in SUGGESTIONS if rule.which == "fast")
