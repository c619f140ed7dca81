"""Status as IEEE 488.2 and SCPI-1999 keep it: error queue, event registers and their enables, status byte."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass, field

from darkedge.instruments.virtual.errors import OPERATION_COMPLETE, POWER_ON, STANDARD_TEXTS, ScpiError, event_bit

QUEUE_LENGTH = 16
ERROR_QUEUE_BIT, QUESTIONABLE_BIT, MESSAGE_BIT, EVENT_BIT, MASTER_BIT, OPERATION_BIT = 4, 8, 16, 32, 64, 128


@dataclass(slots=True)
class EventRegister:
    """A SCPI status register: condition, latched event, enable (SCPI-1999 Volume 2, STATus)."""

    condition: int = 0
    event: int = 0
    enable: int = 0

    def set_condition(self, bits: int) -> None:
        """Take a new condition; bits that rise are latched as events."""
        self.event |= bits & ~self.condition
        self.condition = bits

    def read_event(self) -> int:
        """Return the latched events and clear them."""
        event, self.event = self.event, 0
        return event


@dataclass(slots=True)
class Status:
    """What an instrument says of itself."""

    event_status: int = POWER_ON
    event_enable: int = 0
    service_enable: int = 0
    message_available: bool = False
    operation: EventRegister = field(default_factory=EventRegister)
    questionable: EventRegister = field(default_factory=EventRegister)
    _queue: deque[tuple[int, str]] = field(default_factory=deque)

    def report(self, error: ScpiError) -> None:
        """Put an error into the queue; on overflow the newest entry gives way to -350 (SCPI-1999 Volume 2, 21.8)."""
        self.event_status |= event_bit(error.number)
        if len(self._queue) >= QUEUE_LENGTH:
            self._queue[-1] = (-350, STANDARD_TEXTS[-350])
            self.event_status |= event_bit(-350)
        else:
            self._queue.append((error.number, error.text))

    def next_error(self) -> str:
        """Oldest entry of the queue, taken out; `0,"No error"` when it is empty."""
        number, text = self._queue.popleft() if self._queue else (0, STANDARD_TEXTS[0])
        shown = "".join(letter if letter.isascii() and letter.isprintable() else "?" for letter in text)
        doubled = shown.replace('"', '""')  # a quote within a string (IEEE 488.2, 8.7.8)
        return f'{number},"{doubled}"'

    def error_count(self) -> int:
        """Entries in the queue."""
        return len(self._queue)

    def operation_complete(self) -> None:
        """Set bit 0 of the event status register, as `*OPC` asks."""
        self.event_status |= OPERATION_COMPLETE

    def read_event_status(self) -> int:
        """Return the event status register and clear it."""
        value, self.event_status = self.event_status, 0
        return value

    def status_byte(self) -> int:
        """The status byte with its summary bit 6."""
        byte = ERROR_QUEUE_BIT if self._queue else 0
        byte |= QUESTIONABLE_BIT if self.questionable.event & self.questionable.enable else 0
        byte |= MESSAGE_BIT if self.message_available else 0
        byte |= EVENT_BIT if self.event_status & self.event_enable else 0
        byte |= OPERATION_BIT if self.operation.event & self.operation.enable else 0
        return byte | (MASTER_BIT if byte & self.service_enable & ~MASTER_BIT else 0)

    def clear(self) -> None:
        """`*CLS`: clear event registers and queue; enables stay."""
        self.event_status = 0
        self.operation.event = self.questionable.event = 0
        self._queue.clear()

    def preset(self) -> None:
        """`STATus:PRESet`: enables of the SCPI registers to zero."""
        self.operation.enable = self.questionable.enable = 0
