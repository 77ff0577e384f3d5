"""Can it be believed: the accusation, the readings that made the judge say it, the noise."""

from __future__ import annotations

import numpy as np

from monitor.blocks import Floats
from monitor.screen import axis, figures, inks, text, words
from monitor.screen.axis import Axis
from monitor.screen.draw import Canvas, Columns, Run
from monitor.screen.landing import MARGIN
from monitor.view import Lane, Span

INSET_LEAST = 20  # cells for the evidence's own picture


def belief(lane: Lane, width: int, rows: int) -> list[list[Run]]:
    """Can it be believed: the accusation with its evidence, what to do; or a calm word."""
    if lane.belief == "believed" or not lane.begun:
        said = "believed, no fault is seen" if lane.begun else ""
        told: list[list[Run]] = [[(said, "faint")]]
    else:
        tone = "act" if lane.belief == "not-believed" else "doubt"
        word = "not believed" if lane.belief == "not-believed" else "doubtful"
        what = words.advice(lane)
        accused = text.wrapped(f"{word}: {words.cause(lane)}", width, 1 if rows < 3 else 2)
        told = [[(line, tone)] for line in accused]
        told += [[(line, "strong")] for line in text.wrapped(what, width, 2)] if what else []
    return [text.row(runs, width) for runs in (told + [[]] * rows)[:rows]]


def inset(span: Span, width: int, height: int) -> list[list[Run]]:
    """The raw readings that made the judge say it: periods in us, their time along the width."""
    rows: list[list[Run]] = [[(text.fit("as it was read, us", width), "doubt")]]
    if span.raw is None or not len(span.raw[0]):
        return rows
    t, period = span.raw
    low, high = float(period.min()), float(period.max())
    canvas = Canvas(width, max(height - 2, 1), low - 0.02 * (high - low) - 1e-9, high + 1e-9)
    dt = max(float(t[-1] - t[0]), 1.0) / (2 * width) * axis.REACH
    canvas.points(t, period, float(t[0]), dt, inks.DOUBT)
    rows += [canvas.runs(i, inks.INKS, inks.PAPERS) for i in range(canvas.height)]
    said = f"{low:.5g} to {high:.5g} us in {figures.length(float(t[-1] - t[0]))}"
    rows.append([(text.fit(said, width), "faint")])
    return rows


def noise(lane: Lane, on: Axis, height: int) -> list[list[Run]]:
    """What the fault judge sees: mean jump from reading to reading, % of the period."""
    t, _, _, good, _, _, jitter = lane.trace.seconds.between(on.from_t, min(on.to_t, on.now_t))
    shown: Floats = 100.0 * jitter
    finite = shown[np.isfinite(shown)]
    typical = float(np.median(finite)) if len(finite) else 0.0
    top = max(4.0 * typical, 1e-3)
    canvas = Canvas(on.width, height, 0.0, top)
    held = Columns(t, np.minimum(shown, top), on.from_t, on.dot_s, 2 * on.width, 2.6)
    floor = np.where(np.isfinite(held.high), 4.0 * height - 1.0, np.nan)
    canvas.fill(canvas.dot_rows(held.high), floor, inks.FAINT)
    loud = Columns(
        t,
        np.where(good >= 1.0, np.nan, np.minimum(shown, top)),
        on.from_t,
        on.dot_s,
        2 * on.width,
        0.0,
    )
    canvas.fill(
        canvas.dot_rows(loud.high), np.where(np.isfinite(loud.high), floor, np.nan), inks.DOUBT
    )
    names = ["noise %", f"{top:.2g}"] if height > 1 else ["noise"]
    return [
        [(f"{names[i] if i < len(names) else '':>{MARGIN - 2}} ▏", "faint")]
        + canvas.runs(i, inks.INKS, inks.PAPERS)
        for i in range(height)
    ]
