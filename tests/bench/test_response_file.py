"""A response file: what is read, and every mistake named by its line."""

import re

import numpy as np
import pytest

from bandproof.bench.errors import FileMistakes
from bandproof.bench.response_file import FEWEST, FEWEST_WITHOUT_UNCERTAINTY, read_response

POINTS = 12


def band(header="frequency_Hz,real,imag", count=POINTS):
    """Lines of a sound file: a band round 1 kHz."""
    f = np.linspace(800.0, 1250.0, count)
    h = 2 / (1 + 5j * (f / 1e3 - 1e3 / f))
    rows = [f"{x:.6f},{y.real:.9f},{y.imag:.9f}" for x, y in zip(f, h, strict=True)]
    return [header, *rows]


@pytest.fixture
def read(tmp_path):
    def call(lines, end="\n"):
        path = tmp_path / "band.csv"
        path.write_bytes((lines if isinstance(lines, str) else end.join(lines)).encode())
        return read_response(path)

    return call


@pytest.fixture
def mistakes(read):
    """Return the findings of a file, and that their number is told."""

    def call(lines):
        with pytest.raises(FileMistakes) as caught:
            read(lines)
        assert "nothing was started" in str(caught.value)
        return caught.value.findings

    return call


def test_real_and_imaginary_part_are_read(read):
    found = read(
        ["frequency_Hz,real,imag", *(f"{900 + 10 * i},{-2 / (1 + (i - 6) ** 2)},0.5e-3" for i in range(POINTS))]
    )
    assert found.frequency.tolist() == [900.0 + 10.0 * i for i in range(POINTS)]
    assert found.response[6] == -2 + 0.5e-3j
    assert found.uncertainty is None


def test_decibels_and_degrees_are_of_the_voltage_ratio(read):
    # 20 dB is ten times the voltage, and 6.0206 dB twice (definition); +90 degrees is +j
    rows = [f"{900 + 10 * i},{20 if i == 6 else 6.020599913279624},{90 if i == 6 else -180}" for i in range(POINTS)]
    found = read(["frequency_Hz,gain_dB,phase_deg", *rows])
    assert found.response[6] == pytest.approx(10j, abs=1e-14)
    assert found.response[0] == pytest.approx(-2.0, abs=1e-14)


@pytest.mark.parametrize("header", ["frequency_Hz,real,imag", "frequency_Hz,gain_dB,phase_deg"])
def test_standard_uncertainty_is_in_volts_per_volt_under_both_headers(read, header):
    rows = [f"{900 + 10 * i},{-abs(i - 3)},0,0.00{i + 1}" for i in range(1, 7)]
    if "real" in header:
        rows = [f"{900 + 10 * i},{5 - abs(i - 3)},0,0.00{i + 1}" for i in range(1, 7)]
    found = read([f"{header},standard_uncertainty", *rows])
    assert found.uncertainty.tolist() == [0.002, 0.003, 0.004, 0.005, 0.006, 0.007]


@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
def test_comments_blank_lines_quotes_and_any_line_end_change_nothing(read, end):
    header, *rows = band()
    noted = ["# a remark", "", "  ", header.replace(",", " , ") + "  # columns", "#", *rows[:4], "", "# 1,2,3,4,5"]
    noted += [f"{rows[4]} # taken twice, 50 % louder", '"' + rows[5].replace(",", '","') + '"', *rows[6:], "# end", ""]
    plain = read(band())
    found = read("\ufeff" + end.join(noted))
    assert found.frequency.tolist() == plain.frequency.tolist()
    assert found.response.tolist() == plain.response.tolist()


def at(line, text):
    """Return a sound file with one line replaced (numbered from 1)."""
    lines = band()
    lines[line - 1] = text
    return lines


@pytest.mark.parametrize(
    ("lines", "words"),
    [
        (at(4, "900,nan,0"), "line 4: real is 'nan'"),
        (at(4, "900,1,inf"), "line 4: imag is 'inf'"),
        (at(4, "900,1,1e999"), "line 4: imag is '1e999'"),
        (at(4, "900,one,0"), "line 4: real is 'one'"),
        (at(4, "900,,0"), "line 4: real is ''"),
        (at(4, "900,1_0,0"), "line 4: real is '1_0'"),
        (at(4, "900,\uff11,0"), "line 4: real is '\uff11'"),
        (at(4, "0,1,0"), "line 4: frequency_Hz is '0'; expected a number above zero"),
        (at(4, "-900,1,0"), "line 4: frequency_Hz is '-900'"),
        (at(4, "900,1"), "line 4: has 2 columns, the header has 3"),
        (at(4, "900;1;0"), "line 4: has 1 columns, the header has 3; separate them by commas"),
        (at(4, "900,5,0,1,0,2"), "line 4: has 6 columns, the header has 3; a decimal comma is not read"),
        (at(4, '"900,5",0.1,0.2'), "line 4: frequency_Hz is '900,5'.*decimal comma"),
        (at(4, "900," + "1" * 200_000 + ",0"), "line 4: has 200006 characters"),
        (at(4, band()[2]), "line 4: frequency 840.909091 Hz stands twice, first in line 3"),
        (at(4, "810,1,0"), "line 4: frequency 810 Hz comes after 840.909091 Hz; expected ascending"),
        (band()[:6], "line 6: 5 usable points; a band needs at least 10 where no standard_uncertainty is stated"),
        (["frequency_Hz,real,imag"], "line 1: 0 usable points"),
        (["# nothing", ""], "line 1: there is no data; expected a header row frequency_Hz,real,imag or"),
        ([], "line 1: there is no data"),
        (["freq,re,im", *band()[1:]], "line 1: found the header 'freq,re,im'; expected frequency_Hz,real,imag or"),
        (["frequency_Hz,gain_db,phase_deg", *band()[1:]], r"line 1: found the header.*\(nearest: gain_dB\)"),
        (["frequency_Hz,real", *band()[1:]], "line 1: found the header 'frequency_Hz,real'"),
        (["frequency_Hz;real;imag", *band()[1:]], "line 1: found the header 'frequency_Hz;real;imag'"),
        (band()[1:], "line 1: found the header '800.000000"),
        (
            [band()[0], *band()[7:], *(f"{2e3 + i},0.1,0" for i in range(9))],
            "line [23]: the greatest gain is at the first",
        ),
        ([*band()[:7], *(f"{2e3 + i},{5 + i},0" for i in range(9))], "line 16: the greatest gain is at the last"),
        ([band()[0], *(f"{1e3 + i},0,0" for i in range(12))], "line 2: the response is nothing everywhere"),
    ],
)
def test_a_mistake_is_named_by_its_line(mistakes, lines, words):
    findings = mistakes(lines)
    assert len(findings) == 1, findings
    assert re.match(words, findings[0]), findings[0]


def test_all_mistakes_of_a_file_come_at_once_in_the_order_of_its_lines(mistakes):
    lines = band("frequency_Hz,real,imag,standard_uncertainty")
    lines[1:] = [f"{line},0.001" for line in lines[1:]]
    lines[2], lines[4], lines[7] = "840,nan,0,0.001", "700,1,0,0.001", "1050,1,0,-0.001"
    lines.insert(6, "1000,0.1")
    assert [finding.split(":")[0] for finding in mistakes(lines)] == ["line 3", "line 5", "line 7", "line 9"]


def test_a_file_that_is_wrong_everywhere_is_told_in_a_screenful(mistakes):
    findings = mistakes([band()[0], *(f"{1e4 - i},x,y" for i in range(5000))])
    assert len(findings) == 21
    assert findings[-1] == "and 9981 more"  # 2 a line and too few points, less the 20 told


@pytest.mark.parametrize("value", ["0", "-0.001", "nan", "inf", "", "1e-30"])
def test_a_standard_uncertainty_that_is_none_is_named(mistakes, value):
    lines = [f"{line},0.001" for line in band()]
    lines[0] = "frequency_Hz,real,imag,standard_uncertainty"
    lines[5] = lines[5].removesuffix("0.001") + value
    assert mistakes(lines)[0].startswith(f"line 6: standard_uncertainty is {value!r}; expected a number above zero")


def test_decibels_no_number_can_hold_are_named(mistakes):
    rows = [f"{900 + i},{-abs(i - 5)},0" for i in range(POINTS)]
    rows[5] = "905,6200,0"
    assert mistakes(["frequency_Hz,gain_dB,phase_deg", *rows])[0].startswith("line 7: gain_dB is '6200'")


@pytest.mark.parametrize(("stated", "fewest"), [(True, FEWEST), (False, FEWEST_WITHOUT_UNCERTAINTY)])
def test_fewer_points_will_do_where_their_uncertainty_is_stated(read, mistakes, stated, fewest):
    header, *rows = band("frequency_Hz,real,imag" + ",standard_uncertainty" * stated, fewest)
    rows = [row + ",0.001" * stated for row in rows]
    assert len(read([header, *rows]).frequency) == fewest
    assert f"a band needs at least {fewest}" in mistakes([header, *rows[:-1]])[0]


def test_a_file_that_is_not_text_or_not_there_is_named(tmp_path):
    path = tmp_path / "band.csv"
    with pytest.raises(FileMistakes, match="cannot be read"):
        read_response(path)
    path.write_bytes(b"frequency_Hz,real,imag\n\xff\xfe")
    with pytest.raises(FileMistakes, match="not UTF-8 text"):
        read_response(path)
