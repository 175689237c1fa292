"""What differs between systems, in the form of the system these tests run on."""

import os
import signal
import subprocess
import sys
from collections import Counter

import pytest

from bandproof.bench import system

WAITER = """
import signal
from bandproof.bench import system
original = signal.signal
def told(number, handler):  # the last handler stands: from now on a signal is waited for
    before = original(number, handler)
    if number == system.STOP_SIGNALS[-1] and not told.once:
        told.once = print("waiting", flush=True) is None
    return before
told.once = False
original(signal.SIGINT, signal.default_int_handler)  # a shell may have started us with SIGINT ignored
signal.signal = told
print(system.wait_for_stop().name, flush=True)
print(signal.getsignal(signal.SIGINT) is signal.default_int_handler, signal.set_wakeup_fd(-1))
"""


@pytest.fixture
def file(tmp_path):
    handle = os.open(tmp_path / "file", os.O_RDWR | os.O_CREAT)
    yield handle
    os.close(handle)


def test_a_file_is_locked_once_and_after_unlocking_again(file, tmp_path):
    other = os.open(tmp_path / "file", os.O_RDWR)
    assert system.try_lock(file)
    assert not system.try_lock(other)
    system.unlock(file)
    assert system.try_lock(other)
    assert not system.try_lock(file)
    os.close(other)
    assert system.try_lock(file)


def test_a_folder_is_put_on_disk_and_left_closed(tmp_path, monkeypatch):
    calls = []
    monkeypatch.setattr(os, "fsync", lambda handle: calls.append(os.readlink(f"/proc/self/fd/{handle}")))
    before = Counter(os.listdir("/proc/self/fd"))
    system.sync_folder(tmp_path)
    assert calls == [str(tmp_path)]
    assert Counter(os.listdir("/proc/self/fd")) == before


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP], ids=lambda number: number.name)
def test_waiting_ends_with_any_signal_that_asks_for_a_stop_and_leaves_the_handlers_as_found(number):
    with subprocess.Popen([sys.executable, "-c", WAITER], stdout=subprocess.PIPE, text=True) as process:
        assert process.stdout.readline() == "waiting\n"
        process.send_signal(number)
        assert process.stdout.read() == f"{number.name}\nTrue -1\n"
    assert process.returncode == 0


def test_a_detached_process_leads_a_session_of_its_own():
    code = "import os; print(os.getpid() == os.getsid(0) == os.getpgrp())"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, check=True, **system.detached())
    assert done.stdout == b"True\n"


def test_a_pseudo_terminal_passes_every_byte_unchanged_both_ways_and_is_closed():
    every = bytes(range(256))
    with system.pseudo_terminal() as (far, path):
        port = os.open(path, os.O_RDWR | os.O_NOCTTY)
        for source, target in ((far, port), (port, far)):
            os.write(source, every)
            assert os.read(target, 1000) == every
        os.close(port)
    with pytest.raises(OSError, match="Bad file descriptor"):
        os.fstat(far)


def test_a_folder_of_somebody_else_or_a_link_is_not_own(tmp_path, monkeypatch):
    link = tmp_path / "link"
    link.symlink_to(tmp_path)
    assert system.is_own(tmp_path)
    assert not system.is_own(link)
    assert not system.is_own(tmp_path / "nothing")
    monkeypatch.setattr(os, "getuid", lambda: tmp_path.stat().st_uid + 1)
    assert not system.is_own(tmp_path)
