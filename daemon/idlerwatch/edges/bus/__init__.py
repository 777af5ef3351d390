"""One serial port and the meters on it: the thread that owns both.

`thread` runs the cycles and opens the port for ever; `cycle` decides whom to ask, once, again or not; `exchange` asks
one block and knows which answers may still come; `port` reads an answer's head and then what it promises.
"""

from idlerwatch.edges.bus.exchange import MeterStatistics
from idlerwatch.edges.bus.thread import BusThread

__all__ = ["BusThread", "MeterStatistics"]
