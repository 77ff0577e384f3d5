"""Findings to their files and to whoever listens; and the fold over all probes, live.

Rules:
- A findings file can be made again from its log: what cannot be written to it is counted and said,
  and stops nothing.
- Whoever listens must not block; one that fails is said once and listened to no less.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping, Sequence
from datetime import datetime
from pathlib import Path

from monitor.bench import Bench
from monitor.findings import Finding, line, shifted
from monitor.recorder import Recorder
from monitor.tanks import Seen, Together

Hook = Callable[[Finding], None]


class FindingsFile:
    """`PROBE-START.findings.jsonl`: whole lines only."""

    def __init__(self, folder: Path, probe: str, started: datetime) -> None:
        """Raises OSError."""
        self.path = folder / f"{probe}-{started:%Y%m%dT%H%M%SZ}.findings.jsonl"
        flags = os.O_WRONLY | os.O_APPEND | os.O_CREAT | os.O_NOFOLLOW | os.O_CLOEXEC
        self._fd = os.open(self.path, flags, 0o600)
        self._whole = os.fstat(self._fd).st_size
        self.missing = 0  # findings that are not in the file

    def write(self, finding: Finding) -> bool:
        """Append one; False if it could not be written whole."""
        data = (line(finding) + "\n").encode("ascii")
        try:
            if os.write(self._fd, data) == len(data):
                self._whole += len(data)
                return True
            os.ftruncate(self._fd, self._whole)
        except OSError:
            pass  # the log has all that it takes to say this again
        self.missing += 1
        return False

    def close(self) -> None:
        """No more findings."""
        os.close(self._fd)


class Telling:
    """All findings of a service pass through here once."""

    def __init__(self, folder: Path, say: Callable[[str], None]) -> None:
        self.hooks: list[Hook] = []
        self._folder = folder
        self._say = say
        self._files: dict[str, FindingsFile] = {}
        self._together = Together()
        self._failed: set[str] = set()

    def open(self, probe: str, started: datetime) -> None:
        """A run of this probe begins. Raises OSError."""
        self._files[probe] = FindingsFile(self._folder, probe, started)

    def close(self, probe: str) -> None:
        """It has ended."""
        if (file := self._files.pop(probe, None)) is not None:
            file.close()

    def tell(self, probe: str, found: Sequence[Finding], by_s: float) -> None:
        """These were concluded from this probe's log; `by_s` brings its times to the common."""
        self._together.take([shifted(finding, by_s) for finding in found] if by_s else found)
        for finding in found:
            self._keep(probe, finding)
            self.hook(finding)

    def hook(self, finding: Finding) -> None:
        """Hand a finding to all who listen."""
        for hook in self.hooks:
            try:
                hook(finding)
            except Exception as wrong:
                self._once(f"a listener failed ({type(wrong).__name__}: {wrong})")

    def tell_of_all(self, bench: Bench, recorders: Mapping[str, Recorder], zero_s: float) -> None:
        """What takes all the probes, up to the second that all their logs have closed.

        zero_s : the clock's reading from which the common times count
        """
        seen = []
        for name, recorder in recorders.items():
            chain, by = recorder.follower.chain, recorder.zero_s - zero_s
            tank = bench.probe[name].tank
            seen.append(Seen(name, tank, chain.closed_t + by, [(chain.watched, by)]))
        if not seen:
            return
        for finding in self._together.advance(seen)[1]:
            for each in seen:
                by = each.runs[0][1]
                if each.tank == finding["tank"]:
                    self._keep(each.probe, shifted(finding, -by) if by else finding)
            self.hook(finding)

    def _keep(self, probe: str, finding: Finding) -> None:
        file = self._files[probe]
        if not file.write(finding):
            self._once(f"{file.path.name}: cannot be written; `replay --findings` makes it again")

    def _once(self, text: str) -> None:
        if text not in self._failed:
            self._failed.add(text)
            self._say(text)
