"""Checksums, times and frames against published figures.

Sources: *MODBUS over Serial Line* V1.02 (appendix B, 2.5.1.1), *MODBUS Application Protocol* V1.1b3 (6.3, 6.4), the
catalogue check value of CRC-16/MODBUS, and frames in the tests of public Modbus libraries; seen. Times above 19200 baud
are the fixed ones of the specification; the others are worked out from its rule.
"""

import minimalmodbus
import pytest

from idlerwatch.core.frames import Shape, crc16, shape_of, silence_s, sound_frames, with_crc

CHECKSUMS = [
    ("02 07", 0x1241),
    ("31 32 33 34 35 36 37 38 39", 0x4B37),
    ("01 03 00 00 00 0A", 0xCDC5),
    ("11 03 00 6B 00 03", 0x8776),
    ("01 04 00 00 00 02", 0xCB71),
    ("11 03 06 AE 41 56 52 43 40", 0xAD49),
    ("01 84 02", 0xC1C2),
    ("FE 04 00 03 00 01", 0xC5D5),
    ("00 03 00 7C 00 02", 0x0204),
    ("11 03 00 7C 00 02", 0x4307),
    ("FF 03 00 7C 00 02", 0x0D10),
    ("00 03 04 00 8D 00 8E", 0xBCFA),
    ("11 03 04 00 8D 00 8E", 0xBDFB),
    ("00 83 02", 0x3191),
    ("11 83 02", 0x34C1),
    ("FF 83 02", 0x01A1),
    ("12 34 23 45 34 56 45 67", 0xDBE2),
    ("", 0xFFFF),
]


@pytest.mark.parametrize(("text", "register"), CHECKSUMS)
def test_checksums_are_the_published_ones(text, register):
    assert crc16(bytes.fromhex(text)) == register


def test_the_low_byte_goes_first_on_the_wire():
    assert with_crc(bytes.fromhex("02 07")) == bytes.fromhex("02 07 41 12")


@pytest.mark.parametrize(("text", "_register"), CHECKSUMS)
def test_the_checksum_over_a_frame_and_its_checksum_is_zero(text, _register):
    assert crc16(with_crc(bytes.fromhex(text))) == 0


@pytest.mark.parametrize(
    ("baudrate", "milliseconds"),
    [(1200, 32.0833), (2400, 16.0417), (4800, 8.0208), (9600, 4.0104), (19200, 2.0052), (38400, 1.75), (115200, 1.75)],
)
def test_silences_are_the_published_ones(baudrate, milliseconds):
    assert silence_s(baudrate) * 1e3 == pytest.approx(milliseconds, abs=0.5e-4)


@pytest.mark.parametrize(("baudrate", "milliseconds"), [(9600, 4.0104), (19200, 2.0052), (38400, 1.75)])
def test_the_library_keeps_the_silence_that_is_counted(baudrate, milliseconds):
    period = minimalmodbus._calculate_minimum_silent_period(baudrate)
    assert period * 1e3 == pytest.approx(milliseconds, abs=0.5e-4)


def test_answers_of_the_specification_have_their_shape():
    assert shape_of(with_crc(bytes.fromhex("11 03 06 02 2B 00 00 00 64"))) == Shape(0x11, 3, 6)
    assert shape_of(with_crc(bytes.fromhex("11 04 02 00 0A"))) == Shape(0x11, 4, 2)
    assert shape_of(with_crc(bytes.fromhex("11 81 02"))) == Shape(0x11, 1, 0)


def test_a_damaged_frame_has_no_shape():
    frame = with_crc(bytes.fromhex("11 04 02 00 0A"))
    for index in range(len(frame)):
        for bit in range(8):
            damaged = frame[:index] + bytes([frame[index] ^ 1 << bit]) + frame[index + 1 :]
            assert shape_of(damaged) is None


def test_sound_frames_are_found_between_noise():
    frame = with_crc(bytes.fromhex("11 04 02 00 0A"))
    assert sound_frames(b"\x00" + frame + b"\xff\x11" + frame) == (Shape(0x11, 4, 2), Shape(0x11, 4, 2))
