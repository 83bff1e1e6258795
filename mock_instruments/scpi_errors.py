"""Standard error numbers and the error of a message that carries one (SCPI-1999 vol. 2, 21.8)."""

ERRORS: dict[int, str] = {
    0: "No error",
    -100: "Command error",
    -101: "Invalid character",
    -102: "Syntax error",
    -103: "Invalid separator",
    -104: "Data type error",
    -105: "GET not allowed",
    -108: "Parameter not allowed",
    -109: "Missing parameter",
    -110: "Command header error",
    -111: "Header separator error",
    -112: "Program mnemonic too long",
    -113: "Undefined header",
    -114: "Header suffix out of range",
    -120: "Numeric data error",
    -121: "Invalid character in number",
    -123: "Exponent too large",
    -124: "Too many digits",
    -128: "Numeric data not allowed",
    -130: "Suffix error",
    -131: "Invalid suffix",
    -134: "Suffix too long",
    -138: "Suffix not allowed",
    -140: "Character data error",
    -141: "Invalid character data",
    -148: "Character data not allowed",
    -150: "String data error",
    -151: "Invalid string data",
    -158: "String data not allowed",
    -160: "Block data error",
    -161: "Invalid block data",
    -168: "Block data not allowed",
    -170: "Expression error",
    -171: "Invalid expression",
    -178: "Expression data not allowed",
    -200: "Execution error",
    -210: "Trigger error",
    -211: "Trigger ignored",
    -213: "Init ignored",
    -220: "Parameter error",
    -221: "Settings conflict",
    -222: "Data out of range",
    -223: "Too much data",
    -224: "Illegal parameter value",
    -230: "Data corrupt or stale",
    -231: "Data questionable",
    -240: "Hardware error",
    -241: "Hardware missing",
    -300: "Device-specific error",
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

# Standard Event Status Register bits (IEEE 488.2, 11.5.1) by hundreds of the error number.
_EVENT_BITS = {1: 32, 2: 16, 3: 8, 4: 4, 5: 128, 6: 64, 7: 2, 8: 1}


class ScpiError(Exception):
    """A program message (or a part of one) that cannot be carried out, with its standard number."""

    def __init__(self, number: int, detail: str = "") -> None:
        self.number = number
        self.detail = detail
        super().__init__(error_text(number, detail))


def error_text(number: int, detail: str = "") -> str:
    """The queue's answer: ``-113,"Undefined header"``; a detail follows after a semicolon inside the quotes."""
    text = ERRORS.get(number, "Device-specific error")
    inside = f"{text};{detail}" if detail else text
    return f'{number},"{inside.replace(chr(34), chr(39))}"'


def event_bit(number: int) -> int:
    """Weight of the Standard Event Status Register bit that an error number sets."""
    return 8 if number > 0 else _EVENT_BITS.get(-number // 100, 0)
