"""All that differs between operating systems, in both forms; nothing else in the project asks which system it runs on.

The POSIX forms are run and tested. The Windows forms are written from the standard library's documentation, are typed
(``mypy --platform win32``) and have never been run.
"""

import os
import signal
import socket
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

__all__ = [
    "STOP_SIGNALS",
    "detached",
    "is_own",
    "pseudo_terminal",
    "sync_folder",
    "try_lock",
    "unlock",
    "user_tag",
    "wait_for_stop",
]

if sys.platform == "win32":
    import msvcrt

    STOP_SIGNALS: tuple[signal.Signals, ...] = (signal.SIGINT, signal.SIGBREAK)
    _LOCKED_BYTE = 1 << 30  # a locked byte cannot be read by others: one far behind what the file holds

    def try_lock(handle: int) -> bool:
        """Lock an open file for this process; return whether that succeeded, at once.

        The system releases the lock when the process ends, however it ends.

        Parameters
        ----------
        handle : int
            File descriptor, open for writing.

        Raises
        ------
        OSError
            The file system has no locks.
        """
        try:
            _at_locked_byte(handle, msvcrt.LK_NBLCK)
        except PermissionError:  # EACCES: somebody else holds it
            return False
        return True

    def unlock(handle: int) -> None:
        """Release what `try_lock` locked."""
        _at_locked_byte(handle, msvcrt.LK_UNLCK)

    def _at_locked_byte(handle: int, mode: int) -> None:
        place = os.lseek(handle, 0, os.SEEK_CUR)
        os.lseek(handle, _LOCKED_BYTE, os.SEEK_SET)
        try:
            msvcrt.locking(handle, mode, 1)
        finally:
            os.lseek(handle, place, os.SEEK_SET)

    def sync_folder(folder: Path) -> None:
        """Put a folder's entries on disk: Windows has no call for it, and NTFS keeps a journal of its entries."""

    def detached() -> dict[str, Any]:
        """Return the options of `subprocess.Popen` for a process that no terminal's Ctrl-C or closing reaches."""
        return {"creationflags": subprocess.CREATE_NEW_PROCESS_GROUP | subprocess.CREATE_NO_WINDOW}

    def user_tag() -> str:
        """Return a word for this user, for names in the temporary folder: there it is each user's own already."""
        return "user"

    def is_own(folder: Path) -> bool:
        """Whether a folder is a real one of this user."""
        return folder.is_dir() and not folder.is_symlink()

    @contextmanager
    def pseudo_terminal() -> Iterator[tuple[int, str]]:
        """Refuse: Windows has no pseudo-terminals that serial ports could be tested with.

        Raises
        ------
        NotImplementedError
            Always.
        """
        raise NotImplementedError("Windows has no pseudo-terminals: test serial instruments on a pair of linked ports")
        yield 0, ""  # makes this a generator, as its POSIX form is

else:
    import fcntl
    import pty
    import tty

    STOP_SIGNALS: tuple[signal.Signals, ...] = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)

    def try_lock(handle: int) -> bool:
        """Lock an open file for this process; return whether that succeeded, at once.

        The system releases the lock when the process ends, however it ends.

        Parameters
        ----------
        handle : int
            File descriptor, open for writing.

        Raises
        ------
        OSError
            The file system has no locks.
        """
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            return False
        return True

    def unlock(handle: int) -> None:
        """Release what `try_lock` locked."""
        fcntl.flock(handle, fcntl.LOCK_UN)

    def sync_folder(folder: Path) -> None:
        """Put a folder's entries on disk: without it a file renamed into it may be gone after a power cut."""
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)

    def detached() -> dict[str, Any]:
        """Return the options of `subprocess.Popen` for a process that no terminal's Ctrl-C or closing reaches."""
        return {"start_new_session": True}

    def user_tag() -> str:
        """Return a word for this user, for names in the temporary folder that all users share."""
        return str(os.getuid())

    def is_own(folder: Path) -> bool:
        """Whether a folder is a real one of this user: anybody may have made its name in a shared folder."""
        return folder.is_dir() and not folder.is_symlink() and folder.stat().st_uid == os.getuid()

    @contextmanager
    def pseudo_terminal() -> Iterator[tuple[int, str]]:
        """Yield a serial port without hardware: the file descriptor of its far end, and the port's path.

        Bytes pass unchanged (no echo, no line editing). Both ends are closed afterwards.
        """
        far, near = pty.openpty()
        try:
            tty.setraw(near)
            yield far, os.ttyname(near)  # with no near end open, reading the far one would fail
        finally:
            os.close(near)
            os.close(far)


def wait_for_stop() -> signal.Signals:
    """Wait until one of STOP_SIGNALS comes, and return it; to be called in the main thread.

    One form for all systems: the interpreter writes the signal's number into a socket, which wakes whatever thread
    it came to, and is not lost if it comes before the waiting begins.
    """
    receiver, sender = socket.socketpair()
    sender.setblocking(False)
    with receiver, sender:
        wakeup = signal.set_wakeup_fd(sender.fileno(), warn_on_full_buffer=False)
        before = {number: signal.signal(number, lambda *_: None) for number in STOP_SIGNALS}
        try:
            while (number := receiver.recv(1)[0]) not in STOP_SIGNALS:
                pass
        finally:
            for signal_number, handler in before.items():
                signal.signal(signal_number, handler)
            signal.set_wakeup_fd(wakeup)
    return signal.Signals(number)
