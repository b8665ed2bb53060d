"""Why the decoder refuses a message: the closed table of codes, names and sentences.

Codes are negative, so that they never meet `OK` or a length. The loop counts refusals; only the handshake says them aloud.
"""

from dataclasses import dataclass

LENGTH = -1
TRUNCATED = -2
HEADER = -3
VERSION = -4
KIND = -5
COUNT = -6
COUNTER_FORM = -7
COUNTER_RANGE = -8
NUMBER_FORM = -9
VECTOR_FORM = -10
JOINTS = -11
VECTOR_LENGTHS = -12
REQUEST = -13
EXTRAS = -14
TRAILING = -15
CRC = -16


@dataclass(frozen=True)
class Refusal:
    """One reason to refuse a message."""

    code: int
    name: str
    sentence: str


REFUSALS = (
    Refusal(LENGTH, "length", "The message must be 1 to 1024 bytes long in one part."),
    Refusal(TRUNCATED, "truncated", "The message ends inside an element."),
    Refusal(HEADER, "header", "The message must be one array with a fixarray or array16 header."),
    Refusal(VERSION, "version", "The peer speaks another version of the messages; install the same version on both sides."),
    Refusal(
        KIND, "kind", "The message is of another kind: 1 is a state, 2 is a torque; check which endpoint is connected to which."
    ),
    Refusal(COUNT, "element count", "A state must have 18 elements, a torque 12."),
    Refusal(COUNTER_FORM, "counter form", "A counter must be an integer of any width; it is something else."),
    Refusal(COUNTER_RANGE, "counter range", "A counter must be 0 or more and below 2^53."),
    Refusal(NUMBER_FORM, "number form", "A physical value must be a float or an integer of any width; it is something else."),
    Refusal(VECTOR_FORM, "vector form", "q, qd and tau must be arrays with a fixarray or array16 header."),
    Refusal(JOINTS, "joint count", "A message must carry 1 to 16 joints."),
    Refusal(VECTOR_LENGTHS, "vector lengths", "q and qd must be equally long, and tau as long or, in a state, empty."),
    Refusal(REQUEST, "request", "The request must be 0 (ask), 1 (drive) or 2 (release)."),
    Refusal(EXTRAS, "extras", "Extras must be a map (fixmap or map16) from strings to numbers or flat arrays of numbers."),
    Refusal(TRAILING, "trailing bytes", "Bytes follow the last element."),
    Refusal(
        CRC, "crc", "The CRC-32 does not belong to the bytes before it: the message was damaged on the way or built wrongly."
    ),
)

_BY_CODE = {refusal.code: refusal for refusal in REFUSALS}


def describe_refusal(code: int) -> str:
    """The name and sentence of a refusal code, e.g. `crc: The CRC-32 does not belong ...`."""
    refusal = _BY_CODE.get(code)
    return f"{refusal.name}: {refusal.sentence}" if refusal else f"unknown refusal code {code}"
