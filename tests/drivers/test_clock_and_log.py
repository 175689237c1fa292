"""Time of a rehearsal, and the log of every message."""

from __future__ import annotations

import struct
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from bandproof.drivers.clock import RealClock, VirtualClock, create_clock_file
from bandproof.drivers.log import ExchangeLog

FULL = Path("/dev/full")
NOON = datetime(2026, 1, 1, 12, tzinfo=UTC)


@pytest.fixture
def virtual(tmp_path):
    create_clock_file(tmp_path / "clock")
    clock = VirtualClock(tmp_path / "clock")
    yield clock
    clock.close()


def test_virtual_time_goes_on_by_what_is_waited_and_utc_with_it(virtual):
    virtual.wait(1.5)
    virtual.wait(0.25)
    assert virtual.now() == 1.75
    assert virtual.utc() == datetime(2026, 1, 1, tzinfo=UTC) + timedelta(seconds=1.75)


@pytest.mark.parametrize("duration", [-1e-9, float("nan"), float("inf")])
@pytest.mark.parametrize("kind", ["virtual", "real"])
def test_no_clock_runs_backwards(virtual, kind, duration):
    clock = virtual if kind == "virtual" else RealClock()
    with pytest.raises(ValueError, match="runs backwards"):
        clock.wait(duration)
    assert virtual.now() == 0.0


def test_a_wait_in_vain_costs_what_a_real_bench_would_have_waited(virtual):
    assert virtual.patience(60.0) == virtual.patience(0.0)
    assert virtual.expired(60.0) == RealClock().patience(60.0)
    assert virtual.now() == RealClock().patience(60.0)


def test_the_clock_file_is_shared_and_laid_out_as_agreed(virtual, tmp_path):
    virtual.wait(2.5)
    virtual.mark(7, 3)
    content = (tmp_path / "clock").read_bytes()
    assert struct.unpack("<dQQ40s", content) == (2.5, 7, 3, bytes(40))
    other = VirtualClock(tmp_path / "clock")
    other.wait(1.0)
    assert virtual.now() == 3.5
    other.close()


def test_the_log_has_time_address_direction_length_and_forty_bytes(tmp_path):
    log = ExchangeLog(tmp_path / "log")
    assert log.add(NOON, "ADDRESS", ">", b"*IDN?\n", 6) == 1
    assert log.add(NOON, "ADDRESS", "<", bytes(range(60)), 4000) == 2
    log.close()
    first, second = (tmp_path / "log").read_text().splitlines()
    assert first == "2026-01-01T12:00:00.000000Z ADDRESS > 6 *IDN?\\n"
    assert second.startswith("2026-01-01T12:00:00.000000Z ADDRESS < 4000 \\x00\\x01")
    assert second.endswith(r"&'")
    assert log.add(NOON, "ADDRESS", ">", b"", 0) == 0


def test_the_log_is_bounded_and_says_that_it_stopped(tmp_path):
    log = ExchangeLog(tmp_path / "log", limit=200)
    numbers = [log.add(NOON, "ADDRESS", ">", b"x" * 40, 40) for _ in range(100)]
    assert numbers[:3] == [1, 2, 0]
    assert set(numbers[2:]) == {0}
    assert "limit of 200 bytes" in (tmp_path / "log").read_text().splitlines()[-1]
    assert (tmp_path / "log").stat().st_size < 200 + 80


def test_a_log_goes_on_where_an_earlier_one_ended(tmp_path):
    for line in (1, 2):
        log = ExchangeLog(tmp_path / "log")
        assert log.add(NOON, "ADDRESS", ">", b"A?\n", 3) == line
        log.close()


@pytest.mark.skipif(not FULL.exists(), reason="needs the device that is always full")
def test_a_full_disk_stops_the_log_and_not_the_measurement(tmp_path):
    log = ExchangeLog(tmp_path / "log")
    log._file.close()
    log._file = FULL.open("w", buffering=1)
    assert log.add(NOON, "ADDRESS", ">", b"A?\n", 3) == 0
    assert "No space left" in str(log.stopped)
