"""Kill -9 at random moments under load: the short form of `tests/soak/kill.py`."""

from __future__ import annotations

from pathlib import Path

from tests.soak.kill import rounds


def test_nothing_is_lost_but_the_last_moment(tmp_path: Path) -> None:
    done = rounds(8, tmp_path, seed=3)
    assert len(done) == 8
