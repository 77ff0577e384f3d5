"""The bench file as checked, frozen settings.

`parse` turns TOML text into a Bench or raises BenchError: one line that names the file, the key,
what is wrong and what is expected. `for_probe` gives the part that one probe runs on, which is
what a `bench` event of the log holds; `from_event` reads it back.
"""

from __future__ import annotations

import difflib
import re
import tomllib
from collections.abc import Mapping
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError, field_validator, model_validator

NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9_-]{0,31}")
MAX_BYTES = 1_000_000
SALINITY_MAX_PCT = 26.0  # solubility of NaCl in water near 20 C, mass per cent

Positive = Annotated[float, Field(gt=0, le=1e9)]
NonNegative = Annotated[float, Field(ge=0, le=1e9)]
Salinity = Annotated[float, Field(ge=0, le=SALINITY_MAX_PCT)]
Celsius = Annotated[float, Field(ge=-5, le=60)]
Label = Annotated[str, Field(max_length=200)]


class BenchError(ValueError):
    """The bench file does not check. `str()` is the one line to show."""

    def __init__(self, file: str, place: str, wrong: str, expected: str) -> None:
        super().__init__(f"{file}: {place}: {wrong}; expected {expected}")
        self.place = place


class _Table(BaseModel):
    model_config = ConfigDict(
        extra="forbid",
        frozen=True,
        strict=True,
        allow_inf_nan=False,
        populate_by_name=True,
        defer_build=True,
    )


class Standard(_Table):
    """One reading of one standard."""

    salinity_pct: Salinity
    period_us: Positive
    sd_us: NonNegative | None = None
    readings: Annotated[int, Field(ge=1, le=10_000_000)] = 1
    temp_c: Celsius | None = None
    salinity_u_pct: NonNegative | None = None
    taken: str | None = None
    lot: Label | None = None
    set: Annotated[str, Field(max_length=64)] | None = None

    @field_validator("taken", mode="before")
    @classmethod
    def _date_as_text(cls, value: Any) -> Any:
        return value.isoformat() if hasattr(value, "isoformat") else value


class Probe(_Table):
    """A probe: where it is plugged in, what it reads, in which tank it hangs."""

    tank: str
    port: str | None = None
    label: Label = ""
    baud: Annotated[int, Field(ge=300, le=4_000_000)] = 115200
    period_unit: Literal["us", "ms", "s", "counts"] = "us"
    tick_hz: Positive | None = None
    medium: Literal["NaCl", "sea salt"] = "NaCl"
    tick_us: NonNegative = 1.0
    rate_hz: Annotated[float, Field(gt=0, le=2500)] | None = None
    median_s: Annotated[float, Field(gt=0, le=60)] = 1.0
    ewma_s: Annotated[float, Field(gt=0, le=600)] = 3.0
    temp_c: Celsius | None = None
    temp_u_c: NonNegative | None = None
    reset_on_open: bool = False
    standard: tuple[Standard, ...] = ()

    @field_validator("standard", mode="before")
    @classmethod
    def _as_tuple(cls, value: Any) -> Any:
        return tuple(value) if isinstance(value, list) else value

    @model_validator(mode="after")
    def _counts_need_a_clock(self) -> Probe:
        if self.period_unit == "counts" and self.tick_hz is None:
            raise ValueError('period_unit "counts" needs tick_hz, the clock that is counted')
        if self.port is not None and not re.match(r"(/dev/|socket://[^/\s:]+:\d{1,5}$)", self.port):
            raise ValueError("port is a device below /dev/ or socket://host:port, nothing else")
        return self

    @property
    def standards_in_force(self) -> tuple[Standard, ...]:
        """The latest set: the last-named `set`, or all standards where none is named."""
        if not self.standard:
            return ()
        latest = self.standard[-1].set
        return tuple(s for s in self.standard if s.set == latest)


class Tank(_Table):
    """A tank: its volume, how a dose changes it, and what is wanted of it."""

    rest_band_pct: Annotated[float, Field(gt=0, le=5)]
    volume_ml: Positive | None = None
    volume_u_ml: NonNegative = 0.0
    mode: Literal["grows", "overflows"] = "grows"
    label: Label = ""
    aim_pct: tuple[Salinity, Salinity] | None = None
    fastest_pct_per_h: Positive | None = None

    @field_validator("aim_pct", mode="before")
    @classmethod
    def _as_tuple(cls, value: Any) -> Any:
        return tuple(value) if isinstance(value, list) else value

    @field_validator("mode", mode="before")
    @classmethod
    def _overflow_too(cls, value: Any) -> Any:
        return "overflows" if value == "overflow" else value

    @model_validator(mode="after")
    def _aim_in_order(self) -> Tank:
        if self.aim_pct and self.aim_pct[0] >= self.aim_pct[1]:
            raise ValueError("aim_pct is [lowest, highest], the first below the second")
        return self


class Liquid(_Table):
    """What is dosed."""

    salinity_pct: Salinity
    salinity_u_pct: NonNegative = 0.0
    label: Label = ""


class Valve(_Table):
    """A dosing valve and its timed runs: (open s, collected mL) each."""

    liquid: str
    runs: tuple[tuple[Positive, NonNegative], ...] = ()
    label: Label = ""

    @field_validator("runs", mode="before")
    @classmethod
    def _as_tuples(cls, value: Any) -> Any:
        if isinstance(value, list):
            return tuple(tuple(run) if isinstance(run, list) else run for run in value)
        return value


class Logs(_Table):
    """Where logs go and how long they are kept."""

    folder: str | None = None
    keep_days: Positive | None = None
    compress: bool = True
    free_mb: NonNegative = 500.0  # warned of when less is free


class Alarm(_Table):
    """Whom to tell, of what. `command` is an argument list, `notify` a file of addresses."""

    findings: tuple[str, ...] = ("limit", "fault", "belief", "unwatched", "notice")
    bell: bool = False
    command: tuple[str, ...] = ()
    notify: str | None = None
    repeat_min: Positive = 30.0
    escalate_min: Positive | None = None
    heartbeat_url_file: str | None = None

    @field_validator("findings", "command", mode="before")
    @classmethod
    def _as_tuple(cls, value: Any) -> Any:
        return tuple(value) if isinstance(value, list) else value


class Mqtt(_Table):
    """The broker that findings are published to; its secrets live in a file of mode 0600."""

    host: Annotated[str, Field(max_length=253, pattern=r"[A-Za-z0-9][A-Za-z0-9.:-]*")]
    port: Annotated[int, Field(ge=1, le=65535)] = 8883
    tls: bool = True
    ca_file: str | None = None
    secrets_file: str | None = None
    topic: Annotated[str, Field(max_length=128, pattern=r"[A-Za-z0-9_-]+(/[A-Za-z0-9_-]+)*")] = (
        "stillbrine"
    )


class Bench(_Table):
    """What the user has on the bench, whole and checked."""

    probe: dict[str, Probe] = {}
    tank: dict[str, Tank] = {}
    liquid: dict[str, Liquid] = {}
    valve: dict[str, Valve] = {}
    logs: Logs = Logs()
    alarm: dict[str, Alarm] = {}
    mqtt: Mqtt | None = None

    @model_validator(mode="after")
    def _hangs_together(self) -> Bench:
        for kind in ("probe", "tank", "liquid", "valve", "alarm"):
            for name in getattr(self, kind):
                if not NAME.fullmatch(name):
                    raise ValueError(
                        f"[{kind}.{name[:40]!r}] is no name|1 to 32 letters, digits, _ or -,"
                        " a letter or digit first"
                    )
        for name, probe in self.probe.items():
            _needs_known(f"probe.{name}.tank", probe.tank, self.tank)
        for name, valve in self.valve.items():
            _needs_known(f"valve.{name}.liquid", valve.liquid, self.liquid)
        ports = [p.port for p in self.probe.values() if p.port]
        for port in ports:
            if ports.count(port) > 1:
                raise ValueError(f"two probes on port {port}|one probe a port")
        return self

    def for_probe(self, name: str) -> Bench:
        """The part that this probe runs on: itself, its tank, all liquids and valves."""
        probe = self.probe[name]
        return Bench(
            probe={name: probe},
            tank={probe.tank: self.tank[probe.tank]},
            liquid=self.liquid,
            valve=self.valve,
        )

    def as_event(self) -> dict[str, Any]:
        """The settings as JSON-able fields of a `bench` event."""
        return self.model_dump(
            mode="json", exclude_none=True, exclude={"logs", "alarm", "mqtt"}, by_alias=True
        )


def _needs_known(place: str, name: str, known: Mapping[str, Any]) -> None:
    if name not in known:
        names = ", ".join(sorted(known)) or "none is defined"
        raise ValueError(f"{place}: no such name {name[:40]!r}|one of: {names}")


def parse(text: str, file: str = "bench file") -> Bench:
    """Settings from the text of a bench file.

    Raises
    ------
    BenchError
        If it is no TOML, or a key or value is wrong, missing or unknown.
    """
    if len(text) > MAX_BYTES:
        raise BenchError(file, "whole file", "too large", "at most 1 MB")
    try:
        tables = tomllib.loads(text)
    except tomllib.TOMLDecodeError as wrong:
        raise BenchError(file, "TOML", str(wrong), "valid TOML") from None
    return _checked(tables, file)


def from_event(fields: Mapping[str, Any]) -> Bench:
    """Settings from the fields of a `bench` event. Raises BenchError."""
    return _checked(dict(fields), "bench event")


def _checked(tables: dict[str, Any], file: str) -> Bench:
    try:
        return Bench.model_validate(tables)
    except ValidationError as wrong:
        raise _one_line(wrong, file) from None


def _one_line(wrong: ValidationError, file: str) -> BenchError:
    """The first error of pydantic's list, in one line, with what was expected."""
    first = wrong.errors(include_url=False)[0]
    place = ".".join(_step(part) for part in first["loc"]) or "bench"
    if first["type"] == "extra_forbidden":
        return BenchError(file, place, "unknown key", _nearest(first["loc"]))
    if first["type"] == "missing":
        return BenchError(file, place, "missing", "this key to be given")
    if first["type"] == "value_error":
        said, _, expected = str(first["ctx"]["error"]).partition("|")
        return BenchError(file, place, said, expected or "as said")
    said = first["msg"][0].lower() + first["msg"][1:]
    got = repr(first["input"])
    got = got if len(got) <= 40 else got[:37] + "..."
    return BenchError(file, place, f"{got} is not accepted", said.replace("input should be ", ""))


def _step(part: int | str) -> str:
    return str(part + 1) if isinstance(part, int) else part


_TABLES: dict[str, type[_Table]] = {
    "probe": Probe,
    "tank": Tank,
    "liquid": Liquid,
    "valve": Valve,
    "logs": Logs,
    "alarm": Alarm,
    "mqtt": Mqtt,
}


def _nearest(loc: tuple[int | str, ...]) -> str:
    """What the unknown key at this place may have been meant to be."""
    if len(loc) == 1:
        known = list(Bench.model_fields)
    elif "standard" in loc[:-1]:
        known = list(Standard.model_fields)
    else:
        known = list(_TABLES[str(loc[0])].model_fields)
    near = difflib.get_close_matches(str(loc[-1]), known, n=1, cutoff=0.5)
    return f"{near[0]}, perhaps" if near else "one of " + ", ".join(known)
