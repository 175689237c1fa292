"""In-memory instruments for what needs no wire: a port whose other end is a function, and one that keeps settings."""

from __future__ import annotations

from collections.abc import Callable

__all__ = ["MemoryPort", "Registers"]


class MemoryPort:
    """A port whose instrument is a function from one message to its reply; silence is a time-out at once."""

    def __init__(self, answer: Callable[[bytes], bytes]) -> None:
        self._answer, self._incoming, self._outgoing = answer, b"", b""

    def write(self, data: bytes | memoryview, limit: float) -> int:
        self._incoming += bytes(data)
        *messages, self._incoming = self._incoming.split(b"\n")
        self._outgoing += b"".join(map(self._answer, messages))
        return len(data)

    def read(self, count: int, limit: float, *, line: bool) -> bytes:
        if not self._outgoing:
            raise TimeoutError
        chunk, self._outgoing = self._outgoing[:count], self._outgoing[count:]
        return chunk

    def has_stray(self) -> bool:
        return bool(self._outgoing)

    def close(self) -> None:
        self._incoming = self._outgoing = b""


class Registers:
    """An instrument that keeps what it is set to and gives it back; records are as long as it was told.

    It understands the words of the shipped dialects, nothing of their meaning.
    """

    def __init__(self) -> None:
        self.values = {"SENSe:SWEep:TIME": "0.02", "SENSe:SWEep:POINts": "2048"}

    def __call__(self, message: bytes) -> bytes:
        text = message.decode("latin-1")
        if "?" not in text:
            head, _, value = text.partition(" ")
            self.values[head] = {"ON": "1", "OFF": "0", "SINusoid": "SIN"}.get(value, value)
            return b""
        return self.reply(text) + b"\n"

    def reply(self, text: str) -> bytes:
        """Return the reply to a query, without its newline."""
        fixed = {"*OPC?": b"1", "SYSTem:ERRor?": b'0,"No error"', "*IDN?": b"Nobody,Nothing,0,0"}
        if text in fixed:
            return fixed[text]
        if text.startswith("ROUTe:CLOSe?"):
            return b"1"
        if text == "SENSe:SWEep:TINTerval?":
            return repr(self._number("SENSe:SWEep:TIME") / max(1.0, self._number("SENSe:SWEep:POINts"))).encode()
        if text.startswith("TRACe:DATA?"):
            data = bytes(4 * int(self._number("SENSe:SWEep:POINts")))
            return b"#%d%d%s" % (len(str(len(data))), len(data), data)
        return self.values.get(text.replace("?", "").strip(), "0").encode("latin-1")

    def _number(self, head: str) -> float:
        return float(self.values[head])
