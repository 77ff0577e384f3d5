"""Where a screen's lanes come from: logs that are played, logs that grow."""

from __future__ import annotations

import gzip
from pathlib import Path
from typing import Any

import pytest

from monitor.bench import parse
from monitor.blocks import Event
from monitor.findings import Finding, in_order
from monitor.logbook.reader import LogError
from monitor.replay import open_logs, replay
from monitor.screen import followed, growing
from monitor.screen.followed import LiveSource
from monitor.screen.replayed import ReplaySource
from monitor.screen.source import ActError
from monitor.view import Lane
from tests.screen import invented

DOSE = Event(120.0, "dose", {"tank": "t1", "liquid": "saline", "volume_ml": 120.0, "id": "d1"})
LANDS_PCT = (0.08 * 1200 + 0.15 * 120) / 1320


@pytest.fixture(scope="module")
def text() -> str:
    return invented.log_text(
        invented.bench(),
        salinity=invented.dosed(123.0, LANDS_PCT),
        events=[DOSE],
        factor=invented.bubbles(210.0, 280.0),
    )


@pytest.fixture
def log(text: str, tmp_path: Path) -> str:
    return invented.saved(tmp_path, text)


def findings_of(paths: list[str]) -> list[Finding]:
    """What a replay says, outlooks aside."""
    told = [each for batch in replay(open_logs(paths, None)) for each in batch]
    return [each for each in told if each["finding"] != "outlook"]


def told(lanes: list[Lane]) -> list[Finding]:
    return in_order(each for lane in lanes for each in lane.told)


# Played


@pytest.mark.parametrize("stops", [[], [0.3, 17.0, 123.456, 250.0]])
def test_played_in_any_steps_it_says_what_a_replay_says(log: str, stops: list[float]) -> None:
    source = ReplaySource([log])
    for stop in [*stops, 1e9]:
        source.seek(stop)
        source.advance()
    assert told(source.lanes) == findings_of([log])
    assert source.now_s == source.end_s


def test_play_moves_by_the_time_that_passes(log: str, monkeypatch: pytest.MonkeyPatch) -> None:
    source = ReplaySource([log], speed=10.0)
    now = [100.0]
    monkeypatch.setattr("monitor.screen.replayed.time.monotonic", lambda: now[0])
    source.poll()
    now[0] += 2.5
    monkeypatch.setattr("monitor.screen.replayed.BUDGET_S", 10.0)
    source.poll()
    assert source.now_s == pytest.approx(25.0)
    source.playing = False
    now[0] += 5.0
    source.poll()
    assert source.now_s == pytest.approx(25.0)
    assert source.status == "paused"


def test_back_in_time_is_as_if_it_had_never_been_further(log: str) -> None:
    source, fresh = ReplaySource([log]), ReplaySource([log])
    for each, stops in ((source, (280.0, 150.0)), (fresh, (150.0,))):
        for stop in stops:
            each.seek(stop)
            each.advance()
    assert source.now_s == 150.0
    assert told(source.lanes) == told(fresh.lanes)
    assert source.lanes[0].value == fresh.lanes[0].value
    assert not source.lanes[0].spans  # the bubbles are yet to come


def test_the_next_finding_stops_play_where_it_was_concluded(log: str) -> None:
    rest = next(f for f in findings_of([log]) if f["finding"] == "rest")
    source = ReplaySource([log])
    source.seek(100.0)
    source.advance()
    source.next_finding()
    source.advance()
    assert rest["t"] < source.now_s <= rest["t"] + 1.0
    assert source.lanes[0].rest == rest
    assert not source.playing
    source.next_finding()
    source.advance()
    assert source.lanes[0].faults
    assert source.lanes[0].faults[0]["fault"] == "bubbles"


def test_after_the_last_finding_it_stops_at_the_end(tmp_path: Path) -> None:
    calm = invented.log_text(invented.bench(), length_s=60.0)
    source = ReplaySource([invented.saved(tmp_path, calm)])
    source.next_finding()
    source.advance()
    assert source.now_s == source.end_s


def test_several_probes_have_a_lane_each(tmp_path: Path) -> None:
    settings = invented.bench(3)
    paths = [
        invented.saved(tmp_path, invented.log_text(settings, name, 60.0), name)
        for name in ("p1", "p2", "p3")
    ]
    source = ReplaySource(paths)
    source.seek(1e9)
    source.advance()
    assert [(lane.probe, lane.tank) for lane in source.lanes] == [
        ("p1", "t1"),
        ("p2", "t2"),
        ("p3", "t3"),
    ]
    assert all(lane.begun for lane in source.lanes)


def test_a_tank_that_nobody_watches_is_told_on_its_lane(tmp_path: Path) -> None:
    events = [Event(100.0, "out", {"why": "wipe"}), Event(900.0, "back", {})]
    log = invented.log_text(invented.bench(), length_s=1000.0, events=events)
    paths = [invented.saved(tmp_path, log)]
    source = ReplaySource(paths)
    source.seek(800.0)
    source.advance()
    assert source.lanes[0].lasting["unwatched", ""]["from_t"] == 100.0
    source.seek(1e9)
    source.advance()
    assert not source.lanes[0].lasting
    assert told(source.lanes) == findings_of(paths)


def test_another_bench_is_held_against_the_first(log: str) -> None:
    narrower = invented.bench_text().replace("aim_pct = [0.07, 0.10]", "aim_pct = [0.07, 0.085]")
    source = ReplaySource([log], against=parse(narrower))
    source.seek(1e9)
    source.advance()
    first, second = source.lanes
    assert (first.label, second.label) == ("t1", "B: t1")
    assert told([first]) == findings_of([log])
    assert not [f for f in first.told if f["finding"] == "limit"]
    assert [f for f in second.told if f["finding"] == "limit"]
    assert first.value == second.value


def test_another_night_begins_at_the_same_time(log: str, text: str, tmp_path: Path) -> None:
    folder = tmp_path / "other"
    folder.mkdir()
    later = text.replace("# started: 2026-03-14", "# started: 2026-04-01")
    source = ReplaySource([log], beside=[invented.saved(folder, later)])
    source.seek(200.0)
    source.advance()
    first, second = source.lanes
    assert second.label == "B: t1"
    assert first.t == second.t
    assert [d.time_s for d in second.doses] == [120.0]
    assert told([first]) == told([second])


def test_a_log_without_settings_asks_for_a_bench(tmp_path: Path) -> None:
    text = "# stillbrine log 1\n# probe: p1\n# started: 2026-03-14T18:00:00Z\n"
    path = invented.saved(tmp_path, text + "time_s,period_us,temp_c\n0.000,900.0,25.0\n")
    with pytest.raises(LogError, match=r"^p1.*no bench event in it; expected --bench BENCH"):
        ReplaySource([path])
    assert ReplaySource([path], invented.bench()).lanes


async def test_a_recording_takes_no_orders(log: str) -> None:
    with pytest.raises(ActError, match="recording"):
        await ReplaySource([log]).order("dose", {}, "p1")


# Growing


@pytest.fixture
def live(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Any:
    monkeypatch.setattr(growing, "LOOK_S", 0.0)
    monkeypatch.setattr(followed, "BUDGET_S", 10.0)

    def make(n: int = 1, orders: bool = True) -> LiveSource:
        return LiveSource(invented.bench(n), tmp_path, tmp_path / "none.sock", "b", orders)

    return make


@pytest.mark.parametrize("step", [977, 5_000, 1_000_000])
def test_a_log_that_grows_says_what_its_replay_says(
    live: Any, text: str, tmp_path: Path, step: int
) -> None:
    path = Path(invented.saved(tmp_path, ""))
    source = live()
    data = text.encode()
    with path.open("ab", buffering=0) as file:
        for at in range(0, len(data), step):
            file.write(data[at : at + step])
            source.poll()
    source.poll()
    assert source.caught_up
    assert told(source.lanes) == findings_of([str(path)])
    assert source.started == invented.STARTED


def test_it_waits_for_a_log_that_is_not_there_yet(live: Any, text: str, tmp_path: Path) -> None:
    source = live()
    source.poll()
    assert source.status == "no log of b yet: start `stillbrine run`"
    assert not source.lanes[0].begun
    invented.saved(tmp_path, text)
    source.poll()
    assert source.lanes[0].begun


def test_it_goes_on_with_the_runs_next_part(live: Any, text: str, tmp_path: Path) -> None:
    invented.saved(tmp_path, text)
    source = live()
    source.poll()
    after = invented.log_text(
        invented.bench(),
        length_s=400.0,
        salinity=lambda t: t * 0 + LANDS_PCT,
        part=2,
        first_s=300.0,
        seed=2,
    )
    invented.saved(tmp_path, after, part=2)
    for _ in range(3):
        source.poll()
    assert source.lanes[0].t == 399.0
    assert source.lanes[0].trace.seconds.first_t == 0.5


def test_a_part_that_was_packed_meanwhile_is_read_as_well(
    live: Any, text: str, tmp_path: Path
) -> None:
    path = Path(invented.saved(tmp_path, text))
    Path(f"{path}.gz").write_bytes(gzip.compress(path.read_bytes()))
    path.unlink()
    after = invented.log_text(invented.bench(), length_s=400.0, part=2, first_s=300.0)
    invented.saved(tmp_path, after, part=2)
    source = live()
    for _ in range(3):
        source.poll()
    assert source.lanes[0].trace.seconds.first_t == 0.5
    assert source.lanes[0].t == 399.0


def test_a_file_that_is_no_log_stops_nothing(live: Any, text: str, tmp_path: Path) -> None:
    path = Path(invented.saved(tmp_path, text))
    (tmp_path / path.name.replace("-001", "-002")).write_bytes(b"\x00 no log\n")
    source = live()
    for _ in range(2):
        source.poll()
    assert source.lanes[0].t == 299.0


def test_a_log_that_was_cut_back_is_judged_anew(live: Any, text: str, tmp_path: Path) -> None:
    path = Path(invented.saved(tmp_path, text))
    source = live()
    source.poll()
    path.write_text(text[: text.rindex("\n200.000,") + 1])
    for _ in range(3):
        source.poll()
    assert source.lanes[0].t == 199.0
    assert told(source.lanes) == findings_of([str(path)])


def test_all_lanes_come_along_while_much_is_to_be_read(
    live: Any, text: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    for name in ("p1", "p2", "p3"):
        long = invented.log_text(invented.bench(3), name, length_s=3000.0)
        invented.saved(tmp_path, long, name)
    source = live(3)
    monkeypatch.setattr(followed, "BUDGET_S", 0.0)
    source.poll()
    assert not source.caught_up
    assert all(lane.begun for lane in source.lanes)
    while not source.caught_up:
        source.poll()
    assert [lane.t for lane in source.lanes] == [2999.0] * 3


def test_a_service_that_is_silent_is_told(live: Any, log: str, monkeypatch: Any) -> None:
    source = live()
    source.poll()
    assert source.trouble == ""
    monkeypatch.setattr(followed, "DEAD_S", -1.0)
    assert source.trouble.startswith("NOTHING IS RECORDED")


async def test_an_order_without_a_service_is_refused_in_one_line(live: Any, log: str) -> None:
    source = live()
    with pytest.raises(ActError, match="no service runs on this bench file"):
        await source.order("note", {"text": "x"}, "p1")
    source.close()


async def test_who_only_watches_gives_no_orders(live: Any) -> None:
    with pytest.raises(ActError, match="only watches"):
        await live(orders=False).order("note", {"text": "x"}, "p1")
