"""The landing view: a tank's past on two thirds of the width, what is expected on the last.

Painted in this order: aim band, readings that are not the tank's, raw readings, what was expected
before, the trace, the cone, marks and words.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from monitor.findings import Finding
from monitor.screen import axis, figures, inks, text
from monitor.screen.axis import Axis
from monitor.screen.draw import Canvas, Columns, Run, nice_bounds, nice_step
from monitor.screen.figures import Clock, Scale
from monitor.view import Lane

MARGIN = 10
RAW_SPAN_S = 900.0  # up to here single readings are drawn
LEAST_BANDS = 6.0  # the scale spans at least so many rest bands


@dataclass(frozen=True)
class Plan:
    """A dose that is thought of: where it would land, %."""

    salinity_pct: float
    u95_pct: float


def picture(
    lane: Lane,
    on: Axis,
    height: int,
    clock: Clock,
    scale: Scale,
    cursor_t: float | None = None,
    plan: Plan | None = None,
    mono: bool = False,
) -> list[list[Run]]:
    """`height` rows: the plot, what happened beneath it, the axis of time."""
    past, faint = axis.columns(lane, on)
    low, high = bounds(lane, on, past, plan)
    canvas = Canvas(on.width, max(height - 2, 1), low, high)
    if lane.aim is not None:
        canvas.band(*lane.aim, inks.AIM, inks.FAINT, "┄" if mono else "")
    if faint is not None:
        canvas.curve(faint, inks.FAINT)
    _raw(canvas, lane, on)
    _expected_before(canvas, lane, on)
    canvas.curve(past, inks.TRACE)
    for first, last in faulty(lane, on):
        canvas.recolour(first, last, inks.TRACE, inks.DOUBT)
    if plan is not None:
        _landing(canvas, on, lane, plan.salinity_pct, plan.u95_pct, None, inks.PLAN)
    else:
        _future(canvas, lane, on, clock)
    _marks(canvas, lane, on, cursor_t)
    rows = _labelled(canvas, scale)
    rows.append(happenings(lane, on))
    rows.append(axis.labels(on, clock, MARGIN))
    return rows


def expected(lane: Lane) -> Finding | None:
    """The outlook that holds now; None where the probe tells nothing of the tank."""
    gone = lane.belief == "not-believed" or lane.out is not None or lane.link_lost is not None
    return lane.outlook if lane.moving and not gone else None


def faulty(lane: Lane, on: Axis) -> list[tuple[int, int]]:
    """First and last cell column of each fault on the axis."""
    cells: list[tuple[int, int]] = []
    for span in lane.spans:
        to_t = on.now_t if span.to_t is None else span.to_t
        first, last = max(on.cell(span.from_t), 0), min(on.cell(to_t), on.width - 1)
        if span.what not in ("out", "link") and first <= last:
            cells.append((first, last))
    return cells


def bounds(lane: Lane, on: Axis, past: Columns, plan: Plan | None) -> tuple[float, float]:
    """The scale's ends: what is seen, what is expected, no closer than the rest band allows."""
    seen = [past.low, past.high]
    outlook, rest = expected(lane), lane.rest
    for said in (outlook, rest):
        if said is not None and on.now_cell < on.width:
            doubt = said["u95_pct"] if said is rest else min(said["u95_pct"], 6.0 * lane.band)
            seen.append(np.array([said["salinity_pct"] - doubt, said["salinity_pct"] + doubt]))
    if plan is not None:
        seen.append(np.array([plan.salinity_pct - plan.u95_pct, plan.salinity_pct + plan.u95_pct]))
    values = np.concatenate(seen)
    values = values[np.isfinite(values)]
    if not len(values):
        return lane.aim or (0.0, 1.0)
    least = LEAST_BANDS * lane.band if lane.calibrated else 1e-3 * abs(float(np.median(values)))
    return nice_bounds(float(values.min()), float(values.max()), max(least, 1e-9))


def _raw(canvas: Canvas, lane: Lane, on: Axis) -> None:
    if on.to_t - on.from_t > RAW_SPAN_S:
        return
    t, period, temp = lane.raw.between(on.from_t, on.to_t)
    if len(t):
        canvas.points(t, lane.salinity_of(period, temp), on.from_t, on.dot_s, inks.FAINT)


def _expected_before(canvas: Canvas, lane: Lane, on: Axis) -> None:
    """Where it was said to land, while it moved: was the forecast right?"""
    said = [f for f in lane.outlooks if on.from_t <= f["t"] < on.to_t]
    if not said:
        return
    t = np.array([f["t"] for f in said])
    y = np.array([f["salinity_pct"] for f in said])
    dots = np.repeat(y, 3)
    times = (t[:, None] + np.array([0.0, 1.7, 3.4])[None, :]).ravel()
    canvas.points(times, dots, on.from_t, on.dot_s, inks.EXPECT)


def _future(canvas: Canvas, lane: Lane, on: Axis, clock: Clock) -> None:
    """What is expected from now on: the cone, or that it stays."""
    outlook, rest = expected(lane), lane.rest
    if on.now_cell >= on.width:
        return
    if outlook is not None:
        where, doubt = outlook["salinity_pct"], outlook["u95_pct"]
        _landing(canvas, on, lane, where, doubt, outlook, inks.EXPECT)
        _moment(canvas, on, outlook, clock)
    elif rest is not None and math.isfinite(lane.value):
        first = on.now_cell + 1
        canvas.level(canvas.row_of(rest["salinity_pct"]), first, on.width - 1, inks.EXPECT, "─")


def _landing(
    canvas: Canvas,
    on: Axis,
    lane: Lane,
    salinity: float,
    u95: float,
    outlook: Finding | None,
    ink: int,
) -> None:
    """The cone from the present to the landing, and the landing with its doubt beyond."""
    n = 2 * on.width
    t = on.from_t + (np.arange(n) + 0.5) * on.dot_s
    ahead = t - on.now_t
    value = lane.value if math.isfinite(lane.value) else salinity
    u_now = min(lane.u95, u95) if math.isfinite(lane.u95) else u95
    rest_s = 0.25 * (on.to_t - on.now_t)
    if outlook is not None:
        rest_s = max(outlook["t"] + outlook["rest_in_s"] - on.now_t, on.cell_s)
    steps = max(abs(value - salinity) / max(lane.band, 1e-9), math.e)
    left = np.exp(-np.maximum(ahead, 0.0) * math.log(steps) / rest_s)
    share = np.clip(ahead / rest_s, 0.0, 1.0)
    centre = salinity + (value - salinity) * left
    half = u_now + (u95 - u_now) * share
    low, high = (
        np.where(ahead > 0, centre - half, np.nan),
        np.where(ahead > 0, centre + half, np.nan),
    )
    canvas.fill(canvas.dot_rows(high), canvas.dot_rows(low), ink, every=4)
    line = canvas.dot_rows(np.where(ahead > 0, centre, np.nan))
    canvas.fill(line, line, ink)


def _moment(canvas: Canvas, on: Axis, outlook: Finding, clock: Clock) -> None:
    """The moment of rest with its doubt, on the top row."""
    at_t = outlook["t"] + outlook["rest_in_s"]
    if at_t <= on.now_t + on.cell_s:
        return
    cell = on.cell(at_t)
    u_s = outlook["rest_in_u95_s"]
    canvas.upright(cell, inks.EXPECT, "┊")
    first, last = max(on.cell(at_t - u_s), on.now_cell + 1), on.cell(at_t + u_s)
    if canvas.height >= 4:
        canvas.level(0, first, last, inks.EXPECT, "╌")
        word = f"rest {clock.second(at_t)}"
        if cell < canvas.width:
            left = min(max(cell - len(word) // 2, on.now_cell + 1), canvas.width - len(word))
            canvas.put(0, left, word, inks.EXPECT)


def _marks(canvas: Canvas, lane: Lane, on: Axis, cursor_t: float | None) -> None:
    if on.now_cell < on.width:
        canvas.upright(on.now_cell, inks.FAINT, "│")
    for dose in lane.doses:
        if on.from_t <= dose.time_s < on.to_t:
            canvas.upright(on.cell(dose.time_s), inks.FAINT if dose.struck else inks.MARK, "╎")
    for rest in lane.rests:
        if on.from_t <= rest["rested_t"] < on.to_t:
            row = canvas.row_of(rest["salinity_pct"])
            if row is not None:
                canvas.put(row, on.cell(rest["rested_t"]), "◆", inks.STRONG)
    if cursor_t is not None:
        canvas.upright(on.cell(cursor_t), inks.STRONG, "┃", over=True)


def _labelled(canvas: Canvas, scale: Scale) -> list[list[Run]]:
    """The canvas' rows with values in the margin."""
    step = nice_step(canvas.high - canvas.low, max(min(canvas.height // 2, 6), 1))
    digits = figures.places(0.5 * scale.width(canvas.high, step)) if step > 0 else 4
    ticks: dict[int, str] = {}
    for i in range(math.ceil(canvas.low / step - 1e-9), math.floor(canvas.high / step + 1e-9) + 1):
        row = canvas.row_of(min(max(i * step, canvas.low), canvas.high))
        if row is not None:
            ticks.setdefault(row, f"{scale.of(i * step):.{min(digits, 5)}f}")
    return [
        [(f"{ticks.get(i, ''):>{MARGIN - 2}} ", "faint"), ("▏", "faint")]
        + canvas.runs(i, inks.INKS, inks.PAPERS)
        for i in range(canvas.height)
    ]


def happenings(lane: Lane, on: Axis) -> list[Run]:
    """One row of what happened: faults, lifts and lost links as spans, doses on top."""
    canvas = Canvas(on.width, 1, 0.0, 1.0)
    for span in lane.spans:
        to_t = on.now_t if span.to_t is None else span.to_t
        first, last = max(on.cell(span.from_t), 0), min(on.cell(to_t), on.width - 1)
        if last >= 0 and first < on.width:
            ink = inks.FAINT if span.what in ("out", "link") else inks.DOUBT
            name = {"link": "no link", "out": "out of the tank"}.get(span.what, span.what)
            bar = "~" * (last - first + 1)
            canvas.put(0, first, bar, ink)
            if len(bar) >= len(name) + 2:
                canvas.put(0, first + 1, name, ink)
    for note in lane.notes:
        if on.from_t <= note.time_s < on.to_t:
            canvas.put(0, on.cell(note.time_s), "∗", inks.PLAIN)
    for dose in lane.doses:
        if on.from_t <= dose.time_s < on.to_t:
            said = f"▲{dose.volume_ml:.4g} mL" + (" struck out" if dose.struck else "")
            canvas.put(0, on.cell(dose.time_s), said, inks.FAINT if dose.struck else inks.MARK)
    return [(f"{'':{MARGIN}}", ""), *canvas.runs(0, inks.INKS, inks.PAPERS)]


def heading(
    lane: Lane, name: str, now_s: float, clock: Clock, scale: Scale, width: int
) -> list[Run]:
    """Whose view it is, and the last dose."""
    runs: list[Run] = [(f"{name} ", "strong")]
    dose = lane.last_dose
    if dose is None:
        runs.append((" no dose recorded", "faint"))
    else:
        liquid = text.fit(dose.liquid, min(len(dose.liquid), 16))
        when = f"{clock.second(dose.time_s)}, {figures.length(now_s - dose.time_s)} ago"
        runs.append((f" last dose {dose.volume_ml:.4g} mL {liquid} {when}", ""))
        runs += _verdict(lane, dose.time_s, scale)
    if math.isfinite(lane.tank_ml):
        runs.append((f" · tank {lane.tank_ml:.0f} mL", "faint"))
    return text.row(runs, width)


def _verdict(lane: Lane, dose_t: float, scale: Scale) -> list[Run]:
    """How the dose was answered."""
    rest = lane.rests[-1] if lane.rests else None
    answered = rest.get("dose_t") if rest is not None else None
    if rest is None or answered is None or abs(answered - dose_t) > 2e-3:
        return []
    if rest.get("predicted_pct") is None:
        return [(" · at rest, nothing was foretold", "faint")]
    expected = figures.short_text(rest["predicted_pct"], rest["predicted_u95_pct"], scale)
    if rest["verdict"] == "agrees":
        return [(f" · landed as foretold, {expected}", "faint")]
    return [(f" · foretold {expected}, LANDED ELSEWHERE", "act")]
