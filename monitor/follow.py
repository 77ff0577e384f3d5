"""Watching is replaying a log that is still growing: log text in, findings out.

The service feeds a Follower the very text it has just appended, a watcher what the file grew by, a
replay whole files. Nothing after this point knows which it was.
"""

from __future__ import annotations

from collections import Counter

from monitor.bench import Bench
from monitor.chain import Chain, Watch
from monitor.findings import Finding
from monitor.logbook.parser import BareParser, Parser


class Follower:
    """One run of one probe, from the text of its parts in order."""

    def __init__(
        self,
        probe: str,
        given: Bench | None = None,
        first_part: int = 1,
        watch: Watch | None = None,
        parser: Parser | BareParser | None = None,
    ) -> None:
        """`given`: judge by this bench, not by the log's; `parser`: for what is no log of ours.

        Raises CalibrationError if the given bench's standards allow no fit.
        """
        self.chain = Chain(probe, given, 0 if first_part == 1 else None, watch)
        self._parser: Parser | BareParser = parser or Parser()
        self._dropped: Counter[str] = Counter()

    def feed(self, data: bytes) -> list[Finding]:
        """Findings that these further bytes of the log lead to."""
        found: list[Finding] = []
        for item in self._parser.feed(data):
            found += self.chain.feed(item)
        return found

    def next_part(self) -> list[Finding]:
        """The part is at its end; what is fed from here on is the next one."""
        found: list[Finding] = []
        for item in self._parser.finish():
            found += self.chain.feed(item)
        self._dropped += self._parser.dropped
        self._parser = Parser()
        return found

    @property
    def dropped(self) -> Counter[str]:
        """Lines that were no row and no event, by what was wrong with them."""
        late = Counter({"row of a closed second": self.chain.dropped}) if self.chain.dropped else {}
        return self._dropped + self._parser.dropped + Counter(late)
