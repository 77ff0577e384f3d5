"""Memory does not follow the length of a log."""

from __future__ import annotations

from pathlib import Path

from tests.speed.logs import night
from tests.speed.measure import run, stillbrine

ALLOWED_MIB = 3.0  # the allocator has levelled off by twelve hours; rows kept would be 20


def peak_mib(log: Path, hours: float, doses: int) -> float:
    """Peak of a replay of a log of so many hours."""
    bench = night(log, rate_hz=5.0, hours=hours, doses=doses)
    return run(stillbrine("replay", log, "--bench", bench, "--findings")).peak_mib


def test_five_times_the_log_takes_no_more_memory(tmp_path: Path) -> None:
    short = peak_mib(tmp_path / "short.log", 12.0, 12)
    long = peak_mib(tmp_path / "long.log", 60.0, 60)
    assert 20.0 < short < 200.0  # it is the replay that was measured
    assert long - short < ALLOWED_MIB
