"""Names of what can be drawn with, and their numbers on a canvas."""

from __future__ import annotations

INKS = ("", "faint", "trace", "expect", "mark", "doubt", "act", "plan", "strong", "alarm")
PLAIN, FAINT, TRACE, EXPECT, MARK, DOUBT, ACT, PLAN, STRONG, ALARM = range(len(INKS))
PAPERS = ("", "/aim", "/chosen")
CLEAR, AIM, CHOSEN = range(len(PAPERS))
TONES = {"calm": "", "moving": "expect", "doubt": "doubt", "act": "act"}
