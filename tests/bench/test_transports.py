"""The same board swept over another kind of wire: the same points, since no figure may depend on it."""

from __future__ import annotations

from contextlib import closing
from dataclasses import replace

import pytest

from bandproof.bench.circuit import draw_parts
from bandproof.bench.instruments import opened
from bandproof.bench.journal import Journal
from bandproof.bench.operator import Absent
from bandproof.bench.rehearsal import rehearsal_bench
from bandproof.bench.sweep import Sweep
from bandproof.bench.verbs.rehearse import world_of
from bandproof.drivers.clock import VirtualClock, create_clock_file
from bandproof.simulated_instruments.bench import start

SOCKET, HISLIP = "TCPIP::127.0.0.1::{}::SOCKET", "TCPIP::127.0.0.1::hislip0,{}::INSTR"


@pytest.fixture
def sweep(one_band, tmp_path):
    """Sweep one band at addresses of a form; returns the journal."""

    def make(form):
        bench = rehearsal_bench(one_band)
        time_file = str(tmp_path / "time")
        create_clock_file(time_file)
        world = replace(world_of(one_band, bench, draw_parts(one_band, 5), 5, 1), clock=time_file)
        journal = Journal()
        with start(world) as handle, closing(VirtualClock(time_file)) as clock:
            ports = handle.ports if form == SOCKET else handle.hislip_ports
            roles = {
                role: replace(instrument, address=form.format(ports[role]))
                for role, instrument in bench.instruments.items()
            }
            with opened(replace(bench, instruments=roles, clock=time_file), clock, None) as devices:
                Sweep(one_band, bench, devices, clock, Absent(), journal).run()
        return journal

    return make


def test_points_over_hislip_are_those_over_the_raw_socket_to_the_last_bit(sweep):
    raw, hislip = sweep(SOCKET), sweep(HISLIP)
    assert len(raw.points) > 5
    assert raw.points == hislip.points
