"""One probe's recording: the wire's bytes into log text, the text to the file, then to the judges.

Rules:
- The log is appended before anything else sees a row.
- Readings wait at most until the next `flush`; an event first flushes what waits.
- A write that fails pauses the recording. What comes in then is lost to the log and counted; once
  a write succeeds again the gap is written, from the last line before it.
- Silence is written down as `alive`: every second for a minute, then every ten seconds; and at
  least every ten minutes in any case.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from drivers.line import Decoder
from monitor.clock import Clock
from monitor.findings import Finding
from monitor.follow import Follower
from monitor.logbook import codec
from monitor.logbook.writer import LogWriteError, LogWriter

ALIVE_S = 600.0
CARRY_S = 600.0
SILENT_EACH_S = 60.0
SILENT_THEN_S = 10.0
REJECTED_S = 60.0

Head = list[tuple[str, Mapping[str, Any]]]


class Recorder:
    """Records one probe's run and judges it as it grows."""

    def __init__(
        self,
        probe: str,
        decoder: Decoder,
        writer: LogWriter,
        follower: Follower,
        clock: Clock,
        zero_s: float,
        tell: Callable[[list[Finding]], None],
        say: Callable[[str], None],
    ) -> None:
        """`zero_s`: the clock's reading at the run's `started`. `tell` findings, `say` messages."""
        self.probe = probe
        self.decoder = decoder
        self.writer = writer
        self.follower = follower
        self.settings: Head = []  # bench and calibration in force, for the head of a part
        self.rows = 0
        self.unwritten = 0  # readings that came while nothing could be written
        self.paused: str | None = None  # why nothing can be written
        self.linked = False
        self._clock = clock
        self._zero_s = zero_s
        self._tell = tell
        self._say = say
        self._waiting: list[str] = []
        self._last_t = 0.0  # of the newest line
        self._last_row_t = 0.0
        self._alive_t = 0.0
        self._carried_t = 0.0
        self._rejected_t = 0.0
        self._rejected: Mapping[str, Any] | None = None

    @property
    def run_s(self) -> float:
        """Time of the run now, never before the newest line."""
        return max(self._clock.now_s() - self._zero_s, self._last_t)

    def begin(self, settings: Head, carried: Mapping[str, Any]) -> None:
        """Write the head of the first part. Raises LogWriteError."""
        self.settings = settings
        self._append(self._head_lines(carried))

    def on_bytes(self, data: bytes, now_s: float) -> None:
        """Bytes of the wire, stamped when they arrived."""
        readings = self.decoder.feed(data, now_s)
        if not readings:
            return
        if self.paused:
            self.unwritten += len(readings)
            return
        t = max(now_s - self._zero_s, self._last_t)
        stamp = f"{t:.3f}"
        self._last_t = self._last_row_t = float(stamp)
        self._waiting += [codec.row_line(stamp, *reading) for reading in readings]
        self.rows += len(readings)

    def flush(self) -> None:
        """Write and judge the readings that wait."""
        if self._waiting:
            waiting, self._waiting = self._waiting, []
            self._try("".join(waiting))

    def event(self, kind: str, fields: Mapping[str, Any], time_s: float | None = None) -> bool:
        """Write an event; True once it is in the file. An old time is preceded by `alive`."""
        self.flush()
        if self.paused:
            return False
        now = self._stamp()
        lines = ""
        if time_s is not None and time_s < now:
            lines = codec.event_line(now, "alive", {"utc": self._utc()})
        else:
            time_s = now
        return self._try(lines + codec.event_line(time_s, kind, fields))

    def link(self, up: bool, why: str = "unplugged") -> None:
        """The port came or went."""
        if up != self.linked or not self.rows:
            self.linked = up
            if up:
                self.decoder.opened(self._clock.now_s())
                self.event("gap", {"link": "back"})
            else:
                self.event("gap", {"link": "lost", "why": why})

    def gap(self, why: str) -> None:
        """A time in which nothing could be recorded is over: write both its ends."""
        last = self._last_t
        self.event("gap", {"link": "lost", "why": why}, last)
        self.event("gap", {"link": "back"})

    def tick(self) -> None:
        """Call about once a second: says that time passes, and what was no reading."""
        self.flush()
        now = self.run_s
        if self.paused:
            self._resume()
            return
        silent = now - self._last_row_t
        due = SILENT_THEN_S if silent > SILENT_EACH_S else 1.0
        if (silent >= 1.0 and now - self._alive_t >= due) or now - self._alive_t >= ALIVE_S:
            self._alive_t = now
            self.event("alive", {"utc": self._utc()})
        if now - self._carried_t >= CARRY_S:
            self._carried_t = now
            self.event("carried", self.follower.chain.carry())
        if now - self._rejected_t >= REJECTED_S and (told := self.decoder.take_rejected()):
            self._rejected_t = now
            self.event("rejected", told)
        for note in self.decoder.take_notes():
            self._say(f"{self.probe}: {note}")

    def next_part(self) -> None:
        """UTC midnight: the run goes on in its next part."""
        self.flush()
        carried = self.follower.chain.carry()
        try:
            self.writer.next_part()
        except LogWriteError as wrong:
            self._pause(wrong)
            return
        self._tell(self.follower.next_part())
        self._try(self._head_lines(carried))

    def change(self, settings: Head) -> None:
        """Other settings are in force from here on."""
        self.settings = settings
        for kind, fields in settings:
            self.event(kind, fields)

    def end(self) -> None:
        """Close the run."""
        self.flush()
        self.event("end", {})
        self.writer.close()

    def _head_lines(self, carried: Mapping[str, Any]) -> str:
        now = self._stamp()
        self._carried_t = self._alive_t = now
        events = [*self.settings, ("carried", carried)]
        return self.writer.head() + "".join(codec.event_line(now, *event) for event in events)

    def _stamp(self) -> float:
        self._last_t = float(f"{self.run_s:.3f}")
        return self._last_t

    def _utc(self) -> str:
        return codec.utc_text(self._clock.utc())

    def _append(self, text: str) -> None:
        data = text.encode("ascii")
        self.writer.append(data)
        self._tell(self.follower.feed(data))

    def _try(self, text: str) -> bool:
        try:
            self._append(text)
        except LogWriteError as wrong:
            self._pause(wrong)
            return False
        return True

    def _pause(self, wrong: LogWriteError) -> None:
        self.paused = str(wrong)
        self._say(f"{self.probe}: recording paused: {wrong}")

    def _resume(self) -> None:
        try:
            self.writer.recover()
        except LogWriteError:
            return
        self.paused = None
        self.gap("disk")
        if self.paused is None:
            self._say(f"{self.probe}: recording again; {self.unwritten} readings were not recorded")
            self.unwritten = 0
