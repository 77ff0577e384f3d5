"""Coming to rest: where a dose will land, when, and whether it has, said with its doubt."""

from monitor.settling.settling import Settling

__all__ = ["Settling"]
