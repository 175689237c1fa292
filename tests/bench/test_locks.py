"""One bench, one sweep."""

import json
import os
import signal
import subprocess
import sys
import tempfile

import pytest

from bandproof.bench import locks
from bandproof.bench.errors import BenchFault
from bandproof.bench.locks import lock_path, locked

A, B = "TCPIP::192.0.2.7::5025::SOCKET", "TCPIP::192.0.2.8::5025::SOCKET"  # for documentation, RFC 5737
HOLDER = """
import sys
from bandproof.bench.locks import locked
with locked(sys.argv[2:], who=sys.argv[1]):
    print("locked", flush=True)
    sys.stdin.read()
"""


@pytest.fixture(autouse=True)
def own_folder(tmp_path, monkeypatch):
    monkeypatch.setenv("TMPDIR", str(tmp_path))
    monkeypatch.setattr(tempfile, "tempdir", None)


@pytest.fixture
def holder():
    """Another process that holds the lock of A as SN-17."""
    command = [sys.executable, "-c", HOLDER, "SN-17", A]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as process:
        assert process.stdout.readline() == b"locked\n"
        yield process


def is_free(address):
    with locked([address], who="a look"):
        return True


def test_the_second_sweep_is_told_the_address_and_who_has_it(holder):
    with pytest.raises(BenchFault) as caught, locked([A], who="SN-18"):
        pytest.fail("locked twice")
    told = str(caught.value)
    assert A in told
    assert "SN-17" in told
    assert f"process {holder.pid}," in told
    assert is_free(B)


def test_the_lock_of_a_killed_sweep_is_free_and_its_file_stays_stale(holder):
    holder.send_signal(signal.SIGKILL)
    holder.wait()
    assert json.loads(lock_path(A).read_text())["pid"] == holder.pid
    assert is_free(A)


def test_the_lock_ends_with_the_block_even_by_an_error_and_leaves_no_file_open():
    before = os.listdir("/proc/self/fd")
    with pytest.raises(ZeroDivisionError), locked([A], who="SN-1"):
        raise ZeroDivisionError
    assert is_free(A)
    assert lock_path(A).read_bytes() == b""
    assert os.listdir("/proc/self/fd") == before


def test_one_process_cannot_have_a_lock_twice():
    with locked([A], who="SN-1"):
        for spelling in (A, A.lower(), A.replace("TCPIP::", "TCPIP0::")):
            with pytest.raises(BenchFault, match=f"SN-1 .*process {os.getpid()}"), locked([spelling], who="SN-2"):
                pytest.fail("locked twice")


def test_one_address_twice_is_locked_once():
    with locked([A, B, A], who="SN-1"), pytest.raises(BenchFault, match=r"192\.0\.2\.8"), locked([B], who="SN-2"):
        pytest.fail("locked twice")


def test_who_is_refused_one_of_two_keeps_neither(holder):
    for order in ([A, B], [B, A]):
        with pytest.raises(BenchFault, match="SN-17"), locked(order, who="SN-18"):
            pytest.fail("locked twice")
        assert is_free(B)


def test_locks_are_taken_in_one_order_whatever_the_order_asked(monkeypatch):
    taken = []
    original = locks._locked
    monkeypatch.setattr(locks, "_locked", lambda path, *rest: taken.append(path) or original(path, *rest))
    for order in ([A, B], [B, A]):
        with locked(order, who="SN-1"):
            pass
    assert taken[:2] == taken[2:]
    assert len(set(taken)) == 2


@pytest.mark.parametrize("content", [b"", b"\xff\xfe", b"[]", b'{"pid": "x", "who": 1, "since": 2}', b"[" * 5000])
def test_a_holder_that_wrote_nonsense_is_still_a_holder(content):
    with locked([A], who="SN-1"):
        lock_path(A).write_bytes(content)
        with pytest.raises(BenchFault, match="in use by another process"), locked([A], who="SN-2"):
            pytest.fail("locked twice")


def test_a_long_name_is_cut_and_stays_readable():
    with locked([A], who="SN" * 10_000), pytest.raises(BenchFault) as caught, locked([A], who="SN-2"):
        pytest.fail("locked twice")
    assert str(caught.value).count("SN") == 100


def test_a_lock_folder_that_is_a_link_is_refused(tmp_path):
    lock_path(A).parent.symlink_to(tmp_path)
    with pytest.raises(BenchFault, match="belongs to somebody else"), locked([A], who="SN-1"):
        pytest.fail("locked in a foreign folder")
