"""Acts on a tank as forms: a dose, a strike, a note, a lift, water, quiet for an alarm."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

from monitor.dosing import advice, plan
from monitor.dosing.parts import PlanError
from monitor.printable import printable
from monitor.screen.figures import Clock, Scale, length, short_text
from monitor.screen.forms import Field, Form, Preview, figures_of, number
from monitor.screen.landing import Plan
from monitor.view import Lane


def dose(lane: Lane) -> Form | None:
    """Plan and record a dose; None on a bench without liquids."""
    bench = lane.settings
    if bench is None or not bench.liquid:
        return None
    names = tuple(bench.liquid)
    return Form(
        "a dose",
        [
            Field("liquid", "liquid", names[0], names),
            Field("volume_ml", "volume, mL"),
            Field("to", "or to reach, %"),
            Field("open_s", "ran in for, s"),
            Field("ago_s", "began s ago", "0"),
        ],
        _dose,
    )


def _dose(form: Form, lane: Lane) -> Preview:
    told = Preview()
    figures = figures_of(form, ("volume_ml", "to", "open_s", "ago_s"), told)
    if told.wrong:
        return told
    bench = lane.settings
    assert bench is not None
    volume, aim, liquid = figures["volume_ml"], figures["to"], form["liquid"]
    if not volume and aim is None:
        told.lines.append("type a volume, or the salinity that it shall reach")
        return told
    try:
        planned = plan.plan(
            bench,
            lane.tank,
            lane.tank_ml,
            lane.value if lane.calibrated else math.nan,
            lane.u95 if math.isfinite(lane.u95) else 0.0,
            aim_pct=None if volume else aim,
            liquid=liquid,
            volume_ml=volume or None,
            tank_u_ml=lane.tank_u_ml if math.isfinite(lane.tank_u_ml) else None,
        )
    except PlanError as wrong:
        told.cautions.append(str(wrong))
        if not volume:
            told.wrong, told.cautions = str(wrong), []
            return told
    else:
        volume = planned.volume_ml
        _foretell(told, lane, planned)
        told.cautions = [*_against(lane), *advice.cautions(bench, planned)]
    fields = {"tank": lane.tank, "liquid": liquid, "volume_ml": round(float(volume), 3)}
    if figures["open_s"]:
        fields["open_s"] = figures["open_s"]
    told.order = ("dose", fields)
    told.ago_s = figures["ago_s"] or 0.0
    return told


def _foretell(told: Preview, lane: Lane, planned: plan.Plan) -> None:
    """Where it lands by the mass balance."""
    told.plan = Plan(planned.predicted_pct, planned.predicted_u95_pct)
    scale = Scale("%")
    before = short_text(planned.before_pct, planned.before_u95_pct, scale)
    after = short_text(planned.predicted_pct, planned.predicted_u95_pct, scale)
    said = (
        f"{planned.volume_ml:.4g} mL takes it from {before} to {after}"
        f" ±{planned.predicted_u95_pct:.1g} %"
    )
    if lane.settings is not None and lane.settings.tank[lane.tank].mode == "grows":
        said += f"; then {planned.tank_ml + planned.volume_ml:.0f} mL in the tank"
    told.lines.append(said)
    if planned.open_s is not None:
        told.lines.append(f"valve {planned.valve}: open for {planned.open_s:.1f} s")


def _against(lane: Lane) -> list[str]:
    """What in this tank speaks against any dose now."""
    said: list[str] = []
    if lane.belief != "believed":
        said.append(f"THE PROBE IS {lane.belief.upper()}: where it starts is not sure.")
    if lane.moving:
        said.append("STILL MOVING: the last dose has not come to rest.")
    return said


def strike(lane: Lane, clock: Clock) -> Form | None:
    """Strike a dose out; None where there is none."""
    last = [each for each in reversed(lane.doses) if not each.struck][:9]
    if not last:
        return None
    names = tuple(f"{clock.second(d.time_s)} {d.volume_ml:.4g} mL {d.liquid}" for d in last)
    keys = dict(zip(names, (d.key for d in last)))

    def preview(form: Form, lane: Lane) -> Preview:
        return Preview(
            [f"{form['dose']} counts as not given from here on; the record keeps it"],
            order=("strike", {"of": keys[form["dose"]], "why": form["why"], "tank": lane.tank}),
        )

    fields = [Field("dose", "dose", names[0], names), Field("why", "why")]
    return Form("strike out", fields, preview)


def note(lane: Lane) -> Form:
    """Leave a word in the log."""

    def preview(form: Form, lane: Lane) -> Preview:
        if not form["text"]:
            return Preview(["type a word; it stands in the log with its time"])
        return Preview(
            ["it stands in the log with its time"], order=("note", {"text": form["text"]})
        )

    return Form("a note", [Field("text", "note")], preview)


def lift(lane: Lane) -> Form:
    """The probe goes out of the tank, or is back in it."""
    whys = ("wipe", "standard", "check", "move", "other")
    kind = "out" if lane.out is None else "back"
    said = {
        "out": "its readings are kept but not judged until you say that it is back",
        "back": "its readings are the tank's again from here on",
    }

    def preview(form: Form, lane: Lane) -> Preview:
        fields = {"why": form["why"]} if kind == "out" else {}
        return Preview([said[kind]], order=(kind, fields))

    title = "probe out of the tank" if kind == "out" else "probe back in the tank"
    return Form(title, [Field("why", "why", whys[0], whys)] if kind == "out" else [], preview)


def water(lane: Lane) -> Form:
    """Water that is no dose: taken out, topped up, or the volume as it is now."""
    bench = lane.settings
    liquids = tuple(bench.liquid) if bench is not None else ()
    fields = [Field("out_ml", "taken out, mL"), Field("in_ml", "put in, mL")]
    if liquids:
        fields.append(Field("liquid", "of", liquids[0], liquids))
    fields.append(Field("volume_ml", "or now, mL"))

    def preview(form: Form, lane: Lane) -> Preview:
        told = Preview()
        figures = figures_of(form, ("out_ml", "in_ml", "volume_ml"), told)
        if told.wrong or not any(figures.values()):
            told.lines = told.lines or ["type what went out or in, or the volume as it is now"]
            return told
        now = figures["volume_ml"]
        if now is None:
            now = lane.tank_ml - (figures["out_ml"] or 0.0) + (figures["in_ml"] or 0.0)
        if now <= 0:
            told.wrong = f"that leaves {now:.0f} mL in the tank; expected more than none"
            return told
        told.lines.append(f"the tank then holds {now:.0f} mL" if math.isfinite(now) else "recorded")
        kept: dict[str, Any] = {k: v for k, v in figures.items() if v is not None}
        if figures["in_ml"] and form["liquid"]:
            kept["liquid"] = form["liquid"]
        told.order = ("water", {"tank": lane.tank, **kept})
        return told

    return Form("water that is no dose", fields, preview)


def silence(lane: Lane, until: Callable[[float], str]) -> Form:
    """Quiet an alarm for a while; `until` gives the UTC text of so many seconds ahead."""
    named = [str(f.get("fault") or f.get("which") or f["finding"]) for f in lane.faults]
    named += [which or kind for kind, which in lane.lasting]
    whats = tuple(dict.fromkeys([*named, lane.tank, "all"]))

    def preview(form: Form, lane: Lane) -> Preview:
        minutes = number(form["minutes"])
        if minutes is None or not 0 < minutes <= 1440:
            return Preview(wrong=f"minutes: {printable(form['minutes'], 12)!r}; expected 1 to 1440")
        said = f"no alarm of {form['what']} for {length(60 * minutes)}; the screen says it still"
        fields = {"what": form["what"], "until_utc": until(60.0 * minutes)}
        return Preview([said], order=("silence", fields))

    fields = [Field("what", "alarm", whats[0], whats), Field("minutes", "minutes", "30")]
    return Form("silence an alarm", fields, preview)
