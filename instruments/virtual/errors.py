"""Standard SCPI errors: the numbers, the texts, and the bit of the event status register each class sets.

Sources: SCPI-1999 Volume 2, chapter 21 (`SYSTem:ERRor`); IEEE Std 488.2, standard event status register.
"""

from __future__ import annotations

STANDARD_TEXTS: dict[int, str] = {
    0: "No error",
    -100: "Command error",
    -101: "Invalid character",
    -102: "Syntax error",
    -103: "Invalid separator",
    -104: "Data type error",
    -108: "Parameter not allowed",
    -109: "Missing parameter",
    -112: "Program mnemonic too long",
    -113: "Undefined header",
    -114: "Header suffix out of range",
    -121: "Invalid character in number",
    -123: "Exponent too large",
    -124: "Too many digits",
    -128: "Numeric data not allowed",
    -130: "Suffix error",
    -131: "Invalid suffix",
    -138: "Suffix not allowed",
    -141: "Invalid character data",
    -151: "Invalid string data",
    -161: "Invalid block data",
    -200: "Execution error",
    -211: "Trigger ignored",
    -213: "Init ignored",
    -221: "Settings conflict",
    -222: "Data out of range",
    -223: "Too much data",
    -224: "Illegal parameter value",
    -225: "Out of memory",
    -230: "Data corrupt or stale",
    -240: "Hardware error",
    -241: "Hardware missing",
    -310: "System error",
    -330: "Self-test failed",
    -350: "Queue overflow",
    -360: "Communication error",
    -363: "Input buffer overrun",
    -365: "Time out error",
    -400: "Query error",
    -410: "Query INTERRUPTED",
    -420: "Query UNTERMINATED",
    -430: "Query DEADLOCKED",
    -440: "Query UNTERMINATED after indefinite response",
}

OPERATION_COMPLETE, QUERY_ERROR, DEVICE_ERROR, EXECUTION_ERROR, COMMAND_ERROR, POWER_ON = 1, 4, 8, 16, 32, 128


class ScpiError(Exception):
    """One entry of the error queue, raised where the mistake is found."""

    def __init__(self, number: int, detail: str = "") -> None:
        self.number = number
        self.text = STANDARD_TEXTS.get(number, "Device-specific error") + (f";{detail}" if detail else "")
        super().__init__(f'{number},"{self.text}"')


def event_bit(number: int) -> int:
    """Bit of the standard event status register that an error of this number sets.

    -1xx command, -2xx execution, -3xx and positive device, -4xx query (SCPI-1999 Volume 2, 21.8).
    """
    if number > 0 or -399 <= number <= -300:
        return DEVICE_ERROR
    if -199 <= number <= -100:
        return COMMAND_ERROR
    if -299 <= number <= -200:
        return EXECUTION_ERROR
    if -499 <= number <= -400:
        return QUERY_ERROR
    return 0
