"""The night in sentences, most important first."""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import Any, NamedTuple

from monitor.blocks import Event
from monitor.dosing.history import Answer, in_words, lesson
from monitor.findings import Finding
from monitor.logbook.codec import utc_of
from monitor.report.night import Lane, Night
from monitor.report.told import told_orders
from monitor.report.words import clock, length, pct, size, span
from monitor.tanks import LOST

NEXT_S = 1800.0  # a change so soon after a dose may have come before its rest


class Section(NamedTuple):
    """A heading and its lines; `urgent` where a person has to act."""

    title: str
    lines: list[str]
    urgent: bool = False


def sections(night: Night) -> list[Section]:
    """What happened, in order of importance; sections without a line are left out."""
    told = [
        Section("Needs you now", list(_open(night)), urgent=True),
        Section("Out of limits", list(_limits(night))),
        Section("Doses", list(_doses(night))),
        Section("Probe faults", list(_faults(night))),
        Section("Trends", list(_trends(night))),
        Section("Questions", list(_questions(night))),
        Section("Gaps and losses", list(_gaps(night))),
        Section("Checks, notes, orders", list(told_orders(night))),
        Section("How sure", [_how_sure(lane) for lane in night.lanes]),
    ]
    kept = [section for section in told if section.lines]
    if kept[0].title != "Needs you now":
        kept.insert(0, Section("Needs you now", ["Nothing: all that began is over."]))
    return kept


def lasting(night: Night, kind: str) -> list[Finding]:
    """The last word on each condition of this kind: one record a condition."""
    last: dict[Any, Finding] = {}
    for f in night.findings:
        if f["finding"] == kind:
            name = f.get("fault") or f.get("which") or f.get("what") or ""
            last[f.get("probe") or f.get("tank"), name, f.get("from_t")] = f
    swapped = {f["from_t"] for f in last.values() if f.get("what") == "probes-swapped"}
    return [
        f
        for f in last.values()
        if not (f.get("what") == "other-probe" and f["from_t"] in swapped)  # one question is enough
    ]


def _open(night: Night) -> Iterable[str]:
    kinds = ("unwatched", "limit", "fault", "notice")
    for f in (f for kind in kinds for f in lasting(night, kind) if f["to_t"] is None):
        yield _words(night, f)
    for lane in night.lanes:
        if lane.minutes and lane.minutes[-1].belief == "out":
            yield f"{lane.tank}: the probe is out of the tank; put it back and say so"
        moving = _unsettled(night, lane)
        if moving:
            yield f"{lane.tank}: the dose of {clock(night, moving)} is not at rest yet"


def _words(night: Night, f: Finding) -> str:
    whose = f.get("tank") or f["probe"]
    when = span(night, f["from_t"], f["to_t"])
    if f["finding"] == "limit":
        unit = "%/h" if f["which"] == "fast" else "%"
        said = f"{f['which']}: {f['value']:.4g} {unit}, bound {f['bound']:.4g} {unit}"
        return f"{whose}: {said}, {when}"
    if f["finding"] == "unwatched":
        return f"{whose}: unwatched {when}: {f['why']}"
    if f["finding"] == "notice":
        since = clock(night, f["from_t"])
        over = "" if f["to_t"] is None else f", over at {clock(night, f['to_t'])}"
        return f"{whose}: {since} {f['text']}{over}"
    gone = f"; withdrawn: {f['withdrawn']}" if f.get("withdrawn") else ""
    return f"{f['probe']}: {f['fault']} {when}: {f['evidence']}{gone}"


def _unsettled(night: Night, lane: Lane) -> float | None:
    """When the dose began that no rest has answered, the newest one; None if all are."""
    struck = {str(e.fields.get("of")) for e in lane.events if e.kind == "strike"}
    doses = [e for e in lane.events if e.kind == "dose"]
    doses = [e for e in doses if str(e.fields.get("id", "")) not in struck]
    if not doses:
        return None
    newest = max(e.time_s for e in doses)
    rested = any(
        f["finding"] == "rest" and f["probe"] == lane.probe and f["t"] >= newest
        for f in night.findings
    )
    return None if rested else newest


def _limits(night: Night) -> Iterable[str]:
    for kind in ("limit", "unwatched"):
        yield from (_words(night, f) for f in lasting(night, kind))


def _doses(night: Night) -> Iterable[str]:
    rests = [f for f in night.findings if f["finding"] == "rest" and f.get("to_t") is None]
    for lane in night.lanes:
        struck = {str(e.fields["of"]): e for e in lane.events if e.kind == "strike"}
        for event in (e for e in lane.events if e.kind == "dose"):
            f = event.fields
            size = (
                f"{f['volume_ml']:g} mL" if "volume_ml" in f else f"{f.get('open_s', 0):g} s open"
            )
            what = (
                f"{lane.tank}: {clock(night, event.time_s)} {size} {f.get('liquid', '')}".rstrip()
            )
            strike = struck.get(str(f.get("id") or event.time_s))
            if strike is not None:
                yield f"{what}: struck out, {strike.fields.get('why') or 'no reason given'}"
                continue
            mine = [
                r
                for r in rests
                if r["probe"] == lane.probe
                and r["dose_t"] is not None
                and abs(r["dose_t"] - event.time_s) < 0.05
            ]
            yield f"{what}: {_verdict(mine[0], event.time_s) if mine else _no_rest(lane, event)}"
        found = lesson(list(_answers(lane, rests)))
        if found is not None:
            yield f"{lane.tank}: {in_words(found)}"


def _no_rest(lane: Lane, dose: Event) -> str:
    """Why no rest was called for a dose: the next change came first, or none of us knows."""
    later = [e for e in lane.events if e.kind in ("dose", "water") and e.time_s > dose.time_s]
    after_s = min((e.time_s for e in later), default=math.inf) - dose.time_s
    if after_s < NEXT_S:
        return f"no rest of its own: the next change was recorded {length(after_s)} later"
    return "no rest was called"


def _answers(lane: Lane, rests: Iterable[Finding]) -> Iterable[Answer]:
    """The lane's doses that came to rest, with the step that each made."""
    for rest in rests:
        if rest["probe"] != lane.probe or rest.get("before_pct") is None:
            continue
        for t, dose in lane.doses.items():
            if abs(t - rest["dose_t"]) < 0.05:
                yield Answer(
                    dose, rest["before_pct"], rest["salinity_pct"], rest["step_u95_pct"] / 2.0
                )


def _verdict(rest: Finding, dose_t: float) -> str:
    at = f"at rest after {length(max(rest['rested_t'] - dose_t, 0.0))}"
    landed = pct(rest["salinity_pct"], rest["u95_pct"])
    said = {
        "agrees": "as predicted",
        "disagrees": "NOT as predicted",
        "no-prediction": "no prediction",
    }[rest["verdict"]]
    if rest.get("predicted_pct") is not None:
        said += f" ({pct(rest['predicted_pct'], rest['predicted_u95_pct'])})"
    why = "; ".join(rest.get("why") or ())
    return f"{at} at {landed}, {said}" + (f": {why}" if why else "")


def _faults(night: Night) -> Iterable[str]:
    return (_words(night, f) for f in lasting(night, "fault"))


def _trends(night: Night) -> Iterable[str]:
    for f in lasting(night, "trend"):
        rate = f"{f['pct_per_h']:+.2g} +- {f['u95_pct_per_h']:.1g} %/h"
        when = span(night, f["from_t"], f["to_t"])
        yield f"{f['tank']}: {rate} {when}; fits: {', '.join(f['likely'])}"


def _questions(night: Night) -> Iterable[str]:
    return (_words(night, f) for f in lasting(night, "notice") if f["to_t"] is not None)


def _gaps(night: Night) -> Iterable[str]:
    same: dict[str, list[str]] = {}  # what several probes have to say alike
    for lane in night.lanes:
        for said in _lost(night, lane):
            same.setdefault(said, []).append(lane.probe)
    yield from (f"{', '.join(probes)}: {said}" for said, probes in same.items())
    for lane in night.lanes:
        for what, n in sorted(lane.dropped.items()):
            yield f"{lane.probe}: {n} lines of the log dropped: {what}"
        yield from lane.messages


def _lost(night: Night, lane: Lane) -> Iterable[str]:
    """Times without a link."""
    lost: Event | None = None
    for event in (e for e in lane.events if e.kind == "gap"):
        if event.fields["link"] == "lost":
            lost = event
        elif lost is not None:
            yield f"no readings ({_why(lost)}) {span(night, lost.time_s, event.time_s)}"
            lost = None
    if lost is not None:
        yield f"no readings ({_why(lost)}) {span(night, lost.time_s, None)}"


def _why(lost: Event) -> str:
    why = str(lost.fields.get("why") or "link lost")
    return LOST.get(why, why)


def handover(night: Night) -> list[Section]:
    """What is open, for whoever comes next."""
    silences = [
        f"{e.fields['what']} until {utc_of(e.fields['until_utc']).astimezone():%d %b %H:%M}"
        for lane in night.lanes
        for e in lane.events
        if e.kind == "silence" and utc_of(e.fields["until_utc"]) > night.when(night.to_t)
    ]
    told = [
        Section("Open now", list(_open(night)) or ["nothing: all that began is over"], urgent=True),
        Section("Silenced", sorted(set(silences))),
        Section("Doses", list(_doses(night))),
        Section("Checks, notes, orders", list(told_orders(night))),
        Section("How sure", [_how_sure(lane) for lane in night.lanes]),
    ]
    return [section for section in told if section.lines]


def _how_sure(lane: Lane) -> str:
    if not lane.minutes:
        return f"{lane.probe}: no readings"
    n = len(lane.minutes)
    shares = {
        word: sum(m.belief == word for m in lane.minutes) / n
        for word in ("believed", "doubtful", "not-believed", "out")
    }
    said = ", ".join(f"{word} {_share(share)}" for word, share in shares.items() if share)
    doubts = sorted(m.u95_pct for m in lane.minutes if math.isfinite(m.u95_pct))
    doubt = f"; typical doubt +- {size(doubts[len(doubts) // 2])} %" if doubts else ""
    return f"{lane.probe} in {lane.tank}: {said}{doubt}"


def _share(share: float) -> str:
    """Never 0 % of what was, nor 100 % of what was not all."""
    if 0 < share < 0.01:
        return "below 1 %"
    return "over 99 %" if 0.99 < share < 1 else f"{100 * share:.0f} %"
