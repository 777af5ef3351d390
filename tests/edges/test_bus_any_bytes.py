"""Whatever bytes come back, the bus thread's exchange ends with registers or a failure, never with an exception."""

from hypothesis import example, given, settings
from hypothesis import strategies as st

from idlerwatch.core.frames import with_crc
from idlerwatch.core.polling import Block, LineTiming
from idlerwatch.edges.bus.exchange import Master
from idlerwatch.edges.bus.port import RtuPort

SLAVE = 7


class Scripted:
    """A port whose other end says given bytes to each request and then nothing."""

    is_open = True

    def __init__(self, answers):
        self.answers = iter(answers)
        self.pending = b""

    @property
    def in_waiting(self):
        return len(self.pending)

    def write(self, data):
        self.pending += next(self.answers, b"")
        return len(data)

    def read(self, size):
        taken, self.pending = self.pending[:size], self.pending[size:]
        return taken

    def close(self):
        self.is_open = False


class Impatient(RtuPort):
    """Waits for nothing: what is to come is there already."""

    _gap_s = 0.0

    def _collect(self, size, first_s):
        return super()._collect(size, 0.0)


HEADS = st.tuples(st.sampled_from([SLAVE, 8]), st.sampled_from([1, 2, 3, 4, 5, 0x83, 0x84]), st.integers(0, 255))
FRAMES = st.tuples(HEADS, st.binary(max_size=20)).map(lambda made: with_crc(bytes(made[0]) + made[1]))
BLOCKS = st.sampled_from([Block("input", 0, 2), Block("holding", 5, 7), Block("discrete", 0, 8), Block("coil", 3, 11)])


@settings(max_examples=150, deadline=None)
@given(st.lists(st.one_of(st.binary(max_size=40), FRAMES), max_size=4), BLOCKS)
@example([with_crc(bytes([SLAVE, 4, 4, 0x43, 0x66, 0, 0]))], Block("input", 0, 2))
@example([with_crc(bytes([SLAVE, 2, 1, 0xFF]))], Block("discrete", 0, 8))
@example([with_crc(bytes([SLAVE, 0x84, 5]))], Block("input", 0, 2))
def test_any_bytes_are_a_value_or_a_failure(answers, block):
    master = Master(LineTiming(115200))
    port = Impatient(Scripted(answers), LineTiming(115200))
    master.attach(port)
    for sent in [*answers, b""]:
        answer = master.ask(SLAVE, block)
        if answer.failure:
            assert answer.failure in ("no answer", "wrong answer", "refused")
            assert not answer.registers
        else:
            assert len(answer.registers) == block.count
            assert port.frame == sent[: len(port.frame)]
