"""What a screen needs to know, folded from judged seconds and findings. No drawing, no I/O."""

from monitor.view.lane import Lane
from monitor.view.marks import Dosed, Span
from monitor.view.traces import Raw, Trace

__all__ = ["Dosed", "Lane", "Raw", "Span", "Trace"]
