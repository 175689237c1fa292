"""Errors travel between processes and read well."""

from __future__ import annotations

import pickle

import pytest

from bandproof.drivers import errors
from bandproof.drivers.schema import DialectMistakes, Finding
from bandproof.drivers.visa import is_timeout, translated

A = "TCPIP::192.0.2.7::5025::SOCKET"  # an address for documentation, RFC 5737
ONE_OF_EACH = [
    errors.LinkClosed(A, "FREQ?", "the link was closed", 3),
    errors.LinkBroken(A, "FREQ?", "ConnectionResetError: gone", 2.0, 17, 3),
    errors.NoAnswer(A, "FREQ?", 2.0, 17, 3),
    errors.ReplyError(A, "FREQ?", "a decimal number", 2.0, 200, b"\xff" * 200, 3),
    errors.InstrumentError(A, "FREQ 1E9", -222, "Data out of range", 3),
    errors.SettingRefused(A, "FREQ 1E9", "1e+09", "1e+07", "0.999999 to 1.000001 times that", 3),
    errors.BeyondLimits(A, "FREQ", "FREQ must be from 1 to 5000 by the dialect, got 6300.0", 3),
]


def test_there_is_one_of_each_error_here():
    assert {type(problem).__name__ for problem in ONE_OF_EACH} == set(errors.__all__) - {"InstrumentProblem"}


@pytest.mark.parametrize("problem", ONE_OF_EACH, ids=lambda problem: type(problem).__name__)
def test_an_error_goes_to_another_process_and_back(problem):
    copy = pickle.loads(pickle.dumps(problem))
    assert type(copy) is type(problem)
    assert str(copy) == str(problem)
    assert vars(copy) == vars(problem)


@pytest.mark.parametrize("problem", ONE_OF_EACH, ids=lambda problem: type(problem).__name__)
def test_an_error_says_where_after_what_and_what_to_do(problem):
    text = str(problem)
    assert A in text
    assert "FREQ" in text
    assert "exchange log line 3" in text
    assert any(word in text for word in ("check", "reopen", "ask for"))


@pytest.mark.parametrize("problem", ONE_OF_EACH[1:4], ids=lambda problem: type(problem).__name__)
def test_an_error_of_the_line_names_limit_and_bytes_received(problem):
    assert "2 s" in str(problem)
    assert str(problem.received) in str(problem)


def test_an_error_shows_at_most_forty_bytes_of_a_reply():
    assert str(ONE_OF_EACH[3]).count(r"\xff") == 40


def test_mistakes_of_a_dialect_go_to_another_process_and_back():
    mistakes = DialectMistakes("mine.toml", (Finding("load.fixed", "'x'", "a number"),))
    assert str(pickle.loads(pickle.dumps(mistakes))) == str(mistakes)


def test_every_error_that_pyvisa_and_its_backend_define_is_translated():
    import inspect

    import pyvisa.errors
    import pyvisa.rname
    import pyvisa_py.protocols.rpc
    import pyvisa_py.protocols.vxi11
    import pyvisa_py.protocols.xdrlib
    import pyvisa_py.sessions
    import pyvisa_py.tcpip

    protocols = (pyvisa_py.protocols.rpc, pyvisa_py.protocols.vxi11, pyvisa_py.protocols.xdrlib)
    modules = (pyvisa.errors, pyvisa.rname, pyvisa_py.sessions, pyvisa_py.tcpip, *protocols)
    own = {
        kind
        for module in modules
        for _, kind in inspect.getmembers(module, inspect.isclass)
        if issubclass(kind, Exception) and not issubclass(kind, Warning) and kind.__module__ == module.__name__
    }
    assert len(own) > 10
    # PyVISA-py itself turns these two into status codes
    inside = {pyvisa_py.sessions.OpenError, pyvisa_py.sessions.UnknownAttribute}
    assert {kind for kind in own if not issubclass(kind, translated())} == inside


def test_only_a_time_out_is_a_time_out():
    from pyvisa.constants import StatusCode
    from pyvisa.errors import VisaIOError

    late = {code for code in StatusCode if code < 0 and is_timeout(VisaIOError(code))}
    assert late == {StatusCode.error_timeout}
    assert is_timeout(TimeoutError())
    assert not is_timeout(ConnectionResetError())


def test_a_mistake_of_ours_is_not_blamed_on_the_instrument():
    assert not any(issubclass(kind, translated()) for kind in (TypeError, AttributeError, KeyError, AssertionError))
