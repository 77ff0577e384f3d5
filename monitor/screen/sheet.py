"""The whole screen as rows of text: what stands where at which size, and what a click there means.

From the top: is anything wrong (one line); a lane a tank; below, the chosen tank's past and future;
at the foot what is happening, and the keys. Small screens keep the sentences and drop the pictures.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import NamedTuple

from monitor.printable import printable
from monitor.screen import axis, evidence, figures, foot, guide, inks, landing, lanes, text, words
from monitor.screen.axis import Axis
from monitor.screen.draw import Run
from monitor.screen.figures import Clock, Scale
from monitor.screen.look import SMALL_HEIGHT, SMALL_WIDTH, Look, Tank, chosen, tanks
from monitor.screen.source import Source
from monitor.screen.words import Said
from monitor.view import Lane

LANDING_LEAST = 9  # rows: heading, belief, five of plot, what happened, axis
NOISE_FROM, HISTORY_FROM = 20, 36  # rows of the landing view from which these are added
LANE_MOST = 4  # rows a lane
NOISE_ROWS, HISTORY_ROWS = 2, 9


class Hit(NamedTuple):
    """A place that can be clicked: row, first and last column, what it does."""

    row: int
    first: int
    last: int
    act: str


@dataclass
class Sheet:
    """Rows of exactly the asked size, and where they can be clicked."""

    rows: list[list[Run]]
    hits: list[Hit] = field(default_factory=list)
    on: Axis | None = None  # the axis of time, where there is one


def draw(source: Source, look: Look, width: int, height: int, clock: Clock) -> Sheet:
    """The screen at this size."""
    if look.helping:
        return Sheet(guide.page(width, height, hasattr(source, "seek")))
    known = tanks(source, look, clock)
    sheet = Sheet([head(source, look, known, clock, width)])
    feet = foot.foot(source, look, known, clock, width, height)
    room = height - 1 - len(feet)
    if width < SMALL_WIDTH or height < SMALL_HEIGHT:
        _small(sheet, look, known, width, room)
    else:
        _large(sheet, source, look, known, clock, width, room)
    sheet.rows = (sheet.rows + [text.row([], width)] * height)[: height - len(feet)]
    for runs, acts in feet:
        sheet.hits += [Hit(len(sheet.rows), *each) for each in acts]
        sheet.rows.append(runs)
    sheet.rows = sheet.rows[:height]
    return sheet


def head(source: Source, look: Look, known: list[Tank], clock: Clock, width: int) -> list[Run]:
    """Is anything wrong; the time of day once; the unit of all figures."""
    names = [text.fit(tank.name, 24 if width >= 80 else 16).rstrip() for tank in known]
    said = words.overall([(tank.lane, tank.said) for tank in known], names)
    if source.trouble:  # what is shown is not what is so now
        said = Said(printable(source.trouble), words.ACT)
    when = clock.whole(source.now_s) if width >= 100 else clock.second(source.now_s)
    unit = {"%": "% by mass", "mS/cm": "mS/cm at 25 C"}.get(look.unit, look.unit)
    right = f"{unit}  {when}" if width >= SMALL_WIDTH else when
    if look.note and width >= 100:
        right = f"{text.fit(look.note, min(len(look.note), 40))}  {right}"
    left = max(width - len(right) - 2, 0)
    style = "alarm" if said.tone == words.ACT else inks.TONES[said.tone] or "strong"
    other = "alarm" if said.tone == words.ACT else "faint"
    if style == "alarm":
        runs: list[Run] = [(" " + text.fit(said.text, left), style)]
    else:
        runs = [(" ", ""), *text.filled(said.text, left, style)]
    return text.row([*runs, (" " + right, other)], width)


def _small(sheet: Sheet, look: Look, known: list[Tank], width: int, room: int) -> None:
    """Sentences and strips only, worst first."""
    known = sorted(known, key=lambda tank: -words.RANK[tank.said.tone])
    any_aim = any(tank.lane.aim for tank in known)
    per = 2 if width < SMALL_WIDTH else 1
    on = axis.axis(max(width - landing.MARGIN, 1), look.span_s, 0.0, None)
    _lanes(sheet, look, known, width, room, per, any_aim, on)


def _lanes(
    sheet: Sheet,
    look: Look,
    known: list[Tank],
    width: int,
    room: int,
    per: int,
    any_aim: bool,
    on: Axis,
) -> None:
    visible = max(room // per, 1)
    place = next((i for i, tank in enumerate(known) if tank.place == look.chosen), 0)
    look.first = min(max(look.first, place - visible + 1), place, max(len(known) - visible, 0))
    for tank in known[look.first : look.first + visible]:
        mine = tank.place == look.chosen
        told = look.drawn.rows(
            tank.lane, tank.name, tank.said, tank.scale, width, any_aim, per, on, mine
        )
        for runs in told:
            sheet.hits.append(Hit(len(sheet.rows), 0, width - 1, f"tank {tank.place}"))
            sheet.rows.append(runs)


def _large(
    sheet: Sheet,
    source: Source,
    look: Look,
    known: list[Tank],
    clock: Clock,
    width: int,
    room: int,
) -> None:
    """Lanes above, the chosen tank's landing view below."""
    if not known:
        return
    room -= 1  # the rule between them
    per = 2 if 2 * len(known) <= max(room - LANDING_LEAST, room // 2) and room >= 18 else 1
    if per == 2:
        per = min(max(room // 3 // len(known), 2), LANE_MOST)
    for_lanes = min(per * len(known), room - LANDING_LEAST)
    any_aim = any(tank.lane.aim for tank in known)
    on = axis.axis(width - landing.MARGIN, look.span_s, source.now_s, look.end_t)
    beside = lanes.widths(width, any_aim, per).trace
    lane_on = axis.axis(beside, look.span_s, source.now_s, look.end_t) if beside else on
    _lanes(sheet, look, known, width, for_lanes, per, any_aim, lane_on)
    hidden = len(known) - for_lanes // per
    rule = "─" * width
    if hidden > 0:
        said = f"─ {look.first} above, {hidden - look.first} below "
        rule = said + rule[len(said) :]
    sheet.rows.append([(rule, "faint")])
    sheet.on = on
    _landing(sheet, look, chosen(look, known), on, clock, source.now_s, width, room - for_lanes)


def _landing(
    sheet: Sheet,
    look: Look,
    tank: Tank,
    on: Axis,
    clock: Clock,
    now_s: float,
    width: int,
    room: int,
) -> None:
    lane, scale = tank.lane, tank.scale
    name = text.fit(tank.name, min(len(tank.name), max(width // 5, 12))).rstrip()
    sheet.rows.append(landing.heading(lane, name, now_s, clock, scale, width))
    about = 3 if room >= 24 else 2 if room >= 12 else 1
    sheet.rows += evidence.belief(lane, width, about)
    room -= 1 + about
    noise = NOISE_ROWS if room >= NOISE_FROM else 0
    history = HISTORY_ROWS if room >= HISTORY_FROM else 0
    plan = look.form.preview(lane).plan if look.form is not None else None
    rows = landing.picture(
        lane, on, room - noise - history, clock, scale, look.cursor_t, plan, look.mono
    )
    rows = _with_evidence(rows, lane, on, plan is not None)
    for runs in rows:
        sheet.hits.append(Hit(len(sheet.rows), landing.MARGIN, width - 1, "plot"))
        sheet.rows.append(text.row(runs, width))
    if noise:
        sheet.rows += [text.row(runs, width) for runs in evidence.noise(lane, on, noise)]
    if history:
        sheet.rows += _history(look, lane, clock, scale, now_s, width, history)


def _with_evidence(rows: list[list[Run]], lane: Lane, on: Axis, planned: bool) -> list[list[Run]]:
    """Where nothing is expected: the readings that made the judge say it, in the last third."""
    span = next((s for s in reversed(lane.spans) if s.to_t is None and s.raw is not None), None)
    left = landing.MARGIN + on.now_cell + 1
    width = landing.MARGIN + on.width - left - 1
    if (
        span is None
        or planned
        or landing.expected(lane)
        or width < evidence.INSET_LEAST
        or len(rows) < 6
    ):
        return rows
    if lane.belief == "believed":
        return rows
    shown = evidence.inset(span, width, len(rows) - 2)
    return [
        [*text.row(row, left), (" ", ""), *shown[i]] if i < len(shown) else row
        for i, row in enumerate(rows)
    ]


def _history(
    look: Look, lane: Lane, clock: Clock, scale: Scale, now_s: float, width: int, rows: int
) -> list[list[Run]]:
    """The whole run in the width."""
    first = lane.trace.minutes.first_t
    start = min(first - 30.0 if first == first else 0.0, now_s - 600.0)
    cells = width - landing.MARGIN
    on = Axis(start, max(now_s - start, 600.0) / (cells - 2), cells, now_s)
    told = landing.picture(lane, on, rows - 1, clock, scale, look.cursor_t, None, look.mono)
    title: list[Run] = [(f"─ the whole run, {figures.length(now_s - start)} ", "faint")]
    title.append(("─" * width, "faint"))
    return [text.row(runs, width) for runs in [title, *told]]
