"""A calibration as plain text: the curve with its standards, and how far each is off it."""

from __future__ import annotations

import math

import numpy as np

from monitor.calibration.calibration import Calibration
from monitor.calibration.candidates import candidates

WIDTH, HEIGHT = 60, 14
BAR = 15  # characters to either side


def picture(calibration: Calibration) -> str:
    """Curve, residuals, parameters, and what a straight line would do; many lines."""
    return "\n".join([*curve(calibration), "", *residuals(calibration), "", *summary(calibration)])


def curve(calibration: Calibration) -> list[str]:
    """Period against salinity on logarithmic axes: `.` the model, `o` the standards."""
    shown = [s for s in calibration.standards if s["salinity_pct"] > 0]
    if not shown:
        return []
    low = math.log(calibration.lowest_pct / 1.3)
    high = math.log(calibration.highest_pct * 1.3)
    columns = np.exp(low + (np.arange(WIDTH) + 0.5) / WIDTH * (high - low))
    model = [math.log(calibration.period_us(s, calibration.temp_c)) for s in columns.tolist()]
    points = [(math.log(s["salinity_pct"]), math.log(s["period_us"])) for s in shown]
    top = max([*model, *(p for _, p in points)])
    bottom = min([*model, *(p for _, p in points)])
    rows = [[" "] * WIDTH for _ in range(HEIGHT)]

    def row(ln_period: float) -> int:
        return min(int((top - ln_period) / max(top - bottom, 1e-9) * HEIGHT), HEIGHT - 1)

    for x, ln_period in enumerate(model):
        rows[row(ln_period)][x] = "."
    for ln_salinity, ln_period in points:
        x = min(int((ln_salinity - low) / (high - low) * WIDTH), WIDTH - 1)
        rows[row(ln_period)][x] = "o"
    lines = [f"{'':>9} |{''.join(cells).rstrip()}" for cells in rows]
    lines[0] = f"{math.exp(top):>6.0f} us" + lines[0][9:]
    lines[-1] = f"{math.exp(bottom):>6.0f} us" + lines[-1][9:]
    ends = f"{math.exp(low):.3g} %", f"{math.exp(high):.3g} %"
    axis = f"{'':>9} +{'-' * WIDTH}"
    return [*lines, axis, f"{'':>11}{ends[0]}{ends[1]:>{WIDTH - len(ends[0])}}"]


def residuals(calibration: Calibration) -> list[str]:
    """How far each standard reads off what it is, in %, with a bar."""
    found = []
    for s in calibration.standards:
        temp = s.get("temp_c", calibration.temp_c)
        read = float(calibration.salinity_pct(np.array([s["period_us"]]), np.array([temp]))[0])
        off = 100 * (read / s["salinity_pct"] - 1) if s["salinity_pct"] > 0 else math.nan
        found.append((s, read, off))
    sizes = sorted(abs(off) for _, _, off in found if off == off)
    size = min(sizes[-1], 5 * sizes[len(sizes) // 2]) or 1.0 if sizes else 1.0
    lines = [" standard        period     reads back       off"]
    for s, read, off in found:
        bar = [" "] * (2 * BAR + 1)
        bar[BAR] = "|"
        if off == off:
            bar[BAR + round(max(-1.0, min(1.0, off / size)) * BAR)] = "*"
        text = f"{off:+8.3f} %" if off == off else f"{'':>10}"
        lines.append(
            f"{s['salinity_pct']:>8.4g} %  {s['period_us']:>9.2f} us  {read:>9.5f} %  {text}  "
            + "".join(bar).rstrip()
        )
    return lines


def summary(calibration: Calibration) -> list[str]:
    """What was found, and how far a straight line would be off in between."""
    t0, _, p, _, b = calibration.theta
    sd = [math.sqrt(max(calibration.cov[i][i], 0.0)) for i in range(5)]
    lines = [
        f"circuit's own time {t0:.1f} +- {2 * sd[0]:.1f} us, polarisation exponent"
        f" {p:.4f} +- {2 * sd[2]:.4f}, water's own {1000 * b:.1f} +- {2000 * sd[4]:.1f} uS/cm",
    ]
    if len({s["salinity_pct"] for s in calibration.standards if s["salinity_pct"] > 0}) > 2:
        lines.append(line_error(calibration))
    middle = (calibration.lowest_pct + calibration.highest_pct) / 2
    u = calibration.u_pct(calibration.period_us(middle, calibration.temp_c), calibration.temp_c)
    lines.append(f"in the middle, at {middle:.3g} %, it is good to {200 * u / middle:.2g} % (95 %)")
    return [*lines, *calibration.remarks]


def line_error(calibration: Calibration) -> str:
    """How far the straight line through the same standards would be off, at its worst inside."""
    from monitor.bench import Standard

    standards = [Standard(**dict(s)) for s in calibration.standards]
    straight = candidates(standards, calibration.medium)["line, S on P"]
    salinity = np.linspace(calibration.lowest_pct, calibration.highest_pct, 50)
    periods = np.array([calibration.period_us(s, calibration.temp_c) for s in salinity.tolist()])
    off = straight(periods, np.full(50, calibration.temp_c)) / salinity - 1
    worst = int(np.argmax(np.abs(off)))
    return (
        f"a straight line through them would be {100 * off[worst]:+.0f} % off"
        f" at {salinity[worst]:.3g} %"
    )
