"""The night as text for a terminal, as one self-contained HTML file, and as CSV of minutes.

Every text from outside goes through `printable`; the HTML holds no script and no remote reference
and says so in its Content-Security-Policy.
"""

from __future__ import annotations

import html
import math
import textwrap
from collections.abc import Iterable, Sequence

from monitor import cautions
from monitor.printable import printable
from monitor.report.digest import Section, sections
from monitor.report.night import Lane, Minute, Night
from monitor.report.words import length

BARS = "▁▂▃▄▅▆▇█"
WIDE, HIGH = 720, 120  # px of a tank's picture
TEXT_MOST = 400
JOINED = "\u00a0"  # a blank where no line ends


def text(
    night: Night,
    columns: int = 80,
    told: Sequence[Section] | None = None,
    title: str = "Report",
) -> str:
    """The page for a terminal; `told` instead of the whole report's sections."""
    lines = [*_head(night, title), ""]
    for section in told or sections(night):
        lines.append(section.title)
        for said in section.lines:
            lines += _wrapped(printable(said, TEXT_MOST), columns - 2)
        lines.append("")
    for lane in night.lanes:
        lines += [*_bars(lane, columns), ""]
    for caution in cautions.REPORT:
        lines += textwrap.wrap(caution, columns)
    return "\n".join(lines) + "\n"


def _wrapped(said: str, columns: int) -> list[str]:
    """Lines of this width; a figure stays with its doubt and its unit."""
    kept = said.replace(" %", f"{JOINED}%").replace("+- ", f"+-{JOINED}")
    lines = textwrap.wrap(
        kept, columns, initial_indent="  ", subsequent_indent="    ", break_on_hyphens=False
    )
    return [line.replace(JOINED, " ") for line in lines]


def _head(night: Night, title: str = "Report") -> list[str]:
    first, last = night.when(night.from_t), night.when(night.to_t)
    lasted = length(night.to_t - night.from_t)
    stamps = [when.strftime("%Y-%m-%d %H:%M %z") for when in (first, last)]
    return [f"{title} from {stamps[0]} to {stamps[1]} ({lasted}, local time)"]


def _columns(lane: Lane, n: int) -> list[list[Minute]]:
    """The lane's minutes dealt into n columns of equal time."""
    if not lane.minutes:
        return []
    first, last = lane.minutes[0].t, lane.minutes[-1].t
    dealt: list[list[Minute]] = [[] for _ in range(n)]
    for minute in lane.minutes:
        dealt[min(int((minute.t - first) / max(last - first, 60.0) * n), n - 1)].append(minute)
    return dealt


def _bars(lane: Lane, columns: int) -> Iterable[str]:
    """A tank's night in two lines of text: salinity, and where the probe was not believed."""
    known = [m.mean_pct for m in lane.minutes if math.isfinite(m.mean_pct)]
    name = printable(f"{lane.tank} ({lane.probe})", 40)
    if not known:
        yield f"{name}: no salinity"
        return
    low, high = min(known), max(known)
    yield f"{name}: {low:.4f} to {high:.4f} %"
    bars = marks = ""
    whole_min = round((lane.minutes[-1].t - lane.minutes[0].t) / 60.0) + 1
    for dealt in _columns(lane, min(columns - 2, whole_min)):
        values = [m.mean_pct for m in dealt if math.isfinite(m.mean_pct)]
        if values:
            share = (sum(values) / len(values) - low) / (high - low) if high > low else 0.5
            bars += BARS[min(int(share * len(BARS)), len(BARS) - 1)]
        else:
            bars += " "
        marks += _mark(dealt)
    yield f"  {bars}"
    if marks.strip():
        yield f"  {marks}".rstrip()
        yield "  (? doubtful, x not believed, o out of the tank)"


def _mark(dealt: Sequence[Minute]) -> str:
    beliefs = {minute.belief for minute in dealt}
    for belief, mark in (("not-believed", "x"), ("out", "o"), ("doubtful", "?")):
        if belief in beliefs:
            return mark
    return " "


def page(night: Night) -> str:
    """The page as one HTML file that needs nothing else."""
    head = html.escape(_head(night)[0])
    body = "".join(_section(section) for section in sections(night))
    pictures = "".join(_figure(night, lane) for lane in night.lanes)
    warned = "".join(f"<p>{html.escape(caution)}</p>" for caution in cautions.REPORT)
    return (
        "<!doctype html>\n"
        '<html lang="en"><head><meta charset="utf-8">'
        '<meta http-equiv="Content-Security-Policy" content="default-src \'none\';'
        " style-src 'unsafe-inline'\">"
        '<meta name="viewport" content="width=device-width">'
        f"<title>{head}</title><style>{STYLE}</style></head><body>"
        f"<h1>{head}</h1>{body}{pictures}<footer>{warned}</footer></body></html>\n"
    )


STYLE = (
    "body{font:16px/1.5 system-ui,sans-serif;max-width:46rem;margin:2rem auto;padding:0 1rem;"
    "color:#222;background:#fff}h1{font-size:1.2rem}h2{font-size:1rem;margin:1.2rem 0 .2rem}"
    "ul{margin:0;padding-left:1.2rem}.urgent{border-left:4px solid #D55E00;padding-left:.8rem}"
    "figure{margin:1.5rem 0}figcaption{font-size:.9rem}svg{width:100%;height:auto}"
    "footer{font-size:.85rem;color:#555;border-top:1px solid #ccc;margin-top:2rem}"
    "@media(prefers-color-scheme:dark){body{color:#ddd;background:#111}footer{color:#999}}"
)


def _section(section: Section) -> str:
    items = "".join(f"<li>{html.escape(printable(said, TEXT_MOST))}</li>" for said in section.lines)
    kind = ' class="urgent"' if section.urgent else ""
    return f"<section{kind}><h2>{html.escape(section.title)}</h2><ul>{items}</ul></section>"


def _figure(night: Night, lane: Lane) -> str:
    """One tank's salinity: band of each minute's lowest and highest, gaps left open."""
    name = html.escape(printable(f"{lane.tank} ({lane.probe})", 80))
    known = [m for m in lane.minutes if math.isfinite(m.mean_pct)]
    if not known:
        return f"<figure><figcaption>{name}: no salinity</figcaption></figure>"
    low, high = min(m.low_pct for m in known), max(m.high_pct for m in known)
    high = high if high > low else low + 1e-4
    whole = max(night.to_t - night.from_t, 60.0)

    def at(t: float, value: float) -> str:
        x = WIDE * (t - night.from_t) / whole
        return f"{x:.1f},{HIGH - HIGH * (value - low) / (high - low):.1f}"

    shapes = []
    for run in _unbroken(known):
        upper = [at(m.t, m.high_pct) for m in run]
        lower = [at(m.t, m.low_pct) for m in reversed(run)]
        shapes.append(f'<polygon points="{" ".join(upper + lower)}" fill="#56B4E9" opacity=".4"/>')
        line = " ".join(at(m.t, m.mean_pct) for m in run)
        shapes.append(f'<polyline points="{line}" fill="none" stroke="#0072B2"/>')
    for event in lane.events:
        if event.kind == "dose" and night.from_t <= event.time_s <= night.to_t:
            x = WIDE * (event.time_s - night.from_t) / whole
            shapes.append(
                f'<line x1="{x:.1f}" x2="{x:.1f}" y1="0" y2="{HIGH}" stroke="#D55E00"'
                ' stroke-dasharray="2 3"/>'
            )
    return (
        f'<figure><svg viewBox="0 0 {WIDE} {HIGH}" role="img" aria-label="{name}">'
        f"{''.join(shapes)}</svg><figcaption>{name}: {low:.4f} to {high:.4f} %, from"
        f" {night.when(night.from_t):%H:%M} to {night.when(night.to_t):%H:%M};"
        " dashed: doses</figcaption></figure>"
    )


def _unbroken(minutes: Sequence[Minute]) -> list[list[Minute]]:
    runs: list[list[Minute]] = []
    for minute in minutes:
        if not runs or minute.t - runs[-1][-1].t > 61:
            runs.append([])
        runs[-1].append(minute)
    return runs


def table(night: Night) -> str:
    """Minute summaries as CSV: local time, salinities in %, temperature in C."""
    rows = ["local_time,probe,tank,mean_pct,low_pct,high_pct,u95_pct,temp_c,readings,belief"]
    for lane in night.lanes:
        for m in lane.minutes:
            figures = [f"{v:.6f}" if math.isfinite(v) else "" for v in m[1:5]]
            temp = f"{m.temp_c:.3f}" if math.isfinite(m.temp_c) else ""
            stamp = night.when(m.t).isoformat(timespec="seconds")
            cells = [stamp, lane.probe, lane.tank, *figures, temp, str(m.readings), m.belief]
            rows.append(",".join(cells))
    return "\n".join(rows) + "\n"
