"""The bench file: what checks, and the one line for what does not."""

from __future__ import annotations

import pytest

from monitor.bench import Bench, BenchError, from_event, parse

GOOD = """
[probe.p1]
port = "/dev/ttyUSB0"
tank = "t1"
[[probe.p1.standard]]
salinity_pct = 0.05
period_us = 916.2
taken = 2026-03-01
[tank.t1]
volume_ml = 1200
rest_band_pct = 0.001
aim_pct = [0.09, 0.11]
[liquid.saline]
salinity_pct = 0.15
[valve.saline]
liquid = "saline"
runs = [[1.0, 5.1], [2, 10.0]]
[logs]
keep_days = 30
"""


def test_a_good_file_checks_with_defaults() -> None:
    bench = parse(GOOD, "b.toml")
    probe = bench.probe["p1"]
    assert (probe.baud, probe.medium, probe.period_unit) == (115200, "NaCl", "us")
    assert bench.tank["t1"].aim_pct == (0.09, 0.11)
    assert bench.valve["saline"].runs == ((1.0, 5.1), (2.0, 10.0))
    assert probe.standard[0].taken == "2026-03-01"


def test_the_event_of_a_probe_reads_back_the_same() -> None:
    part = parse(GOOD, "b.toml").for_probe("p1")
    assert from_event(part.as_event()) == part
    assert "logs" not in part.as_event()


@pytest.mark.parametrize(
    ("change", "place", "said"),
    [
        (("tank = ", "tnak = "), "probe.p1", "tank"),
        (('tank = "t1"', 'tank = "t9"'), "probe.p1.tank", "one of: t1"),
        (("rest_band_pct = 0.001", ""), "rest_band_pct", "missing"),
        (("rest_band_pct = 0.001", "rest_band_pct = nan"), "rest_band_pct", "finite"),
        (("rest_band_pct = 0.001", 'rest_band_pct = "x"'), "rest_band_pct", "number"),
        (("volume_ml = 1200", "volume_ml = -1"), "volume_ml", "greater than 0"),
        (("/dev/ttyUSB0", "file:///etc/passwd"), "probe.p1", "socket://host:port"),
        (("/dev/ttyUSB0", "socket://h:1/x"), "probe.p1", "socket://host:port"),
        (("[tank.t1]", "[tank.'a b']"), "", "1 to 32 letters"),
        (("[0.09, 0.11]", "[0.11, 0.09]"), "tank.t1", "lowest, highest"),
        (("period_us", "period"), "standard.1", "period_us"),
        (("[liquid.saline]", "[liquid.saline"), "TOML", "valid TOML"),
        (("[logs]", "[lgos]"), "lgos", "logs, perhaps"),
    ],
)
def test_what_is_wrong_is_said_in_one_line(change: tuple[str, str], place: str, said: str) -> None:
    with pytest.raises(BenchError) as wrong:
        parse(GOOD.replace(*change), "b.toml")
    line = str(wrong.value)
    assert "\n" not in line
    assert line.startswith("b.toml: ")
    assert place in line
    assert said in line
    assert "expected" in line


def test_two_probes_on_one_port_are_refused() -> None:
    both = GOOD + '[probe.p2]\nport = "/dev/ttyUSB0"\ntank = "t1"\n'
    with pytest.raises(BenchError, match="two probes on port"):
        parse(both, "b.toml")


def test_the_latest_set_of_standards_is_in_force() -> None:
    standards = "".join(
        f'[[probe.p1.standard]]\nsalinity_pct = 0.1\nperiod_us = {p}\nset = "{s}"\n'
        for p, s in ((400.0, "may"), (401.0, "june"), (402.0, "june"))
    )
    text = '[probe.p1]\ntank = "t1"\n' + standards + "[tank.t1]\nrest_band_pct = 0.001\n"
    in_force = parse(text).probe["p1"].standards_in_force
    assert [s.period_us for s in in_force] == [401.0, 402.0]


def test_a_bench_is_frozen() -> None:
    with pytest.raises(ValueError, match="frozen"):
        Bench().probe = {}
