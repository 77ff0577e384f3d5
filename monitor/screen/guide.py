"""The help page: the screen taught in one page, and the keys."""

from __future__ import annotations

from monitor.screen import text
from monitor.screen.draw import Run

KEYS = (  # key, short word for the foot, what it does, action
    ("up/down", "tank", "choose a tank (or click it)", ""),
    ("d", "dose", "plan a dose, see where it lands, record it", "dose"),
    ("s", "strike", "strike a dose out", "strike"),
    ("n", "note", "leave a note", "note"),
    ("o", "out/back", "the probe is out of the tank, or back", "lift"),
    ("w", "water", "water that is no dose", "water"),
    ("z", "silence", "silence an alarm", "silence"),
    ("a", "answer", "answer what is asked", "answer"),
    ("m", "measure", "a check standard, or what another instrument reads", "measured"),
    ("l", "standards", "judge by another set of standards from here on", "calibration"),
    ("+ -", "zoom", "show less or more time (or the wheel)", "closer"),
    ("left/right", "pan", "go back and forth in time; 0 is now", ""),
    ("c", "cursor", "read values with left and right (or click the plot)", "cursor"),
    ("r", "order", "tanks as the bench has them, or worst first", "order"),
    ("u", "unit", "%, g/kg, mS/cm at 25 C", "unit"),
    ("b", "light", "dark or light", "light"),
    ("?", "help", "this page", "help"),
    ("q", "quit", "leave; what records goes on", "quit"),
)
REPLAY_KEYS = (
    ("space", "pause", "play and pause", "pause"),
    ("< >", "speed", "half or twice as fast", "faster"),
    ("f", "next", "on to the next finding", "next"),
    ("g", "start", "back to the start", "start"),
)
PAGE = (
    ("strong", "Is anything wrong?  The top line says which tank needs you, or that all is quiet."),
    ("", "CAPITALS and the marks ~ stand where a person is needed or a probe is at fault."),
    ("strong", "Has it come to rest, and where?  One sentence a tank."),
    ("", "0.0931 ±0.0004 : the salinity and its doubt (95 %); there are no digits beyond it."),
    (
        "",
        "├··━◆━··┤ : the aim between ├ and ┤; ◆ where the tank is, ━ its doubt. Surely inside when",
    ),
    ("", "the bar keeps clear of both; ┿ where the doubt reaches across; ┊ where it will land."),
    (
        "",
        "Left of │ the past: dots are single readings, the curve is filtered, gaps are true gaps.",
    ),
    ("", "Right of │ what is expected: the cone narrows to the landing; ┊ the moment of rest."),
    ("", "▲ a dose   ◆ rest was found   ∗ a note   ~ a fault, named   ╵now the present"),
    ("strong", "Can I believe it?  Below the tank's name: the fault, its evidence, what to do."),
    ("", "◇ and faint figures: doubtful. No figure: not believed, out of the tank, or no link."),
)


def page(width: int, height: int, replay: bool) -> list[list[Run]]:
    """The help page in `height` rows."""
    rows: list[list[Run]] = []
    for style, said in PAGE:
        rows += [[(f" {part}", style)] for part in text.wrapped(said, width - 2, 3)]
    rows.append([])
    keys = [*KEYS, *(REPLAY_KEYS if replay else ())]
    two = width >= 100
    for i in range(0, len(keys), 2 if two else 1):
        runs: list[Run] = []
        for key, _, meaning, _ in keys[i : i + (2 if two else 1)]:
            size = width // 2 - 12 if two else width - 13
            runs += [(f" {key:>10} ", "strong"), (text.fit(meaning, size), "")]
        rows.append(runs)
    if len(rows) > height:  # keys first where there is no room for all
        rows = [row for row in rows if row][-(height - 1) :]
    rows = rows[: height - 1] + [[(" any key goes back", "faint")]]
    return [text.row(runs, width) for runs in rows + [[]] * (height - len(rows))]
