import math
import struct

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from fakes.findings import UTC, cycle, row
from idlerwatch.core.blocks import (
    Cycle,
    Item,
    Window,
    cycle_items,
    pack,
    read_cycles,
    read_windows,
    unpack,
    window_item,
)
from idlerwatch.core.values import Reading

singles = st.floats(width=32)
doubles = st.floats(allow_nan=False)


def bits(item):
    instants = struct.pack(f"<{len(item.instants)}d", *item.instants)
    return item.shape, instants, struct.pack(f"<{len(item.values)}f", *item.values)


def numbering():
    shapes = {}
    return (lambda text: shapes.setdefault(text, len(shapes) + 1)), shapes


def texts(shapes):
    return {number: text for text, number in shapes.items()}


def bits_of_cycle(cycle):
    told = []
    for given_ in cycle.inputs:
        values = (
            [struct.pack("<f", v) for v in given_.values.values()] if isinstance(given_, Reading) else given_.reason
        )
        names = [list(given_.values), dict(given_.reasons)] if isinstance(given_, Reading) else []
        told.append((given_.meter, struct.pack("<d", given_.at), values, names))
    return cycle.sequence, told, cycle.end, cycle.settings


@settings(max_examples=60, deadline=None)
@given(
    st.lists(
        st.integers(0, 3).flatmap(
            lambda shape: st.builds(
                Item, st.just(shape), st.tuples(*[doubles] * (shape % 3)), st.tuples(*[singles] * shape)
            )
        )
    )
)
def test_every_item_comes_back_bit_for_bit_and_in_order(items):
    assert [bits(item) for item in unpack(pack(items))] == [bits(item) for item in items]


def test_cycles_come_back_bit_for_bit_with_missing_values_reasons_silent_meters_and_settings():
    number, shapes = numbering()
    cycles = [Cycle(10 + 2 * n, *cycle(n), settings=1 + n // 5) for n in range(9)]
    block = pack([item for one in cycles for item in cycle_items(one, number)])
    back = list(read_cycles(unpack(block), texts(shapes)))
    assert [bits_of_cycle(one) for one in back] == [bits_of_cycle(one) for one in cycles]


def test_a_missing_value_is_still_missing_and_says_why():
    number, shapes = numbering()
    block = pack(list(cycle_items(Cycle(1, *cycle(0), settings=1), number)))
    (back,) = read_cycles(unpack(block), texts(shapes))
    reading = back.inputs[2]
    assert math.isnan(reading.values[2, "voltage"])
    assert reading.reasons == {(2, "voltage"): "implausible"}


def test_window_rows_come_back_with_their_numbers_as_float32():
    number, shapes = numbering()
    windows = [Window(n, row(n, "l1" if n % 2 else "l2")) for n in range(5)]
    back = list(read_windows(unpack(pack([window_item(window, number) for window in windows])), texts(shapes)))
    assert back == windows  # the fake's numbers are float32 numbers


def test_a_cycle_of_four_meters_takes_less_than_its_raw_numbers():
    number, _ = numbering()
    rng = np.random.default_rng(1)
    names = ("voltage", "current", "active_power", "reactive_power", "apparent_power", "power_factor", "frequency")
    cycles = []
    for n in range(30):
        readings = tuple(
            Reading(
                meter,
                5000.0 + n + float(rng.uniform(0, 0.01)),
                {(1, name): float(np.float32(rng.normal(230, 3))) for name in names},
            )
            for meter in ("supply", "l1", "l2", "l3")
        )
        cycles.append(Cycle(n + 1, readings, cycle(n)[1], 1))
    raw = 30 * 4 * (8 + 4 * len(names))
    assert len(pack([item for one in cycles for item in cycle_items(one, number)])) < raw
    assert cycles[0].utc == UTC + 0.7
