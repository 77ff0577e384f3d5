"""Lines at line rate: the short form of `tests/speed/ingest.py`."""

from __future__ import annotations

from tests.speed.ingest import measure


def test_no_row_is_lost_at_line_rate() -> None:
    figures = measure(4, 2304.0, 6.0)
    assert figures["bytes_nobody_took"] == 0
    assert figures["rows_in_logs"] == figures["rows_sent"] == 4 * 6 * 2304
    assert figures["cpu_share"] < 4 / 16  # of one core, which 16 ports may take
