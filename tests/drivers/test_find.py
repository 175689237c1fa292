"""Finding instruments: what VISA lists is asked for its identity and nothing else."""

import socket
import threading

from bandproof.drivers import find
from bandproof.drivers.clock import RealClock


def answering(words: bytes | None) -> tuple[str, list[bytes], threading.Thread]:
    """Return a server's address, what it hears until its thread ends, and that thread; None closes without a word."""
    server = socket.create_server(("127.0.0.1", 0))
    heard: list[bytes] = []

    def serve() -> None:
        with server, server.accept()[0] as connection:
            heard.append(connection.recv(1000))
            if words is not None:
                connection.sendall(words)
                heard.append(connection.recv(1000))

    serving = threading.Thread(target=serve, daemon=True)
    serving.start()
    return f"TCPIP::127.0.0.1::{server.getsockname()[1]}::SOCKET", heard, serving


def test_every_listed_address_is_asked_for_its_identity_and_nothing_else(monkeypatch):
    good, heard, serving = answering(b"SOMEBODY,SOMETHING,0,0\n")
    mute, _, _ = answering(None)
    monkeypatch.setattr(find, "listed", lambda library: (good, mute))
    found = dict(find.find_instruments(RealClock(margin=0.5)))
    assert found[good] == "SOMEBODY,SOMETHING,0,0"
    assert "no identity" in found[mute]
    assert mute in found[mute]
    serving.join(10.0)  # the end of the connection reaches the server a moment after it reached the client
    assert heard == [b"*IDN?\n", b""]


def test_looking_for_instruments_says_nothing_of_its_own(capsys):
    """A machine may have serial ports of its own; whatever VISA lists has a word beside it."""
    found = list(find.find_instruments(RealClock(margin=0.2)))
    assert all(address and words for address, words in found)
    assert capsys.readouterr() == ("", "")
