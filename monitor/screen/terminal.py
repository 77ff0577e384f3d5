"""A terminal that may go away without a word: then the app ends, instead of waiting for ever.

Textual's writer is a thread that dies with its terminal; whoever writes on would block, and the
reader would spin. A hang-up is told by SIGHUP only where the terminal controls the process.
"""

from __future__ import annotations

import termios

from textual.drivers.linux_driver import LinuxDriver

LOOK_S = 1.0


class Terminal(LinuxDriver):
    """The terminal's driver; it drops what nobody can see, and asks the app to leave."""

    _gone = False

    def start_application_mode(self) -> None:
        """Begin, and look now and then whether the terminal is there."""
        super().start_application_mode()  # type: ignore[no-untyped-call]
        self._look()

    def _look(self) -> None:
        try:
            termios.tcgetattr(self.fileno)
        except termios.error:
            self._leave()
        else:
            self._loop.call_later(LOOK_S, self._look)

    def _leave(self) -> None:
        if not self._gone:
            self._gone = True
            self._app.call_later(self._app.exit)

    def write(self, data: str) -> None:
        """Write, as long as there is somebody who reads."""
        writer = self._writer_thread
        if writer is not None and writer.is_alive() and not self._gone:
            super().write(data)
        else:
            self._leave()
