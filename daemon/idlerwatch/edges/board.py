"""The board the daemon runs on: is its disk nearly full, does its own supply sag?

Free space is told below one twentieth of the file system, or below 200 MB where that is less. Under-voltage is read
from the kernel's hardware-monitoring interface (``in*_lcrit_alarm``, as boards with a supply monitor offer it); a board
without one says nothing.
"""

import shutil
from collections.abc import Mapping
from pathlib import Path
from typing import Final

LEAST_FREE_SHARE: Final = 0.05
LEAST_FREE_BYTES: Final = 200_000_000
HARDWARE_MONITORS: Final = Path("/sys/class/hwmon")


def find_troubles(folder: Path, monitors: Path = HARDWARE_MONITORS) -> Mapping[str, str]:
    """Return part -> one sentence, empty where all is well; a part that cannot be looked at is left out."""
    return {**_disk(folder), **_power(monitors)}


def _disk(folder: Path) -> Mapping[str, str]:
    try:
        usage = shutil.disk_usage(folder)
    except OSError as error:
        return {"disk": f"{folder} cannot be looked at: {error.strerror}"}
    least = min(LEAST_FREE_SHARE * usage.total, LEAST_FREE_BYTES)
    text = f"only {usage.free / 1e6:.0f} MB free on the disk of {folder}" if usage.free < least else ""
    return {"disk": text}


def _power(monitors: Path) -> Mapping[str, str]:
    flags = [flag.read_text().strip() for flag in sorted(monitors.glob("hwmon*/in*_lcrit_alarm"))]
    if not flags:
        return {}
    return {"power": "the board's own supply sags below its limit" if "1" in flags else ""}
