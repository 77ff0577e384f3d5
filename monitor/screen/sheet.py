"""The whole screen as rows of text: what stands where at which size, and what a click there means.

From the top: is anything wrong (one line); a lane a tank; below, the chosen tank's past and future;
at the foot what is happening, and the keys. Small screens keep the sentences and drop the pictures.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import NamedTuple

from monitor import cautions
from monitor.printable import printable
from monitor.screen import axis, figures, guide, inks, landing, lanes, text, words
from monitor.screen.acts import Form
from monitor.screen.axis import Axis
from monitor.screen.draw import Run
from monitor.screen.figures import Clock, Scale
from monitor.screen.source import Source
from monitor.screen.words import Said
from monitor.view import Lane

SMALL_WIDTH, SMALL_HEIGHT = 60, 16
LANDING_LEAST = 9  # rows: heading, belief, five of plot, what happened, axis
NOISE_FROM, HISTORY_FROM = 20, 36  # rows of the landing view from which these are added
LANE_MOST = 4  # rows a lane
NOISE_ROWS, HISTORY_ROWS = 2, 9
LABEL_MOST = 400


@dataclass
class Look:
    """What the person has chosen to look at."""

    chosen: int = 0  # index among the source's lanes
    span_s: float = 240.0
    end_t: float | None = None  # None: the present
    cursor_t: float | None = None
    unit: str = "%"
    worst_first: bool = False
    first: int = 0  # lanes scrolled off the top
    helping: bool = False
    form: Form | None = None
    message: Said | None = None
    note: str = ""
    mono: bool = False
    drawn: lanes.Drawn = field(default_factory=lanes.Drawn)


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


class _Tank(NamedTuple):
    place: int
    lane: Lane
    name: str
    said: Said
    scale: Scale


def tanks(source: Source, look: Look, clock: Clock) -> list[_Tank]:
    """The lanes with their names and sentences, in the order in which they stand."""
    known: list[_Tank] = []
    shared = [lane.tank for lane in source.lanes]
    for i, lane in enumerate(source.lanes):
        name = lane.label[:LABEL_MOST]
        if shared.count(lane.tank) > 1:
            name = f"{name}/{lane.probe}"
        scale = Scale(look.unit if lane.calibrated else "us", lane.medium)
        known.append(_Tank(i, lane, name, words.state(lane, source.now_s, clock, scale), scale))
    if look.worst_first:
        known.sort(key=lambda tank: -words.RANK[tank.said.tone])
    return known


def draw(source: Source, look: Look, width: int, height: int, clock: Clock) -> Sheet:
    """The screen at this size."""
    if look.helping:
        return Sheet(guide.page(width, height, hasattr(source, "seek")))
    known = tanks(source, look, clock)
    sheet = Sheet([head(source, look, known, clock, width)])
    foot = footer(source, look, known, clock, width, height)
    room = height - 1 - len(foot)
    if width < SMALL_WIDTH or height < SMALL_HEIGHT:
        _small(sheet, look, known, width, room)
    else:
        _large(sheet, source, look, known, clock, width, room)
    sheet.rows = (sheet.rows + [text.row([], width)] * height)[: height - len(foot)]
    for runs, acts in foot:
        sheet.hits += [Hit(len(sheet.rows), *each) for each in acts]
        sheet.rows.append(runs)
    sheet.rows = sheet.rows[:height]
    return sheet


def head(source: Source, look: Look, known: list[_Tank], clock: Clock, width: int) -> list[Run]:
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


Foot = list[tuple[list[Run], list[tuple[int, int, str]]]]


def footer(
    source: Source, look: Look, known: list[_Tank], clock: Clock, width: int, height: int
) -> Foot:
    """What is happening, and the keys; or the form that is being filled in."""
    if look.form is not None and known:
        return _form(look.form, _chosen(look, known), width, max(height // 2, 4))
    status = _status(source, look, known, clock)
    keys = _keys(hasattr(source, "seek"), width)
    if height < SMALL_HEIGHT or width < SMALL_WIDTH:
        return [(text.row([status], width), [])] if status[0].strip() else [keys]
    return [(text.row([status], width), []), keys]


def _status(source: Source, look: Look, known: list[_Tank], clock: Clock) -> Run:
    if look.message is not None:
        return (" " + look.message.text, inks.TONES[look.message.tone] or "strong")
    if look.cursor_t is not None and known:
        tank = _chosen(look, known)
        return (" " + reading(tank.lane, look.cursor_t, clock, tank.scale), "strong")
    said = text.fit(source.status, LABEL_MOST).rstrip()
    tone = "act" if said[:3].isupper() else "faint"
    if look.end_t is not None:
        said = f"looking back to {clock.minute(look.end_t)}; 0 is now  {said}"
    if look.note and source.now_s < 20:
        said = f"{text.fit(look.note, 60).rstrip()}  {said}"
    return (" " + said, tone)


def reading(lane: Lane, t: float, clock: Clock, scale: Scale) -> str:
    """What was read at a time, in words."""
    times, value, smooth, good, period, temp, _ = lane.trace.seconds.between(t - 30.0, t + 30.0)
    when = clock.second(t)
    if not len(times):
        return f"{when}  {_minute(lane, t, scale)}"
    i = int(abs(times - t).argmin())
    if abs(times[i] - t) > 2.0:
        return f"{when}  no reading"
    shown = smooth[i] if math.isfinite(smooth[i]) else value[i]
    said = f"{when}  {figures.short_text(shown, 2e-4, scale)} {scale.name}"
    if good[i] == 0:
        said = f"{when}  not the tank's: {figures.short_text(value[i], 2e-4, scale)} {scale.name}"
    said += f" · {period[i]:.2f} us"
    return said + (f" · {temp[i]:.2f} C" if math.isfinite(temp[i]) else " · no temperature")


def _minute(lane: Lane, t: float, scale: Scale) -> str:
    times, low, mean, high, _, _ = lane.trace.minutes.between(t - 90.0, t + 90.0)
    if not len(times) or not math.isfinite(mean[(i := int(abs(times - t).argmin()))]):
        return "no reading"
    told = (figures.short_text(float(each), 2e-4, scale) for each in (mean[i], low[i], high[i]))
    return "mean of the minute {} ({} to {}) {}".format(*told, scale.name)


def _keys(replay: bool, width: int) -> tuple[list[Run], list[tuple[int, int, str]]]:
    runs: list[Run] = [(" ", "")]
    hits: list[tuple[int, int, str]] = []
    at = 1
    shown = [*guide.REPLAY_KEYS, *guide.KEYS] if replay else [*guide.KEYS]
    last = guide.KEYS[-2:]
    left = width - 2 - sum(len(f"{key} {word}  ") for key, word, _, _ in last)
    kept = []
    for entry in shown:
        size = len(f"{entry[0]} {entry[1]}  ")
        if entry not in last and entry[3] and size <= left:
            kept.append(entry)
            left -= size
    for key, word, _, act in [*kept, *last]:
        size = len(key) + 1 + len(word)
        runs += [(key, ""), (f" {word}  ", "faint")]
        hits.append((at, at + size - 1, act))
        at += size + 2
    return text.row(runs, width), hits


def _form(form: Form, tank: _Tank, width: int, most: int) -> Foot:
    """The form's rows: fields, what it would do, cautions, the keys."""
    told = form.preview(tank.lane)
    name = text.fit(tank.name, min(len(tank.name), 24)).rstrip()
    rows: list[tuple[list[Run], list[tuple[int, int, str]]]] = []
    rows.append(([(f"─ {form.title}, {name} ", "strong"), ("─" * width, "faint")], []))
    fields: list[Run] = []
    for i, each in enumerate(form.fields):
        here = i == form.at
        value = text.fit(each.value, min(len(each.value), 60)).rstrip()
        shown = f"◂ {value} ▸" if each.choices else f"{value}{'▁' if here else ''}" or "·"
        part: list[Run] = [(f" {each.label} ", "faint"), (f"{shown} ", "strong" if here else "")]
        if sum(len(t) for t, _ in [*fields, *part]) > width:
            rows.append((fields, []))
            fields = []
        fields += part
    if fields:
        rows.append((fields, []))
    if told.wrong:
        rows.append(([(f" {told.wrong}", "act")], []))
    rows += [([(f" {line}", "plan")], []) for line in told.lines]
    for caution in told.cautions:
        general = caution in (cautions.FAST_CHANGE, cautions.SECOND_INSTRUMENT, cautions.VALVE)
        style = "act" if caution[:5].isupper() else "faint" if general else ""
        rows += [([(f" {line}", style)], []) for line in text.wrapped(caution, width - 2, 2)]
    rows = rows[: most - 1]
    ready = "Enter records it" if told.order and not told.wrong else "Enter does nothing yet"
    keys = f" {ready}   Esc leaves   Tab next   left/right choose"
    rows.append(
        ([(keys, "")], [(1, len(ready), "enter"), (len(ready) + 4, len(ready) + 13, "esc")])
    )
    return [(text.row(runs, width), hits) for runs, hits in rows]


def _chosen(look: Look, known: list[_Tank]) -> _Tank:
    return next((tank for tank in known if tank.place == look.chosen), known[0])


def _small(sheet: Sheet, look: Look, known: list[_Tank], width: int, room: int) -> None:
    """Sentences and strips only, worst first."""
    known = sorted(known, key=lambda tank: -words.RANK[tank.said.tone])
    any_aim = any(tank.lane.aim for tank in known)
    per = 2 if width < SMALL_WIDTH else 1
    on = axis.axis(max(width - landing.MARGIN, 1), look.span_s, 0.0, None)
    _lanes(sheet, look, known, width, room, per, any_aim, on)


def _lanes(
    sheet: Sheet,
    look: Look,
    known: list[_Tank],
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
        chosen = tank.place == look.chosen
        told = look.drawn.rows(
            tank.lane, tank.name, tank.said, tank.scale, width, any_aim, per, on, chosen
        )
        for runs in told:
            sheet.hits.append(Hit(len(sheet.rows), 0, width - 1, f"tank {tank.place}"))
            sheet.rows.append(runs)


def _large(
    sheet: Sheet,
    source: Source,
    look: Look,
    known: list[_Tank],
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
    _landing(sheet, look, _chosen(look, known), on, clock, source.now_s, width, room - for_lanes)


def _landing(
    sheet: Sheet,
    look: Look,
    tank: _Tank,
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
    sheet.rows += landing.belief(lane, width, about)
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
        sheet.rows += [text.row(runs, width) for runs in landing.noise(lane, on, noise)]
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
        or width < landing.INSET_LEAST
        or len(rows) < 6
    ):
        return rows
    if lane.belief == "believed":
        return rows
    inset = landing.evidence(span, width, len(rows) - 2)
    return [
        [*text.row(row, left), (" ", ""), *inset[i]] if i < len(inset) else row
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
