"""What the service manager wants to hear, and where it puts secrets (sd_notify(3), systemd.exec(5) credentials)."""

import os
import socket
from pathlib import Path


def notify(state: str) -> bool:
    """Tell the service manager ``READY=1``, ``WATCHDOG=1``, ``RELOADING=1`` or ``STOPPING=1``; False where none is.

    The address stands in the environment; one that begins with @ is abstract. Nothing here waits: a datagram that the
    manager cannot take now is dropped, the next one follows.
    """
    address = os.environ.get("NOTIFY_SOCKET", "")
    if not address:
        return False
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_CLOEXEC) as sock:
        sock.setblocking(False)
        try:
            sock.sendto(state.encode(), "\0" + address[1:] if address.startswith("@") else address)
        except OSError:
            return False
    return True


def read_secret(credential: str, file: str | None) -> str | None:
    """Return a secret: the systemd credential of that name, else the file's content, else None.

    Raises OSError where a file is named that cannot be read.
    """
    folder = os.environ.get("CREDENTIALS_DIRECTORY")
    if folder and (path := Path(folder) / credential).is_file():
        return path.read_text().rstrip("\n")
    return Path(file).read_text().rstrip("\n") if file else None
