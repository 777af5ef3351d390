"""Real servers and programs of the machine, for tests that need them; and a free port for one."""

import os
import shutil
import socket

import pytest

SYSTEM_FOLDERS = "/usr/local/sbin:/usr/sbin:/sbin"


def need(program: str) -> str:
    """Return where a program is; without it the test is skipped, and fails where CI is set."""
    found = shutil.which(program) or shutil.which(program, path=SYSTEM_FOLDERS)
    if found is None:
        sentence = f"{program} is not installed"
        if os.environ.get("CI"):
            pytest.fail(sentence)
        pytest.skip(sentence)
    return found


def free_port() -> int:
    """Return a loopback port that nobody listens on now."""
    with socket.socket() as listener:
        listener.bind(("127.0.0.1", 0))
        port: int = listener.getsockname()[1]
        return port
