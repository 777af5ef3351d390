import os
import socket

import pytest

from idlerwatch.edges import systemd


@pytest.mark.parametrize("address", ["path", "@idlerwatch-{pid}"])
def test_the_manager_hears_what_is_told(tmp_path, monkeypatch, address):
    address = str(tmp_path / "notify") if address == "path" else address.format(pid=os.getpid())
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as manager:
        manager.bind("\0" + address[1:] if address.startswith("@") else address)
        monkeypatch.setenv("NOTIFY_SOCKET", address)
        assert systemd.notify("READY=1")
        assert manager.recv(100) == b"READY=1"


def test_without_a_manager_nothing_happens(monkeypatch, tmp_path):
    monkeypatch.delenv("NOTIFY_SOCKET", raising=False)
    assert not systemd.notify("READY=1")
    monkeypatch.setenv("NOTIFY_SOCKET", str(tmp_path / "gone"))
    assert not systemd.notify("READY=1")


def test_a_credential_goes_before_a_file(monkeypatch, tmp_path):
    (tmp_path / "mqtt-password").write_text("from the manager\n")
    (tmp_path / "file").write_text("from the file\n")
    monkeypatch.setenv("CREDENTIALS_DIRECTORY", str(tmp_path))
    assert systemd.read_secret("mqtt-password", str(tmp_path / "file")) == "from the manager"
    assert systemd.read_secret("influx-token", str(tmp_path / "file")) == "from the file"
    assert systemd.read_secret("influx-token", None) is None
