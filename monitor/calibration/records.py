"""Standards in text: from a table of readings already taken, and into the bench file.

The bench file keeps every byte it had: new standards stand at its end, as a set of their own.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping, Sequence
from typing import Any

from monitor.bench import Bench, BenchError, Standard, parse
from monitor.calibration.calibration import CalibrationError

NUMBERS = ("salinity_pct", "period_us", "sd_us", "temp_c", "salinity_u_pct")
NEEDED = ("salinity_pct", "period_us")
COLUMNS = (*NUMBERS, "readings", "taken", "lot")
ORDER = ("set", "salinity_pct", "salinity_u_pct", "period_us", "sd_us", "readings", "temp_c")


def standards_from_csv(text: str, file: str) -> list[dict[str, Any]]:
    """Standards from a table, a row each; columns by name, as the bench file names them.

    Raises CalibrationError: file, line, what is wrong, what is expected.
    """
    lines = [line for line in text.lstrip("\ufeff").splitlines() if not line.startswith("#")]
    table = csv.DictReader(io.StringIO("\n".join(lines)))
    names = [name.strip() for name in table.fieldnames or ()]
    table.fieldnames = names
    for name in NEEDED:
        if name not in names:
            raise CalibrationError(f"{file}: column {name} missing; expected {', '.join(COLUMNS)}")
    for name in names:
        if name not in COLUMNS:
            raise CalibrationError(
                f"{file}: column {name[:40]!r} unknown; expected {', '.join(COLUMNS)}"
            )
    found = [_row(row, f"{file}: row {i}") for i, row in enumerate(table, 1)]
    if not found:
        raise CalibrationError(f"{file}: no rows; expected one a reading of a standard")
    return found


def _row(row: Mapping[str | None, Any], place: str) -> dict[str, Any]:
    if None in row or None in row.values():
        raise CalibrationError(f"{place}: another number of columns than the head")
    fields: dict[str, Any] = {}
    for name, text in row.items():
        text = text.strip()
        if not name or not text:
            continue
        try:
            fields[name] = _value(name, text)
        except ValueError:
            raise CalibrationError(f"{place}: {name}: {text[:40]!r} is no number") from None
    try:
        checked = Standard(**fields)
    except ValueError as wrong:
        said = " ".join(str(wrong).split("\n")[1:3]).split("[")[0].strip()
        raise CalibrationError(f"{place}: {said}") from None
    kept: dict[str, Any] = checked.model_dump(mode="json", exclude_none=True, exclude_unset=True)
    return kept


def _value(name: str, text: str) -> float | int | str:
    if name == "readings":
        return int(text)
    return float(text) if name in NUMBERS else str(text)


def set_name(bench: Bench, probe: str, date: str) -> str:
    """A name for a new set: the date, with a letter where that is taken."""
    settings = bench.probe.get(probe)
    used = {standard.set for standard in settings.standard} if settings else set()
    letters: list[str] = ["", *"bcdefghijklmnopqrstuvwxyz"]
    for letter in letters:
        if date + letter not in used:
            return date + letter
    return f"{date}-{len(used)}"


def with_standards(
    text: str, file: str, probe: str, standards: Sequence[Mapping[str, Any]], name: str
) -> str:
    """The bench file's text with these standards at its end, as the set `name`.

    Raises
    ------
    BenchError
        If the file does not check, before or with them.
    """
    import tomlkit

    before = parse(text, file)
    out = text if not text or text.endswith("\n") else text + "\n"
    for standard in standards:
        table = tomlkit.table()
        for key in sorted({**standard, "set": name}, key=_place):
            table.add(key, name if key == "set" else standard[key])
        out += f"\n[[probe.{probe}.standard]]\n{table.as_string()}"
    try:
        after = parse(out, file)
    except BenchError as wrong:
        if wrong.place == "TOML":
            raise BenchError(
                file,
                f"probe.{probe}.standard",
                "cannot be added to as it is written",
                f"[[probe.{probe}.standard]] tables",
            ) from None
        raise
    old = before.probe[probe].standard
    assert after.probe[probe].standard[: len(old)] == old
    return out


def new_bench(probe: str, port: str | None, medium: str, tick_us: float) -> str:
    """Text of the smallest bench file, to begin a calibration with."""
    import tomlkit

    lines = [f"[probe.{probe}]"]
    if port is not None:
        lines.append(f"port = {tomlkit.item(port).as_string()}")
    lines += [f'tank = "{probe}-tank"', f'medium = "{medium}"', f"tick_us = {tick_us!r}", ""]
    lines += [f"[tank.{probe}-tank]", "rest_band_pct = 0.001  # at rest = stays within +- this"]
    return "\n".join(lines) + "\n"


def _place(key: str) -> tuple[int, str]:
    return (ORDER.index(key), key) if key in ORDER else (len(ORDER), key)
