"""What the program concludes: records as plain dicts, their order within a second, their JSON line.

Inside the program a finding is a dict whose key `finding` names it; figures stay unrounded until
`line` prints them.
"""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Mapping
from typing import Any

Finding = dict[str, Any]

ORDER = ("fault", "belief", "rest", "outlook", "trend", "limit", "unwatched", "notice")
TIMES = ("t", "from_t", "to_t", "dose_t", "rested_t")
_RANK = {name: i for i, name in enumerate(ORDER)}
_NAMED_BY = {"fault": "fault", "belief": "belief", "limit": "which", "notice": "what"}


def rank(finding: Mapping[str, Any]) -> tuple[float, int, str, str]:
    """Sort key: time, kind, then by name (of the fault, limit, notice; of probe or tank)."""
    kind = finding["finding"]
    named = str(finding.get(_NAMED_BY.get(kind, ""), ""))
    whose = str(finding.get("probe") or finding.get("tank") or "")
    return finding["t"], _RANK[kind], whose, named


def in_order(findings: Iterable[Finding]) -> list[Finding]:
    """The findings of one log or several in the order in which they are told."""
    return sorted(findings, key=rank)


def shifted(finding: Finding, by_s: float) -> Finding:
    """The same finding with its times counted from another `started`."""
    moved = {key: finding[key] + by_s for key in TIMES if finding.get(key) is not None}
    return {**finding, **moved}


def _figure(key: str, value: Any) -> Any:
    if isinstance(value, bool) or not isinstance(value, float | int):
        return value
    if not math.isfinite(value):
        return None
    if key in TIMES or key.endswith("_s"):
        return round(float(value), 3)
    if key.endswith("_pct"):
        return round(float(value), 6)
    return float(f"{value:.6g}") if isinstance(value, float) else value


def line(finding: Mapping[str, Any]) -> str:
    """The finding as one line of ASCII JSON, times to 0.001 s, salinities to 1e-6 %."""
    return json.dumps({key: _figure(key, value) for key, value in finding.items()})
