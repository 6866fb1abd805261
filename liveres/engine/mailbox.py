"""Commands on their way to the audio thread: a triple buffer, written by one, read by one, neither ever waiting.

The writer fills its slot with every command it does not yet know to be taken and exchanges it for the shared one; the
reader exchanges its own for the shared one when that is fresh. Commands carry sequence numbers and are carried out
once, so a slot that was never taken loses nothing, and everything published together acts before the same frame.

Ordering: both exchanges are acquire and release, so a slot's contents are complete before the other side sees it.
Thread: control, under the lock of whoever owns it.
"""

from __future__ import annotations

import bisect
import time

import numpy as np

from liveres.errors import DeviceError
from liveres.kernels import callback as c
from liveres.kernels import state as s

PATIENCE_S = 1.0
# for the audio thread to take what fills a whole slot


class Mailbox:
    """Owns the buffers of the way to one audio thread."""

    def __init__(self):
        self.mail = np.zeros(1, c.MAIL)
        self.counts = np.zeros(3, np.int64)
        self.rows = np.zeros((3 * c.MAIL_ROWS, s.COMMAND_FIELDS))
        self.log = np.zeros((c.LOG_ROWS, 2))
        self.mail["slot"] = 1
        self._slot = 2
        self._waiting: list[list[float]] = []
        self._address = self.mail.ctypes.data
        self._taken_at = self._address + c.MAIL.fields["taken"][1]
        self._log_read = 0
        self._lasts: list[int] = []
        self._frames: list[int] = []
        # of every slot taken: its last command and the frame before which it was carried out

    def send(self, rows: list[list[float]]) -> None:
        """Publish commands, and again those not known to be taken.

        Raises : DeviceError - the audio thread takes nothing any more
        """
        self._read_log()
        deadline = time.monotonic() + PATIENCE_S
        while True:
            taken = self.taken
            self._waiting = [row for row in self._waiting if row[s.SEQUENCE] > taken]
            if len(self._waiting) + len(rows) <= c.MAIL_ROWS:
                break
            if time.monotonic() > deadline:
                raise DeviceError(
                    f"the audio thread must take its commands, {len(self._waiting)} are waiting: "
                    "the device has stopped; open it again"
                )
            time.sleep(0.001)
        self._waiting += rows
        first = self._slot * c.MAIL_ROWS
        self.rows[first : first + len(self._waiting)] = np.array(self._waiting).reshape(-1, s.COMMAND_FIELDS)
        self.counts[self._slot] = len(self._waiting)
        self._slot = c.publish(self._address, self._slot)

    @property
    def taken(self) -> int:
        """Sequence number of the last command carried out."""
        return c.read_word(self._taken_at)

    def frame_of(self, sequence: int) -> int | None:
        """Frame before which the command ``sequence`` was carried out; None while it is on its way."""
        self._read_log()
        place = bisect.bisect_left(self._lasts, sequence)
        return self._frames[place] if place < len(self._lasts) else None

    def _read_log(self) -> None:
        # at every send, and a send is taken once at the most, so the ring cannot run over in between
        _ = self.taken
        count = int(self.mail["log_count"][0])
        for number in range(self._log_read, count):
            last, frame = self.log[number % c.LOG_ROWS]
            self._lasts.append(int(last))
            self._frames.append(int(frame))
        self._log_read = count
