"""The foot of the screen: what is happening and the keys, or the form that is being filled in."""

from __future__ import annotations

import math

from monitor import cautions
from monitor.screen import figures, guide, inks, text
from monitor.screen.draw import Run
from monitor.screen.figures import Clock, Scale
from monitor.screen.forms import Form
from monitor.screen.look import LABEL_MOST, SMALL_HEIGHT, SMALL_WIDTH, Look, Tank, chosen
from monitor.screen.source import Source
from monitor.view import Lane

Foot = list[tuple[list[Run], list[tuple[int, int, str]]]]


def foot(
    source: Source, look: Look, known: list[Tank], clock: Clock, width: int, height: int
) -> Foot:
    """What is happening, and the keys; or the form that is being filled in."""
    if look.form is not None and known:
        return _form(look.form, chosen(look, known), width, max(height // 2, 4))
    status = _status(source, look, known, clock)
    keys = _keys(hasattr(source, "seek"), width)
    if height < SMALL_HEIGHT or width < SMALL_WIDTH:
        return [(text.row([status], width), [])] if status[0].strip() else [keys]
    return [(text.row([status], width), []), keys]


def _status(source: Source, look: Look, known: list[Tank], clock: Clock) -> Run:
    if look.message is not None:
        return (" " + look.message.text, inks.TONES[look.message.tone] or "strong")
    if look.cursor_t is not None and known:
        tank = chosen(look, known)
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


def _form(form: Form, tank: Tank, width: int, most: int) -> Foot:
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
