"""Modbus RTU frames: checksum, sizes, times, and what a received frame is.

Sizes and times follow *MODBUS Application Protocol* V1.1b3 and *MODBUS over Serial Line* V1.02: addresses 1 to 247,
CRC-16 (start FFFF, polynomial A001 reflected) with the low byte first on the wire, 3.5 characters of silence between
frames, fixed at 1.75 ms above 19200 baud.
"""

from dataclasses import dataclass
from typing import Final

from idlerwatch.core.registers import Table

FUNCTIONS: Final[dict[Table, int]] = {"coil": 1, "discrete": 2, "holding": 3, "input": 4}
"""Function code that reads a table: the only four that are ever sent."""
REQUEST_BYTES: Final = 8
SHORTEST_ANSWER: Final = 5
"""Bytes of an exception answer, and of what every answer has beside its data."""


def crc16(data: bytes) -> int:
    """Return the register of the checksum.

    Examples
    --------
    >>> hex(crc16(bytes([0x02, 0x07])))
    '0x1241'

    References
    ----------
    *MODBUS over Serial Line* V1.02, appendix B.
    """
    register = 0xFFFF
    for byte in data:
        register ^= byte
        for _ in range(8):
            register = register >> 1 ^ (0xA001 if register & 1 else 0)
    return register


def with_crc(body: bytes) -> bytes:
    """Return the frame with its checksum behind it, the low byte first."""
    return body + crc16(body).to_bytes(2, "little")


def data_bytes(table: Table, count: int) -> int:
    """Return the bytes of data that `count` registers or bits take in an answer."""
    return (count + 7) // 8 if table in ("coil", "discrete") else 2 * count


def silence_s(baudrate: int) -> float:
    """Return the silence between two frames, counted with 11 bits a character. [s]

    Examples
    --------
    >>> round(silence_s(9600) * 1e3, 4), silence_s(38400)
    (4.0104, 0.00175)
    """
    return 0.00175 if baudrate > 19200 else 38.5 / baudrate


@dataclass(frozen=True, slots=True)
class Shape:
    """What an answer looks like: who sends it, to which function, with how many bytes of data.

    Answers carry neither the address of the registers nor a number: two of one shape cannot be told apart.
    """

    slave: int
    function: int
    size: int

    @property
    def frame_bytes(self) -> int:
        """Bytes of the whole answer."""
        return SHORTEST_ANSWER + self.size


def promised_bytes(head: bytes) -> int:
    """Return how long an answer is by its first three bytes, an exception being the shortest."""
    is_reading = head[1] in FUNCTIONS.values()
    return SHORTEST_ANSWER + head[2] if is_reading else SHORTEST_ANSWER


def shape_of(frame: bytes) -> Shape | None:
    """Return the shape of a sound answer (an exception answer has size 0); None where it is no sound frame."""
    if len(frame) < SHORTEST_ANSWER or len(frame) != promised_bytes(frame) or crc16(frame) != 0:
        return None
    if frame[1] & 0x80:
        return Shape(frame[0], frame[1] & 0x7F, 0)
    return Shape(frame[0], frame[1], frame[2])


def sound_frames(data: bytes) -> tuple[Shape, ...]:
    """Return the shapes of all sound answers in what a line brought, whatever else is between them."""
    found: list[Shape] = []
    start = 0
    while start + SHORTEST_ANSWER <= len(data):
        length = promised_bytes(data[start:])
        shape = shape_of(data[start : start + length])
        if shape is not None:
            found.append(shape)
        start += length if shape is not None else 1
    return tuple(found)
