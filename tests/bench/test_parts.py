"""The verb `parts`: choices as text and as an object, the breach named, mistakes told."""

import json
import tomllib

import numpy as np
import pytest

from bandproof.analysis.circuits import MfbParts, mfb_figures
from bandproof.analysis.curve import curve_figures
from bandproof.bench.board_file import parse_board
from bandproof.bench.circuit import predict
from bandproof.bench.prediction import predicted_boards
from bandproof.bench.quantities import read_quantity
from bandproof.bench.verbs.console import run

DONE, BAD_INPUT = 0, 2
BAND = ("--centre", "1 kHz", "--q", "1.5", "--gain", "10 dB")
SHARP = ("--centre", "1 kHz", "--q", "30", "--gain", "10 dB")
NAMES = ["R_in", "R_shunt", "R_feedback", "C_1", "C_2"]


@pytest.fixture
def parts(capsys):
    """Run the verb; return (exit code, standard output, standard error)."""

    def call(*arguments):
        code = run(["parts", *arguments])
        out, err = capsys.readouterr()
        assert "mistake of this program" not in err, err
        return code, out, err

    return call


def listed(out):
    """Return the rows of the choices."""
    lines = out.splitlines()
    first = next(number for number, line in enumerate(lines) if line.lstrip().startswith("C_1 = C_2")) + 1
    return lines[first : lines.index("", first)]


def test_object_alone_stands_on_standard_output(parts):
    code, out, err = parts(*BAND, "--gbw", "4 MHz", "--json")
    found = json.loads(out)
    assert (code, err) == (DONE, "")
    assert found["schema"] == "bandproof-parts/1"
    assert found["wanted"] == {"centre": 1000.0, "q": 1.5, "gain": pytest.approx(10**0.5)}
    assert (found["gain_bandwidth"], found["resistors"], found["capacitors"]) == (4e6, "E96", "E12")
    assert found["is_within_ranges"]
    assert len(found["choices"]) == 5
    errors = [choice["error"] for choice in found["choices"]]
    assert errors == pytest.approx(sorted(errors), abs=1e-9)
    for choice in found["choices"]:
        assert list(choice["parts"]) == NAMES
        assert choice["error"] == max(map(abs, choice["errors"].values()))
        assert choice["figures"]["centre"] < choice["figures_ideal"]["centre"]  # an op-amp lowers it


def test_figures_told_are_those_of_the_parts(parts):
    found = json.loads(parts(*BAND, "--json")[1])
    for choice in found["choices"]:
        by_formula = mfb_figures(MfbParts(**choice["parts"]))
        assert choice["figures_ideal"]["q"] == pytest.approx(by_formula.q, rel=1e-12)
        assert choice["figures"]["centre"] == pytest.approx(by_formula.f0, rel=1e-12)
        assert choice["errors"]["gain"] == pytest.approx(by_formula.gain / 10**0.5 - 1, abs=1e-12)


def test_figures_agree_with_the_curve_of_ngspice(parts, spice):
    """Witness: ngspice (Debian package), AC analysis of the first choice with a one-pole op-amp."""
    choice = json.loads(parts(*BAND, "--gbw", "1 MHz", "--json")[1])["choices"][0]
    values = choice["parts"]
    netlist = [
        "V1 in 0 AC 1",
        f"R1 in x {values['R_in']!r}",
        f"R2 x 0 {values['R_shunt']!r}",
        f"R3 out m {values['R_feedback']!r}",
        f"C1 x out {values['C_1']!r}",
        f"C2 x m {values['C_2']!r}",
        f"G1 0 p 0 m {2.0 * np.pi * 1e6!r}",  # one-pole op-amp: an integrator of 2 pi GBW
        "CP p 0 1",
        "RP p 0 1e12",  # SPICE wants a direct current path
        "E1 out 0 p 0 1",
    ]
    frequency, real, imag = spice(netlist, "ac dec 4000 100 10000", ["vr(out)", "vi(out)"]).T
    logs, heights = np.log(frequency), np.log(np.hypot(real, imag))

    def curve(f):
        from scipy.interpolate import CubicSpline

        return np.exp(CubicSpline(logs, heights)(np.log(f))).astype(complex)

    read = curve_figures(curve, 125.0, 8000.0)
    told = [choice["figures"][name] for name in ("centre", "q", "gain")]
    # 1e-6: the spline's own error at 4000 points a decade (see test_accuracy)
    assert told == pytest.approx([read.f0[0], read.q[0], read.gain[0]], rel=1e-6)
    assert told[0] != pytest.approx(choice["figures_ideal"]["centre"], rel=1e-4)


# Source: exact logarithmic sensitivities, equal capacitors (see tests/analysis): R_feedback -1/2, +1/2, +1;
# C_1 -1/2, 0, -1/2; C_2 -1/2, 0, +1/2; R_in and R_shunt share -1/2 in f0 and Q, R_in -1 in gain.
def test_spread_follows_from_the_tolerances(parts):
    out = parts(*BAND, "--tolerance-resistors", "2 %", "--tolerance-capacitors", "10 %", "--json")[1]
    spread = json.loads(out)["choices"][0]["spread"]
    assert spread["centre"]["worst_case"] == pytest.approx(0.5 * 0.02 + 0.5 * 0.02 + 2 * 0.5 * 0.10, rel=1e-6)
    assert spread["q"]["worst_case"] == pytest.approx(0.5 * 0.02 + 0.5 * 0.02, rel=1e-6)
    assert spread["gain"]["worst_case"] == pytest.approx(2 * 0.02 + 2 * 0.5 * 0.10, rel=1e-6)
    # uniform within tolerance: half-width over the root of 3 (JCGM 100:2008, 4.3.7)
    assert spread["gain"]["standard_deviation"] == pytest.approx((2 * 0.02**2 + 2 * 0.05**2) ** 0.5 / 3**0.5, rel=1e-6)


def test_worst_case_is_printed_beside_one_standard_deviation(parts):
    out = parts(*BAND)[1]
    gain = next(line for line in out.splitlines() if line.startswith("gain "))
    assert gain.endswith("±7 %   2.2 %")  # 2 x 1 % + 2 x 2.5 %; sqrt((2 x 1 + 2 x 6.25) / 3) %


def test_spread_is_what_a_prediction_of_these_parts_calls_spread(parts, one_band_text):
    arguments = ("--centre", "160 Hz", "--q", "1.5", "--gain", "10 dB", "--gbw", "4 MHz")
    line = parts(*arguments)[1].splitlines()[-1]
    old = next(text for text in one_band_text.splitlines() if text.startswith("parts "))
    board = parse_board(one_band_text.replace(old, line), "a board with the parts of the verb")
    spread = json.loads(parts(*arguments, "--json")[1])["choices"][0]["spread"]
    for name, figure in predicted_boards(board, draws=10_000).stages[0].figures.items():
        assert spread[name]["standard_deviation"] == pytest.approx(figure.first_order, rel=1e-6)
        # of 10000 draws, 4 standard errors; second order: the tolerance itself, 5 %, of the spread
        assert figure.spread.sd / figure.spread.mean == pytest.approx(figure.first_order, rel=0.05)


@pytest.mark.parametrize("gbw", [(), ("--gbw", "4 MHz")])
def test_sensitivity_that_ranks_no_choice_is_said_to(parts, gbw):
    """Gain goes as R_feedback / R_in: no exact sensitivity of the circuit is larger than 1 (see tests/analysis)."""
    text = " ".join(parts(*BAND, *gbw)[1].split())
    assert "Sensitivity ranks none of them" in text
    assert "1 % of a part moves a figure by at most 1.00 % in every choice" in text
    assert "Sensitivity" not in parts(*BAND, *gbw, "--count", "1")[1]


@pytest.mark.parametrize(
    "arguments",
    [
        BAND,
        (*BAND, "--gbw", "4 MHz"),
        SHARP,
        (*BAND, "--capacitor", "33 pF", "--gbw", "900 kHz"),
        ("--centre", "1 mHz", "--q", "1000", "--gain", "60 dB", "--resistors", "E192"),
        ("--centre", "1 GHz", "--q", "1000", "--gain", "60 dB", "--count", "100"),
        ("--centre", "123.456 Hz", "--q", "1.23456", "--gain", "-12.3456 dB", "--capacitors", "E24"),
    ],
    ids=" ".join,
)
def test_text_fits_80_columns_but_for_the_line_of_the_board_file(parts, arguments):
    code, out, _ = parts(*arguments)
    *lines, last = out.splitlines()
    assert code == DONE
    assert max(map(len, lines)) <= 80, max(lines, key=len)
    assert last.startswith("parts = {")


def test_last_line_goes_into_a_board_file(parts, one_band_text):
    out = parts("--centre", "160 Hz", "--q", "1.5", "--gain", "10 dB", "--gbw", "3 MHz")[1]
    line = out.splitlines()[-1]
    old = next(text for text in one_band_text.splitlines() if text.startswith("parts "))
    board = parse_board(one_band_text.replace(old, line), "a board with the parts of the verb")
    predicted = predict(board, board.stages[0])
    assert (predicted.centre, predicted.q) == pytest.approx((160.0, 1.5), rel=0.005)
    assert [part.name for part in board.stages[0].parts] == NAMES


def test_line_of_the_board_file_holds_the_very_values(parts):
    arguments = (*BAND, "--capacitor", "12.345 nF", "--resistors", "E192")
    choice = json.loads(parts(*arguments, "--json")[1])["choices"][0]
    written = tomllib.loads(parts(*arguments)[1].splitlines()[-1])["parts"]
    kinds = {"R": "resistance", "C": "capacitance"}
    assert {name: read_quantity(text, kinds[name[0]]) for name, text in written.items()} == choice["parts"]


def test_named_capacitor_is_the_only_one(parts):
    rows = listed(parts(*BAND, "--capacitor", "6n8")[1])
    assert len(rows) == 1
    assert rows[0].split()[1:3] == ["6.8", "nF"]


@pytest.mark.parametrize(("series", "values"), [("E6", {1.0, 1.5, 2.2, 3.3, 4.7, 6.8}), ("E3", {1.0, 2.2, 4.7})])
def test_capacitors_are_of_the_series(parts, series, values):
    found = json.loads(parts(*BAND, "--capacitors", series, "--count", "100", "--json")[1])
    mantissas = {float(f"{choice['parts']['C_1']:.2e}".split("e")[0]) for choice in found["choices"]}
    assert mantissas == values
    assert all(1e-10 <= choice["parts"]["C_1"] <= 1e-6 for choice in found["choices"])


def test_count_limits_the_choices(parts):
    assert len(listed(parts(*BAND, "--count", "2")[1])) == 2


def test_nearest_breach_is_named_and_its_choice_shown(parts):
    code, out, _ = parts(*SHARP)
    text = " ".join(out.split())
    assert code == DONE
    assert "No capacitor of E12 keeps all resistors within 1 kΩ to 1 MΩ. Nearest: R_" in text
    assert "R_feedback 2.05 MΩ (above 1 MΩ)" in text
    assert "R_shunt 562 Ω (below 1 kΩ)" in text
    # R_feedback / R_shunt = 2 (2 Q^2 - gain) = 2 (1800 - 3.162)
    assert "Largest over smallest is 3594 here, and the range holds 1000" in text
    assert all(row.endswith("!") for row in listed(out))
    assert out.splitlines()[-1].startswith("parts = {")


def test_breach_of_a_capacitor_that_is_too_large_says_so(parts):
    code, out, _ = parts("--centre", "1 kHz", "--q", "3", "--gain", "10 dB", "--capacitor", "1 uF")
    assert code == DONE
    assert "! This capacitor does not keep all resistors within 1 kΩ to 1 MΩ. Nearest:" in out
    # Q/(pi f0 C), over 2 gain: 955 and 151 ohm; over 2 (2 Q^2 - gain) = 29.7: 32.2 ohm; to 1 kohm a 31st of 1 uF
    assert "take a smaller one, about 955 pF to 32.2 nF, or accept" in " ".join(out.split())


# At C resistors are Q / (pi f0 C) over 1, 2 gain and 2 (2 Q^2 - gain): 1 MHz, Q 5, gain 10: 15.9 kohm, 796 and 199 ohm
# at 100 pF; 1 mHz, Q 1.5, gain 3.16 at 1 uF: 477, 75.5 and 179 Mohm.
@pytest.mark.parametrize(
    ("band", "told"),
    [
        (
            ("--centre", "1 MHz", "--q", "5", "--gain", "20 dB"),
            "one is below 1 kΩ already at 100 pF: a lower centre is left, or a smaller capacitor (about 19.9 pF)",
        ),
        (
            ("--centre", "1 mHz", "--q", "1.5", "--gain", "10 dB"),
            "one is above 1 MΩ still at 1 µF: a higher centre is left, or a larger capacitor (about 477 µF)",
        ),
    ],
)
@pytest.mark.parametrize("series", [(), ("--capacitor", "1 nF")])
def test_end_of_the_capacitors_leaves_another_centre(parts, band, told, series):
    assert told in " ".join(parts(*band, *series)[1].split())


def test_capacitor_that_is_too_small_asks_for_a_larger_one(parts):
    out = parts("--centre", "100 Hz", "--q", "3", "--gain", "10 dB", "--capacitor", "1 nF")[1]
    assert "take a larger one, about 9.55 nF to 322 nF, or accept" in " ".join(out.split())


def test_series_with_a_gap_asks_for_a_finer_one(parts):
    # R_feedback Q / (pi f0 C) is 1 Mohm at 3.01 nF, R_shunt 1 kohm at 1000 / 794 of that, 2 (2 Q^2 - gain) = 794
    out = parts("--centre", "1.5 kHz", "--q", "14.2", "--gain", "6.28 V/V", "--capacitors", "E3")[1]
    assert "No capacitor of E3 keeps all resistors" in " ".join(out.split())
    assert "take one of another series, about 3.01 nF to 3.8 nF" in " ".join(out.split())


def test_capacitor_beyond_the_usual_range_is_named_though_all_resistors_are_inside(parts):
    code, out, _ = parts("--centre", "10 kHz", "--q", "1.5", "--gain", "10 dB", "--capacitor", "82 pF")
    assert code == DONE
    assert "! Outside 100 pF to 1 µF: C_1 82 pF (below 100 pF); C_2 82 pF (below 100 pF)." in " ".join(out.split())
    found = parts("--centre", "10 kHz", "--q", "1.5", "--gain", "10 dB", "--capacitor", "82 pF", "--json")[1]
    assert not json.loads(found)["is_within_ranges"]
    assert json.loads(found)["choices"][0]["breaches"] == ["C_1", "C_2"]


def test_unrealizable_band_is_explained_with_numbers(parts):
    code, out, err = parts("--centre", "1 kHz", "--q", "1.5", "--gain", "20 dB")
    assert (code, out) == (BAD_INPUT, "")
    # sqrt(10 / 2) = 2.236; 2 x 1.5^2 = 4.5 = 13.06 dB
    assert "--q 1.5 with --gain 10 V/V: this circuit needs Q > √(gain/2) = 2.236" in err
    assert "Raise Q above 2.236, or lower the gain below 2Q² = 4.5 V/V (13.06 dB)" in err


def test_op_amp_that_is_too_slow_is_refused_and_the_one_named_does(parts):
    code, out, err = parts(*BAND, "--gbw", "6 kHz")
    assert (code, out) == (BAD_INPUT, "")
    assert "--gbw: with 6 kHz no parts were found for 1 kHz, Q 1.5, gain 10 dB; an op-amp of 10 kHz would do" in err
    assert parts(*BAND, "--gbw", "10 kHz")[0] == DONE


def test_all_mistakes_are_told_at_once(parts):
    code, out, err = parts(
        *("--centre", "1 kH", "--q", "1,5", "--gain", "10", "--capacitor", "5"),
        *("--gbw", "4 V", "--tolerance-resistors", "1", "--tolerance-capacitors", "60 %"),
    )
    assert (code, out) == (BAD_INPUT, "")
    assert "the command line: 7 mistakes to mend, nothing was started" in err
    for told in (
        "--centre: unknown unit 'kH' in '1 kH'; expected a frequency such as",
        "--q: ",
        "--gain: no unit in '10'; expected a gain such as",
        "--capacitor: no unit in '5'",
        "--gbw: unknown unit 'V'",
        "--tolerance-resistors: no unit in '1'",
        "--tolerance-capacitors: '60 %' is not between 0 % and 50 %",
    ):
        assert told in err


@pytest.mark.parametrize(
    ("option", "text", "told"),
    [
        ("--centre", "0 Hz", "--centre: '0 Hz' is not between 1 mHz and 1 GHz"),
        ("--q", "-1", "--q: '-1' is not between 0.01 and 1000"),
        ("--gain", "-3 V/V", "--gain: '-3 V/V' is not between -60 dB and 60 dB"),
        ("--capacitor", "2 F", "--capacitor: '2 F' is not between 0.001 pF and 1 F"),
        ("--gbw", "0 Hz", "--gbw: '0 Hz' is not between 1 Hz and"),
        ("--count", "0", "--count"),
        ("--resistors", "E97", "E97"),
    ],
)
def test_value_out_of_place_is_refused_with_what_is_accepted(parts, option, text, told):
    code, out, err = parts(*BAND, option, text)
    assert (code, out) == (BAD_INPUT, "")
    assert told in err


def test_series_and_one_capacitance_together_are_refused(parts):
    code, _, err = parts(*BAND, "--capacitors", "E6", "--capacitor", "10 nF")
    assert code == BAD_INPUT
    assert "--capacitors and --capacitor: name a series or one capacitance, not both" in err


def test_centre_left_out_is_asked_for(parts):
    code, _, err = parts("--q", "1.5", "--gain", "10 dB")
    assert code == BAD_INPUT
    assert "--centre" in err
