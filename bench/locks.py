"""One bench, one sweep: a file lock of the operating system for each instrument's address.

The lock is the system's, so that it ends with its holder however that dies; what the file says is for people only.
Lock files are never removed: a name removed and made again would be two locks.
"""

import hashlib
import json
import os
import re
import tempfile
from collections.abc import Iterable, Iterator
from contextlib import ExitStack, contextmanager
from pathlib import Path

from bandproof.bench.errors import BenchFault
from bandproof.bench.system import is_own, try_lock, unlock, user_tag
from bandproof.drivers.clock import RealClock

__all__ = ["lock_path", "locked"]

_EXCERPT = 200  # characters shown of who holds a lock (arbitrary)


@contextmanager
def locked(addresses: Iterable[str], *, who: str) -> Iterator[None]:
    """While inside, no other sweep of this user on this computer can have the instruments at these addresses.

    Parameters
    ----------
    addresses : iterable of str
        As PyVISA spells them; in any order, one may come twice.
    who : str
        Told to whoever comes second: the serial number, or the command.

    Raises
    ------
    BenchFault
        An instrument is in use, and by whom; none is locked by this call then.
    OSError
        The temporary folder cannot be written, or has no locks.
    """
    by_path = {lock_path(address): address for address in addresses}
    with ExitStack() as stack:
        for path, address in sorted(by_path.items()):  # the same order for all: of two that clash, one wins
            stack.enter_context(_locked(path, address, who))
        yield


def lock_path(address: str) -> Path:
    """Return the lock file of an instrument; spellings that VISA takes for the same address share one.

    VISA's addresses do not tell capitals, and an interface without a number is number 0 (VPP-4.3, from memory).
    """
    same = re.sub(r"^([a-z]+)::", r"\g<1>0::", address.strip().lower())
    name = hashlib.sha256(same.encode("utf-8")).hexdigest()[:24]
    return Path(tempfile.gettempdir()) / f"bandproof-locks-{user_tag()}" / f"{name}.lock"


@contextmanager
def _locked(path: Path, address: str, who: str) -> Iterator[None]:
    path.parent.mkdir(mode=0o700, exist_ok=True)
    if not is_own(path.parent):
        raise BenchFault(f"{path.parent} belongs to somebody else, so that no lock can be kept in it: have it removed")
    handle = os.open(path, os.O_RDWR | os.O_CREAT, 0o600)
    try:
        if not try_lock(handle):
            raise BenchFault(
                f"{address} is in use by {_holder(handle)}: one bench carries one sweep, wait or stop that one"
            )
        _write(handle, _introduction(who))
        try:
            yield
        finally:
            _write(handle, b"")
            unlock(handle)
    finally:
        os.close(handle)


def _introduction(who: str) -> bytes:
    since = RealClock().utc().isoformat(timespec="seconds")
    return json.dumps({"pid": os.getpid(), "who": who[:_EXCERPT], "since": since}).encode("utf-8")


def _write(handle: int, data: bytes) -> None:
    os.ftruncate(handle, 0)
    os.lseek(handle, 0, os.SEEK_SET)
    os.write(handle, data)


def _holder(handle: int) -> str:
    """Return who holds a lock, for people: the file may be empty for an instant, or anything."""
    os.lseek(handle, 0, os.SEEK_SET)
    try:
        told = json.loads(os.read(handle, 4096))
        return f"{str(told['who'])[:_EXCERPT]} (process {int(told['pid'])}, since {str(told['since'])[:_EXCERPT]})"
    except (ValueError, KeyError, TypeError, RecursionError):
        return "another process that does not say which"
