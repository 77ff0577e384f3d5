"""`stillbrine check`: would this bench run, and would anyone notice if it did not?"""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from monitor.commands import Refusal, load_bench

if TYPE_CHECKING:
    from monitor.bench import Bench, Probe

ROW_BYTES = 24
NIGHT_S = 12 * 3600
ASSUMED_HZ = 10.0


def command(
    bench: Annotated[Path, typer.Argument(help="The bench file (TOML).")],
    listen: Annotated[
        float, typer.Option(help="Listen to each port for so many seconds; 0 opens none.")
    ] = 2.0,
) -> None:
    """Check a bench file, its ports, and whether a failure in the night would be noticed.

    Exit code 1 if something would keep it from running.

    Example: stillbrine check bench.toml
    """
    from monitor import cautions
    from monitor.printable import printable

    settings = load_bench(bench)
    bad = 0
    for good, text in [*_probes(settings, bench, listen), *_alarms(settings, bench)]:
        bad += not good
        typer.echo(f"{'ok ' if good else 'NO '} {printable(text, 300)}")
    for text in _notices(settings, bench):
        typer.echo(f"  - {printable(text, 300)}")
    for caution in cautions.RUN:
        typer.echo(f"  ! {caution}")
    if bad:
        raise Refusal(f"{bench.name}: {bad} of the above would keep it from running")


def _probes(bench: Bench, path: Path, listen: float) -> Iterator[tuple[bool, str]]:
    from monitor.calibration import CalibrationError
    from monitor.chain import calibration_of
    from monitor.commands.attached import attached

    if not bench.probe:
        yield False, "no probe is defined: add a [probe.NAME] table"
    for name, probe in bench.probe.items():
        try:
            calibration = calibration_of(bench, name)
        except CalibrationError as wrong:
            yield False, f"probe {name}: {wrong}"
        else:
            if calibration is None:
                yield True, f"probe {name}: no standards: faults and gaps, but no salinity yet"
            else:
                count = len(probe.standards_in_force)
                yield True, f"probe {name}: calibrated from {count} readings of standards"
                for remark in calibration.remarks:
                    yield True, f"probe {name}: {remark}"
        if probe.port is None:
            yield False, f"probe {name}: no port; needed to run, not to replay"
        elif listen > 0:
            service = attached(path, name)
            told = service.state if service is not None and service.reads else None
            good, said = _recorded(told) if told is not None else _heard(probe, listen)
            yield good, f"probe {name}: {probe.port}: {said}"


def _heard(probe: Probe, listen: float) -> tuple[bool, str]:
    from monitor.commands.listening import heard

    assert probe.port is not None
    said = heard(probe.port, probe.baud, listen, probe)
    return "readings/s" in said, said


def _recorded(told: Mapping[str, Any]) -> tuple[bool, str]:
    """What the service that has the port says of it."""
    if told.get("paused"):
        return False, f"the running service has it, but cannot write: {told['paused']}"
    if not told.get("linked"):
        return False, "the running service waits for it: is it plugged in?"
    return True, f"read by the service that runs, {told.get('rows')} readings so far"


def _alarms(bench: Bench, path: Path) -> Iterator[tuple[bool, str]]:
    from monitor.alarms import AlarmError, check_owner

    try:
        check_owner(path, bench.alarm)
    except AlarmError as wrong:
        yield False, str(wrong)


def _notices(bench: Bench, path: Path) -> Iterator[str]:
    """What would go unnoticed, and what to do about it."""
    for name, probe in bench.probe.items():
        port = probe.port or ""
        if port.startswith("socket://"):
            yield f"probe {name}: socket:// has no authentication: its whole network can feed it"
        elif port.startswith("/dev/tty") and len(bench.probe) > 1:
            yield (
                f"probe {name}: {port} may become another probe's at a reboot; use its name below"
                " /dev/serial/by-id/ (stillbrine ports)"
            )
    for name, tank in bench.tank.items():
        if tank.volume_ml is None:
            yield f"tank {name}: no volume_ml: doses cannot be predicted or judged"
        if tank.aim_pct is None:
            yield f"tank {name}: no aim_pct: nothing tells when it is out of its band"
        if tank.fastest_pct_per_h is None:
            yield f"tank {name}: no fastest_pct_per_h: nothing tells when it changes too fast"
    if not any(alarm.command or alarm.notify for alarm in bench.alarm.values()):
        yield "no [alarm.*] reaches a person away from the screen: add command or notify"
    if not bench.mqtt and not any(alarm.heartbeat_url_file for alarm in bench.alarm.values()):
        yield "a power cut or a dead machine would not be noticed: give mqtt or heartbeat_url_file"
    yield from _machine(bench, path)


def _machine(bench: Bench, path: Path) -> Iterator[str]:
    from monitor.places import logs_folder

    linger = Path("/var/lib/systemd/linger") / os.environ.get("USER", "root")
    if shutil.which("loginctl") and not linger.exists() and os.getuid() != 0:
        yield "a user service ends at logout: loginctl enable-linger"
    if shutil.which("systemd-inhibit") is None and Path("/sys/power/mem_sleep").exists():
        yield "a machine that sleeps records nothing, and nothing here keeps it awake"
    folder = logs_folder(bench, path, None)
    there = next(parent for parent in (folder, *folder.parents) if parent.exists())
    free = shutil.disk_usage(there).free
    rate = sum(probe.rate_hz or ASSUMED_HZ for probe in bench.probe.values())
    night = rate * ROW_BYTES * NIGHT_S
    if free < 2 * night + bench.logs.free_mb * 1e6:
        yield (
            f"disk: {free / 1e6:.0f} MB free below {there}, a night may take {night / 1e6:.0f} MB:"
            " it may not last"
        )
