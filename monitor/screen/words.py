"""The state of a tank in one sentence. The same words on the screen and in the plain text.

Tones: calm (nothing to do), moving (watch it), doubt (look when you can), act (needs a person).
"""

from __future__ import annotations

import math
from typing import NamedTuple

from monitor.printable import printable
from monitor.screen.figures import Clock, Scale, length, short_text
from monitor.view import Lane

CALM, MOVING, DOUBT, ACT = "calm", "moving", "doubt", "act"
RANK = {CALM: 0, MOVING: 1, DOUBT: 2, ACT: 3}
WHY_MOST = 240


class Said(NamedTuple):
    """A sentence and its tone."""

    text: str
    tone: str


def state(lane: Lane, now_s: float, clock: Clock, scale: Scale) -> Said:
    """What the tank is doing and whether that can be believed, worst first."""
    gone = _gone(lane, clock)
    if gone is not None:
        return gone
    limit = _limit(lane, clock, scale)
    movement = _movement(lane, now_s, clock, scale)
    parts = [part for part in (limit, movement, _drift(lane, scale)) if part is not None]
    if len(parts) > 1 and movement.tone == CALM:
        parts.remove(movement)
    text = "; ".join(part.text for part in parts[:2])
    tone = max((part.tone for part in parts), key=RANK.__getitem__)
    if lane.belief == "doubtful":
        text = f"doubtful, {printable(lane.why, WHY_MOST)}: {text}"
        tone = max(tone, DOUBT, key=RANK.__getitem__)
    asked = _asked(lane)
    if asked and tone in (CALM, MOVING):
        return Said(f"{text}; {asked}", DOUBT)
    return Said(text, tone)


def _gone(lane: Lane, clock: Clock) -> Said | None:
    """Where there is no reading of the tank at all."""
    if not lane.begun:
        return Said("no reading yet", DOUBT)
    watched = "" if ("unwatched", "") not in lane.lasting else "NOBODY WATCHES IT: "
    if lane.out is not None:
        why = f" ({printable(lane.out.why, 20)})" if lane.out.why else ""
        said = f"{watched}probe out of the tank since {clock.minute(lane.out.from_t)}{why}"
        return Said(said, ACT if watched else DOUBT)
    if lane.link_lost is not None:
        why = printable(lane.link_lost.why, 30)
        said = f"{watched}no link since {clock.minute(lane.link_lost.from_t)}"
        return Said(f"{said}: {why}" if why else said, ACT)
    if lane.belief == "not-believed":
        faults = lane.faults
        since = clock.minute(faults[0]["from_t"] if faults else lane.since_t)
        return Said(f"{watched}not believed since {since}: {cause(lane)}", ACT)
    if watched:
        since = clock.minute(lane.lasting["unwatched", ""]["from_t"])
        return Said(f"{watched}no usable reading since {since}", ACT)
    return None


def cause(lane: Lane) -> str:
    """The fault with what was seen of it, without the advice."""
    faults = lane.faults
    if not faults:
        return printable(lane.why, WHY_MOST)
    fault = faults[0]
    seen = str(fault["evidence"]).split(";")[0]
    return f"{fault['fault']}, {printable(seen, WHY_MOST)}"


def advice(lane: Lane) -> str:
    """What to do about the oldest fault."""
    faults = lane.faults
    if not faults:
        return ""
    return printable(str(faults[0]["evidence"]).partition(";")[2].strip(), WHY_MOST)


def _limit(lane: Lane, clock: Clock, scale: Scale) -> Said | None:
    for (kind, which), finding in lane.lasting.items():
        if kind != "limit":
            continue
        since = clock.minute(finding["from_t"])
        if which == "fast":
            return Said(
                f"TOO FAST since {since}: {finding['value']:.2g} %/h, {finding['bound']:.2g} at"
                " most",
                ACT,
            )
        bound = f"{scale.of(finding['bound']):.4g}"
        side = "ABOVE" if which == "high" else "BELOW"
        return Said(f"{side} its aim ({bound}) since {since}", ACT)
    return None


def _movement(lane: Lane, now_s: float, clock: Clock, scale: Scale) -> Said:
    if lane.moving:
        return Said(_lands(lane, now_s, scale), MOVING)
    rest = lane.rest
    if lane.calibrated and not math.isfinite(lane.value):
        return Said("no reading of the tank just now", DOUBT)
    if rest is not None:
        text = f"at rest {length(now_s - rest['rested_t'])}"
        if rest.get("verdict") == "disagrees":
            expected = short_text(rest["predicted_pct"], rest["predicted_u95_pct"], scale)
            return Said(f"{text}, NOT WHERE THE DOSE LEADS ({expected})", ACT)
        return Said(text, CALM)
    if not lane.calibrated:
        return Said("read, but no standards: no salinity", DOUBT)
    since = lane.told[-1]["t"] if lane.told else lane.offset_s
    first = lane.trace.seconds.first_t
    held = now_s - max(since, first) if first == first else 0.0
    return Said(f"still for {length(held)}", CALM)


def _lands(lane: Lane, now_s: float, scale: Scale) -> str:
    outlook = lane.outlook
    dose = lane.last_dose
    if dose is not None and dose.time_s <= now_s < dose.time_s + dose.open_s:
        if outlook is None:
            return f"dose running in for {length(dose.time_s + dose.open_s - now_s)}"
        where = short_text(outlook["salinity_pct"], outlook["u95_pct"], scale)
        return f"dose running in, lands at {where}"
    if outlook is None:
        return "moving, too early to say where to"
    where = short_text(outlook["salinity_pct"], outlook["u95_pct"], scale)
    left_s = outlook["t"] + outlook["rest_in_s"] - now_s
    if left_s <= 1.0:
        return f"settling at {where}"
    return f"still moving, lands at {where} in {length(left_s)}"


def _drift(lane: Lane, scale: Scale) -> Said | None:
    trend = lane.lasting.get(("trend", ""))
    if trend is None:
        return None
    likely = ", ".join(str(each) for each in trend.get("likely", [])[:2])
    way = "up" if trend["pct_per_h"] > 0 else "down"
    said = f"drifts {way} {abs(trend['pct_per_h']):.2g} %/h: {printable(likely, 40)}"
    return Said(said, DOUBT)


def _asked(lane: Lane) -> str:
    for (kind, what), finding in lane.lasting.items():
        if kind == "notice":
            return printable(str(finding.get("text") or what), WHY_MOST)
    return ""


def overall(lanes: list[tuple[Lane, Said]], names: list[str]) -> Said:
    """The answer to the first question, over all tanks."""
    needs = [name for name, (_, said) in zip(names, lanes) if said.tone == ACT]
    look = [name for name, (_, said) in zip(names, lanes) if said.tone == DOUBT]
    moving = sum(said.tone == MOVING for _, said in lanes)
    if needs:
        rest = f" and {len(needs) - 2} more" if len(needs) > 2 else ""
        verb = "needs" if len(needs) == 1 else "need"
        return Said(f"{', '.join(needs[:2])}{rest} {verb} you", ACT)
    if look:
        rest = f" and {len(look) - 2} more" if len(look) > 2 else ""
        return Said(f"look at {', '.join(look[:2])}{rest}", DOUBT)
    if moving:
        return Said(f"{moving} moving, nothing wrong", MOVING)
    return Said("all is quiet" if len(lanes) != 1 else "quiet", CALM)
