"""One probe's recording: the wire's bytes into log text, the text to the file, then to the judges.

Rules:
- The log is appended before anything else sees a row.
- Readings wait at most until the next `flush`; an event first flushes what waits, and so does the
  first reading past a second's end: what that second tells is due.
- A write that fails pauses the recording. What comes in then is lost to the log and counted; once
  there is room again the gap is written, from the last line before it.
- A judgement that fails is a bug of ours: it is said, and the recording goes on without it.
- Silence is written down as `alive`: every second for a minute, then every ten seconds; and at
  least every ten minutes in any case.
"""

from __future__ import annotations

import errno
from collections.abc import Callable, Mapping, Sequence
from typing import Any, NamedTuple

from drivers.line import Decoder
from monitor.blocks import Event
from monitor.clock import Clock
from monitor.findings import Finding
from monitor.follow import Follower
from monitor.logbook import codec
from monitor.logbook.writer import LogWriteError, LogWriter

ALIVE_S = 600.0
CARRY_S = 600.0
CARRY_ROWS = 100_000  # or after so many rows: a restart judges again what came since
SILENT_EACH_S = 60.0
SILENT_THEN_S = 10.0
REJECTED_S = 60.0
STALLED_S = 2.0  # of the host: as long without a flush, the machine may have slept

Head = list[tuple[str, Mapping[str, Any]]]


class Past(NamedTuple):
    """What the run before tells this one, in times of this run."""

    carried: Mapping[str, Any]
    again: Sequence[Event] = ()  # recorded, but never judged: its end came first
    silences: Mapping[str, str] = {}  # what is silenced, until when in UTC


def _nothing(what: str, text: str | None) -> None:
    """Nobody wants to hear of troubles."""


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
        trouble: Callable[[str, str | None], None] = _nothing,
        stalled: Callable[[], None] = lambda: None,
        waiting: Callable[[], None] = lambda: None,
    ) -> None:
        """`zero_s`: the clock's reading at the run's `started`.

        `tell` gets findings, `say` messages, `trouble` what keeps this from its work and why
        (None: over). `stalled` is called before bytes are taken that came after a long pause,
        `waiting` when readings begin to wait for a flush.
        """
        self.probe = probe
        self.decoder = decoder
        self.writer = writer
        self.follower = follower
        self.settings: Head = []  # bench and calibration in force, for the head of a part
        self.rows = 0
        self.unwritten = 0  # readings that came while nothing could be written
        self.paused: str | None = None  # why nothing can be written
        self.broken: str | None = None  # why nothing is judged
        self.linked = False
        self.silences: dict[str, str] = {}  # what is silenced, until when in UTC
        self.zero_s = zero_s
        self._clock = clock
        self._tell = tell
        self._say = say
        self._trouble = trouble
        self._stalled = stalled
        self._call_flush = waiting
        self._waiting: list[str] = []
        self._owed = ""  # of a part's head: to be written before anything else
        self._last_t = 0.0  # of the newest line
        self._written_t = 0.0  # of the newest line that is in the file
        self._last_row_t = 0.0
        self._alive_t = 0.0
        self._carried_t = 0.0
        self._carried_rows = 0
        self._rejected_t = 0.0
        self._seen_s = clock.now_s()

    @property
    def run_s(self) -> float:
        """Time of the run now, never before the newest line."""
        return max(self._clock.now_s() - self.zero_s, self._last_t)

    def begin(self, settings: Head, past: Past) -> None:
        """Write the head of the first part. Raises LogWriteError, but not for a full disk."""
        self.settings = settings
        self._silenced(past.silences)
        again = (codec.event_line(*event) for event in past.again)
        try:
            self._put(self._head_lines(past.carried) + "".join(again), owed=True)
        except LogWriteError as wrong:
            if wrong.errno not in (errno.ENOSPC, errno.EDQUOT):
                raise
            self._pause(wrong)

    def on_bytes(self, data: bytes, now_s: float) -> None:
        """Bytes of the wire, stamped when they arrived."""
        if now_s - self._seen_s > STALLED_S * self._clock.speed:
            self._stalled()
            self._seen_s = now_s
        readings = self.decoder.feed(data, now_s)
        if not readings:
            return
        if self.paused:
            self.unwritten += len(readings)
            return
        t = max(now_s - self.zero_s, self._last_t)
        stamp, before = f"{t:.3f}", self._last_t
        if not self._waiting:
            self._call_flush()
        self._last_t = self._last_row_t = float(stamp)
        self._waiting += [codec.row_line(stamp, *reading) for reading in readings]
        self.rows += len(readings)
        if int(self._last_t) > int(before):
            self.flush()

    def flush(self) -> None:
        """Write and judge the readings that wait."""
        self._seen_s = self._clock.now_s()
        if self._waiting:
            text = "".join(self._waiting)
            self._waiting = []
            self.unwritten += text.count("\n", self._try(text))

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
        lines += codec.event_line(time_s, kind, fields)
        if kind == "silence":
            self._silenced({fields["what"]: fields["until_utc"]})
        return self._try(lines) == len(lines)

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
        """A time in which nothing could be recorded is over: write both its ends.

        The first belongs to the last line before it, so nothing may close that second first.
        """
        self.flush()
        if self.paused:
            return
        lost = codec.event_line(self._written_t, "gap", {"link": "lost", "why": why})
        self._try(lost + codec.event_line(self._stamp(), "gap", {"link": "back"}))

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
        fresh = self.rows - self._carried_rows >= CARRY_ROWS
        if (now - self._carried_t >= CARRY_S or fresh) and not self.broken:
            self._carried_t, self._carried_rows = now, self.rows
            self._try_carry()
        if now - self._rejected_t >= REJECTED_S and (told := self.decoder.take_rejected()):
            self._rejected_t = now
            self.event("rejected", told)
        for note in self.decoder.take_notes():
            self._say(f"{self.probe}: {note}")

    def next_part(self) -> bool:
        """UTC midnight: the run goes on in its next part; False while it cannot."""
        self.flush()
        if self.paused:
            return False
        carried = {} if self.broken else self._carry()
        try:
            self.writer.next_part()
        except LogWriteError as wrong:
            self._pause(wrong)
            return False
        if not self.broken:
            self._tell(self.follower.next_part())
        self._owe(self._head_lines(carried))
        return True

    def change(self, settings: Head) -> None:
        """Other settings are in force from here on."""
        self.flush()
        self.settings = settings
        now = self._stamp()
        self._owe("".join(codec.event_line(now, *event) for event in settings))

    def end(self) -> None:
        """Close the run."""
        self.flush()
        self.event("end", {})
        self.writer.close()
        if told := self.decoder.take_rejected():
            self._say(f"{self.probe}: {told['n']} more lines were no reading: {told['why']}")

    def _try_carry(self) -> None:
        try:
            self.event("carried", self._carry())
        except codec.EventError as wrong:
            self._trouble("memory", f"what a restart would need cannot be written: {wrong}")

    def _carry(self) -> Mapping[str, Any]:
        self._silenced({})
        return {**self.follower.chain.carry(), "silences": self.silences}

    def _silenced(self, more: Mapping[str, str]) -> None:
        """Keep these silences beside those that are not over."""
        now = self._clock.utc()
        both = {**self.silences, **more}
        self.silences = {what: utc for what, utc in both.items() if codec.utc_of(utc) > now}

    def _head_lines(self, carried: Mapping[str, Any]) -> str:
        now = self._stamp()
        self._carried_t = self._alive_t = now
        self._carried_rows = self.rows
        head = self.writer.head() + "".join(codec.event_line(now, *e) for e in self.settings)
        try:
            return head + codec.event_line(now, "carried", carried)
        except codec.EventError as wrong:
            self._trouble("memory", f"begun clean, what was carried over is no JSON: {wrong}")
            return head + codec.event_line(now, "carried", {})

    def _owe(self, text: str) -> None:
        """Write what the log cannot do without: now, or first of all when writing works again."""
        self._owed += text
        if not self.paused:
            text, self._owed = self._owed, ""
            self._try(text, owed=True)

    def _stamp(self) -> float:
        self._last_t = float(f"{self.run_s:.3f}")
        return self._last_t

    def _utc(self) -> str:
        return codec.utc_text(self._clock.utc())

    def _put(self, text: str, owed: bool = False) -> None:
        """Append, then judge what was appended. Raises LogWriteError."""
        data = text.encode("ascii")
        try:
            self.writer.append(data)
            self._written_t = self._last_t
        except LogWriteError as wrong:
            if owed:
                self._owed = text[wrong.written :]
            data = data[: wrong.written]
            self._written_t = _last_time(data, self._written_t)
            raise
        finally:
            self._judge(data)

    def _judge(self, data: bytes) -> None:
        if self.broken or not data:
            return
        try:
            found = self.follower.feed(data)
        except Exception as wrong:
            self.broken = f"{type(wrong).__name__}: {wrong}"[:200]
            self._trouble("judgement", f"judged no more, recorded still: {self.broken}")
            return
        if found:
            self._tell(found)

    def _try(self, text: str, owed: bool = False) -> int:
        """Append what can be; the number of characters that are in the file."""
        try:
            self._put(text, owed)
        except LogWriteError as wrong:
            self._pause(wrong)
            return wrong.written
        return len(text)

    def _pause(self, wrong: LogWriteError) -> None:
        self.paused = str(wrong)
        self._trouble("disk", f"recording paused: {wrong}")

    def _resume(self) -> None:
        since_t = self._written_t
        try:
            self.writer.recover()
            text, self._owed = self._owed, ""
            self._put(text, owed=True)
        except LogWriteError:
            return
        self.paused = None
        self.event("gap", {"link": "lost", "why": "disk"}, since_t)
        self.event("gap", {"link": "back"})
        if self.paused is None:
            self._say(f"{self.probe}: recording again; {self.unwritten} readings were not recorded")
            self.unwritten = 0
            self._trouble("disk", None)


def _last_time(data: bytes, before: float) -> float:
    """TIME of the last of these whole lines that has one."""
    for line in reversed(data.split(b"\n")):
        figure = line.split(b",")[0]
        if figure.replace(b".", b"", 1).isdigit():
            return float(figure)
    return before
