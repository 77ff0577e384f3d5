"""What a person should be asked or told: doses and their records, lifts, another probe."""

from monitor.notices.board import Notices

__all__ = ["Notices"]
