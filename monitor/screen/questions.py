"""Acts that answer a question about a probe: a notice, a check, another set of standards."""

from __future__ import annotations

import math
from typing import Any

from monitor.printable import printable
from monitor.screen.figures import Scale, short_text
from monitor.screen.forms import Field, Form, Preview, figures_of
from monitor.view import Lane

CHECK, COMPARE = "a check standard", "another instrument"


def answer(lane: Lane) -> Form | None:
    """Answer what is asked; None where nothing is."""
    asked = {what: said for (kind, what), said in lane.lasting.items() if kind == "notice"}
    if not asked:
        return None
    whats = tuple(asked)

    def preview(form: Form, lane: Lane) -> Preview:
        notice = asked[form["of"]]
        told = Preview([printable(str(notice.get("text", "")))])
        if form["answer"]:
            from_t = notice["from_t"] - lane.offset_s
            fields = {"of": form["of"], "from_t": from_t, "answer": form["answer"]}
            told.order = ("answer", fields)
        return told

    fields = [Field("of", "about", whats[0], whats), Field("answer", "answer")]
    return Form("an answer", fields, preview)


def measured(lane: Lane) -> Form:
    """What a check standard holds, or another instrument reads."""
    kinds = (COMPARE, CHECK)

    def preview(form: Form, lane: Lane) -> Preview:
        told = Preview()
        figures = figures_of(form, ("salinity", "u"), told)
        salinity = figures["salinity"]
        if told.wrong or salinity is None:
            told.lines = told.lines or ["type the salinity that it has, or that the other reads"]
            return told
        if salinity > 26.0:
            told.wrong = f"{salinity:g} %: more than water takes; expected 0 to 26 %"
            return told
        if math.isfinite(lane.value) and lane.calibrated:
            off = short_text(abs(lane.value - salinity), 0.1 * lane.u95, Scale("%"))
            side = "more" if lane.value > salinity else "less"
            told.lines.append(f"the probe reads {off} % {side}")
        fields: dict[str, Any] = {"salinity_pct": salinity}
        if figures["u"]:
            fields["u_pct"] = figures["u"]
        if form["what"]:
            fields["what"] = form["what"]
        told.order = ("check" if form["kind"] == CHECK else "compare", fields)
        return told

    fields = [
        Field("kind", "of", kinds[0], kinds),
        Field("salinity", "salinity, %"),
        Field("u", "standard doubt, %"),
        Field("what", "which"),
    ]
    return Form("a measurement", fields, preview)


def calibration(lane: Lane) -> Form | None:
    """Use another set of standards from here on; None where there are none to choose from."""
    bench = lane.settings
    standards = bench.probe[lane.probe].standard if bench is not None else ()
    names = tuple(dict.fromkeys(each.set for each in standards if each.set))
    if not names:
        return None

    def preview(form: Form, lane: Lane) -> Preview:
        n = sum(each.set == form["set"] for each in standards)
        said = f"{n} readings of standards; the probe is judged anew by them from here on"
        return Preview([said], order=("calibration", {"set": form["set"]}))

    return Form("calibration", [Field("set", "standards", names[-1], names)], preview)
