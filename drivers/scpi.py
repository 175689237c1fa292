"""Words and numbers of IEEE 488.2 and SCPI-99: pure functions on bytes; what they do not understand is a ValueError."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal, get_args

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

__all__ = [
    "ByteOrder",
    "Encoding",
    "ErrorEntry",
    "definite_block",
    "encode_samples",
    "parse_boolean",
    "parse_error_entry",
    "parse_integer",
    "parse_number",
    "parse_samples",
    "parse_string",
    "sample_size",
    "split_fields",
]

Encoding = Literal["ascii", "real32", "real64", "int8", "int16", "int32", "uint8", "uint16", "uint32"]
ByteOrder = Literal["big", "little"]
MAX_DIGITS = 9  # of a definite block's length: IEEE 488.2 section 8.7.9, the digit 1 to 9 after '#'

_NUMBER = re.compile(rb"[+-]?(\d+\.?\d*|\.\d+)([eE] ?[+-]?\d+)?")  # <NRf>, IEEE 488.2 section 7.7.2.2
_TYPES: dict[str, str] = {
    "real32": "f4",
    "real64": "f8",
    "int8": "i1",
    "int16": "i2",
    "int32": "i4",
    "uint8": "u1",
    "uint16": "u2",
    "uint32": "u4",
}


@dataclass(frozen=True, slots=True)
class ErrorEntry:
    """One entry of an instrument's error queue: its number (0: none) and its words."""

    number: int
    words: str


def parse_number(reply: bytes) -> float:
    """Return the number of a reply; 9.91E37 is not-a-number and 9.9E37 infinity (SCPI-99, volume 1, 7.2.1).

    >>> parse_number(b"+1.25E3 ")
    1250.0
    """
    text = reply.strip(b" \t")
    if not _NUMBER.fullmatch(text):
        raise ValueError("a decimal number")
    value = float(text.replace(b" ", b""))
    if value == 9.91e37:
        return float("nan")
    return float("inf") * (1 if value > 0 else -1) if abs(value) >= 9.9e37 else value


def parse_integer(reply: bytes) -> int:
    """Return the whole number of a reply; ``1.0E2`` is one, ``1.5`` is not."""
    value = parse_number(reply)
    if not value.is_integer():
        raise ValueError("a whole number")
    return int(value)


def parse_boolean(reply: bytes) -> bool:
    """Return the truth of ``1``, ``0``, ``ON`` or ``OFF``."""
    word = reply.strip(b" \t").upper()
    if word not in (b"0", b"1", b"ON", b"OFF", b"+0", b"+1"):
        raise ValueError("0, 1, ON or OFF")
    return word in (b"1", b"ON", b"+1")


def parse_string(reply: bytes) -> str:
    """Return the text inside quotes; a doubled quote stands for one (IEEE 488.2 section 8.7.8)."""
    text = reply.strip(b" \t")
    quote = text[:1]
    inner = text[1:-1]
    if len(text) < 2 or quote not in (b'"', b"'") or text[-1:] != quote or inner.replace(quote * 2, b"").count(quote):
        raise ValueError("a text in quotes")
    return inner.replace(quote * 2, quote).decode("latin-1")


def split_fields(reply: bytes, separator: bytes = b",") -> list[bytes]:
    """Split a reply at its separators, those inside quotes excepted; spaces around fields go.

    >>> split_fields(b'-113, "Undefined header, perhaps"')
    [b'-113', b'"Undefined header, perhaps"']
    """
    parts = re.findall(rb"\"[^\"]*\"|'[^']*'|" + re.escape(separator) + rb"|[^\"']", reply)
    fields = [b""]
    for part in parts:
        if part == separator:
            fields.append(b"")
        else:
            fields[-1] += part
    return [field.strip() for field in fields]


def parse_error_entry(reply: bytes) -> ErrorEntry:
    """Return an entry of the error queue: a number and, after a comma, its words in quotes (SCPI-99 21.8)."""
    number, _, words = reply.partition(b",")
    return ErrorEntry(parse_integer(number), parse_string(words) if words.strip() else "")


def definite_block(data: bytes) -> bytes:
    """Return data as a definite-length block (IEEE 488.2 section 8.7.9).

    >>> definite_block(b"abc")
    b'#13abc'
    """
    digits = str(len(data)).encode()
    if len(digits) > MAX_DIGITS:
        raise ValueError(f"a block holds fewer than 1e9 bytes, got {len(data)}")
    return b"#%d%s%s" % (len(digits), digits, data)


def sample_size(encoding: Encoding) -> int:
    """Return the bytes of one sample; 0 for text, where it varies."""
    return 0 if encoding == "ascii" else int(_TYPES[encoding][1:])


def encode_samples(samples: NDArray[np.float64], encoding: Encoding, byte_order: ByteOrder = "big") -> bytes:
    r"""Return samples as bytes of a block, whole numbers rounded; the inverse of `parse_samples` but for text.

    >>> import numpy as np
    >>> encode_samples(np.array([1.0, -2.0]), "int16")
    b'\x00\x01\xff\xfe'
    """
    import numpy as np

    kind = np.dtype((">" if byte_order == "big" else "<") + _TYPES[encoding])
    return (samples if kind.kind == "f" else np.rint(samples)).astype(kind).tobytes()


def parse_samples(data: bytes | bytearray, encoding: Encoding, byte_order: ByteOrder = "big") -> NDArray[np.float64]:
    """Return samples as they were sent, codes or volts, not yet scaled.

    Parameters
    ----------
    data : bytes
        Contents of a block, or a line of numbers between commas.
    encoding, byte_order
        How one sample is written.

    Returns
    -------
    (N,) float64 array
        SCPI's not-a-number becomes nan.

    Raises
    ------
    ValueError
        A number is none, or the bytes are no whole number of samples.
    """
    import numpy as np

    if encoding == "ascii":
        return np.array([parse_number(field) for field in bytes(data).split(b",")], dtype=np.float64)
    if encoding not in get_args(Encoding):
        raise ValueError(f"an encoding out of {get_args(Encoding)}, got {encoding!r}")
    if len(data) % sample_size(encoding):
        raise ValueError(f"a whole number of {encoding} samples")
    kind = np.dtype((">" if byte_order == "big" else "<") + _TYPES[encoding])
    samples = np.frombuffer(data, dtype=kind).astype(np.float64)
    if kind.kind == "f":
        samples[np.abs(samples) >= 9.9e37] = np.nan
    return samples
