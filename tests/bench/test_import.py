"""A response measured elsewhere: its figures against outside ones, the model it says it used, exit codes, shape."""

import json
import random
import re
import shlex
import subprocess
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from bandproof.analysis.fit import fit_bands
from bandproof.bench.circuit import predicted_response
from bandproof.bench.evaluate import usable
from bandproof.bench.misfit import arrays
from bandproof.bench.rehearsal import demo_board
from bandproof.bench.verbs.console import run
from tests.benchmarks._mutations import mutated

PASS, BOARD_FAILS, BAD_INPUT, UNDECIDED = 0, 1, 2, 4  # as documented in --help
README = (Path(__file__).parents[2] / "README.md").read_text(encoding="utf-8")


def as_csv(path, f, h, *, uncertainty=None, decibels=False):
    """Write a response with every digit it has."""
    header = "frequency_Hz,gain_dB,phase_deg" if decibels else "frequency_Hz,real,imag"
    parts = (20 * np.log10(np.abs(h)), np.degrees(np.angle(h))) if decibels else (h.real, h.imag)
    columns = [f, *parts]
    if uncertainty is not None:
        header += ",standard_uncertainty"
        columns.append(np.broadcast_to(uncertainty, f.shape))
    rows = [",".join(repr(float(value)) for value in row) for row in zip(*columns, strict=True)]
    path.write_text("\n".join([header, *rows]) + "\n")
    return path


@pytest.fixture
def resonance(outside):
    f, re_, im = np.loadtxt(outside / "npl_mat58" / "Figure6b.txt", comments="%").T
    return 1e9 * f, re_ + 1j * im


@pytest.fixture
def noisy(outside):
    f, re_, im = np.loadtxt(outside / "bandpass_noisy.csv", delimiter=",", skiprows=1).T
    return f, re_ + 1j * im


@pytest.fixture
def imported(capsys):
    """Run `import`; return (exit code, standard output, standard error), proven free of tracebacks."""

    def call(*arguments):
        capsys.readouterr()
        code = run(["import", *map(str, arguments)])
        out, err = capsys.readouterr()
        assert "Traceback" not in out + err
        assert "mistake of this program" not in err, err
        return code, out, err

    return call


@pytest.fixture
def result(imported, tmp_path):
    """Import a response; return its result object."""

    def call(f, h, *options, code=PASS, **kept):
        found, out, err = imported(as_csv(tmp_path / "given.csv", f, h, **kept), "--json", *options)
        assert found == code, err
        return json.loads(out)

    return call


def figures(result):
    """Return (measured, U) of f0, Q and gain of a result."""
    parameters = result["stages"][0]["parameters"].values()
    return [(entry["measured"], entry["expanded_uncertainty"]) for entry in parameters]


# --- a measured resonance with published figures ---


def test_measured_resonance_reads_as_published_and_says_which_model_it_needed(result, resonance):
    # Source: A. P. Gregory, NPL Report MAT 58 (2021), figure 6(b): 3.987848 GHz, loaded Q 7454, fitted with a leakage
    found = result(*resonance)
    (f0, _), (q, u_q), _ = figures(found)
    assert f"{f0 / 1e9:.6f}" == "3.987848"
    assert q == pytest.approx(7454, rel=1e-3)
    assert u_q < 1e-3 * 7454
    stage = found["stages"][0]
    assert stage["model"] == "band+delay+leakage"
    assert stage["fit"]["lack_of_fit"]
    assert found["verdict"] is None
    lack, leakage = found["alarms"]
    assert "do not follow band+delay" in lack
    assert re.search(r"moves f0 by -1\.11 kHz \(12 U\), Q by \+0\.92 .*, gain by .*those of that model", lack)
    assert "leakage of 0.0066 of gain" in leakage


@pytest.mark.parametrize(("model", "moved"), [("band+delay", "f0 by -1.11 kHz"), ("band", "Q by -81")])
def test_a_model_asked_for_that_misses_the_points_is_used_and_warned_of(result, resonance, model, moved):
    # Source of Q 7536 without leakage and delay: lmfit on the same points
    found = result(*resonance, "--model", model)
    stage = found["stages"][0]
    assert stage["model"] == model
    assert stage["fit"]["lack_of_fit"]
    assert moved in found["alarms"][0]
    assert found["alarms"][0].endswith("all the same, do not trust them")
    if model == "band":
        assert figures(found)[1][0] == pytest.approx(7536, abs=0.5)


@pytest.mark.parametrize("which", ["resonance", "noisy"])
def test_band_with_leakage_agrees_with_another_library_s_q_circle_fit(result, which, request):
    # Source: scikit-rf's fit of six parameters (NPL Report MAT 58), unweighted, made exact for any Q by mapping the
    # frequency so that its linear detuning 2 (u - u0)/u0 is proportional to f/f0 - f0/f, the reference iterated
    import skrf

    f, h = request.getfixturevalue(which)
    reference, scale, unit = f[np.abs(h).argmax()], 100.0, 1e9
    for _ in range(4):
        mapped = unit * (1 + (f / reference - reference / f) / (2 * scale))
        network = skrf.Network(
            frequency=skrf.Frequency.from_f(mapped, unit="Hz"), s=h.reshape(-1, 1, 1), z0=50, name="band"
        )
        circle = skrf.qfactor.Qfactor(network, res_type="transmission")
        circle.tol = 1e-12
        fitted = circle.fit(method="NLQFIT6", loop_plan="c")
        detuning = 2 * scale * (fitted.f_L / unit - 1)
        reference *= detuning / 2 + np.sqrt(1 + detuning**2 / 4)
        q = fitted.Q_L * unit / (fitted.f_L * scale)
    (f0, _), (ours, _), _ = figures(result(f, h, "--model", "band+leakage"))
    assert f0 == pytest.approx(reference, rel=1e-10 if which == "resonance" else 1e-7)
    assert ours == pytest.approx(q, rel=1e-7)


def test_the_help_lists_every_model(imported):
    from bandproof.bench.model_choice import MODELS

    code, out, _ = imported("--help")
    assert code == PASS
    assert f"[{'|'.join(MODELS)}]" in re.sub(r"\s", "", out)


# --- a simulated band whose true values are known ---


@pytest.mark.parametrize("options", [(), ("--model", "band"), ("--model", "band+leakage")])
def test_u_holds_the_true_values_of_a_simulated_band(result, noisy, options):
    # Source: bandpass_noisy.csv, made apart from this project: f0 1000 Hz, Q 10, gain 2, noise 0.002 per component.
    # 3/2 U, three standard uncertainties: the one draw of its noise there is may lie outside of U once in 22
    found = result(*noisy, *options)
    for (measured, expanded), true in zip(figures(found), (1000.0, 10.0, 2.0), strict=True):
        assert abs(measured - true) < 1.5 * expanded < 0.01 * true
    assert not found["stages"][0]["fit"]["lack_of_fit"]
    assert found["alarms"] == []


def test_the_simple_band_gives_what_another_library_found(result, noisy):
    # Source: scipy and lmfit on bandpass_noisy.csv, four parameters, with their uncertainties
    outside = ((999.98648, 2.07e-2), (9.99803, 4.1e-3), (1.99994, 5.4e-4))
    parameters = result(*noisy, "--model", "band")["stages"][0]["parameters"].values()
    for entry, (value, u) in zip(parameters, outside, strict=True):
        assert entry["measured"] == pytest.approx(value, abs=5.1e-6)
        # theirs from the residual's rms, ours from differences along frequency: two estimates of one noise
        assert entry["standard_uncertainty"] == pytest.approx(u, rel=2 / np.sqrt(2 * 92))


def test_both_headers_give_the_same_figures(result, noisy):
    plain, decibels = (figures(result(*noisy, uncertainty=0.002, decibels=which)) for which in (False, True))
    np.testing.assert_allclose(decibels, plain, rtol=1e-9)


def test_a_stated_uncertainty_is_believed_in_proportion(result, noisy):
    narrow, wide = (result(*noisy, uncertainty=u) for u in (0.002, 0.004))
    for (_, u), (_, twice) in zip(figures(narrow), figures(wide), strict=True):
        assert twice == pytest.approx(2 * u, rel=1e-6)
    chi_squares = [found["stages"][0]["fit"]["reduced_chi_square"] for found in (narrow, wide)]
    assert chi_squares[0] == pytest.approx(4 * chi_squares[1], rel=1e-6)
    assert narrow["stages"][0]["parameters"]["q"]["coverage_factor"] == pytest.approx(2.0, abs=1e-4)


def test_an_uncertainty_stated_far_too_small_is_lack_of_fit(result, noisy):
    found = result(*noisy, uncertainty=0.0002)
    assert found["stages"][0]["fit"]["lack_of_fit"]
    assert any(
        "the uncertainty is stated too small, or this is no second-order band" in text for text in found["alarms"]
    )


def test_a_misfit_that_moves_nothing_much_is_a_row_of_the_budget_and_told():
    from bandproof.bench.imported import read_off
    from bandproof.bench.response_file import Response

    f = np.linspace(300.0, 3000.0, 400)
    alternating = 2e-3 * np.where(np.arange(400) % 2, 1, -1)  # no smooth model follows it, none is moved by it
    found = read_off(Response("given", f, 2 / (1 + 5j * (f / 1e3 - 1e3 / f)) + alternating, np.full(400, 1e-3)))
    assert found.choice.significant
    assert not found.choice.material
    assert found.stage.model == "band+delay"
    assert "less than a third of U, the shift is in the budget" in found.stage.alarms[0]
    for quantity, budget in found.budgets.items():
        noise, misfit = budget.rows
        # uniform with the shift as half-width: its variance is a third of the square (JCGM 100:2008, 4.3.7)
        assert misfit.standard_uncertainty**2 == pytest.approx(found.choice.shifts[quantity] ** 2 / 3)
        assert budget.u == pytest.approx(np.hypot(noise.contribution, misfit.contribution))
        assert misfit.contribution > 0.0


def test_u_of_an_estimated_noise_is_that_of_a_t_distribution(result):
    # Source: JCGM 100:2008, table G.2 (from memory): k = 2.37 at 8 degrees of freedom for 95.45 %
    f = np.geomspace(500.0, 2000.0, 10)
    noise = 1e-3 * np.random.default_rng(5).normal(size=(2, 10))
    found = result(f, 1 / (1 + 1.5j * (f / 1e3 - 1e3 / f)) + noise[0] + 1j * noise[1])
    assert round(found["stages"][0]["parameters"]["centre"]["coverage_factor"], 2) == 2.37  # 8.7, truncated


def test_sound_files_of_few_points_are_seldom_told_to_lack_fit_and_u_holds_the_truth():
    from bandproof.bench.imported import read_off
    from bandproof.bench.response_file import Response

    rng, f, held, lacking, files = np.random.default_rng(6), np.geomspace(500.0, 2000.0, 12), 0, 0, 400
    for _ in range(files):
        h = 1 / (1 + 1.5j * (f / 1e3 - 1e3 / f)) + 1e-3 * (rng.normal(size=12) + 1j * rng.normal(size=12))
        found = read_off(Response("drawn", f, h, None))
        held += abs(found.measured["centre"] - 1000.0) < found.budgets["centre"].expanded
        lacking += found.choice.significant
    assert lacking <= 2  # expected 0.1; three would happen once in six thousand
    assert held / files == pytest.approx(0.9545, abs=4 * np.sqrt(0.9545 * 0.0455 / files))


# --- compared with a design ---


@pytest.fixture
def low(outcome):
    """The lowest stage of a swept board: frequency, response and covariance of its curve, ascending, none twice."""
    name = outcome.run.board.stages[0].name
    points = [p for p in usable([p for p in outcome.run.points if p.stage == name]) if p.purpose == "curve"]
    return arrays(sorted({p.frequency: p for p in points}.values(), key=lambda point: point.frequency))


@pytest.fixture
def with_design(two_band_path):
    return "--board", two_band_path, "--stage", "low"


def component(covariance):
    """Return what a file can say of points' covariances: one uncertainty for both parts."""
    return np.sqrt(0.5 * (covariance[:, 0, 0] + covariance[:, 1, 1]))


def test_points_of_a_run_give_the_fit_the_run_s_own_code_gives(result, low, with_design, outcome):
    f, h, covariance = low
    found = figures(result(f, h, *with_design, uncertainty=component(covariance)))
    alike = component(covariance)[:, None, None] ** 2 * np.eye(2)
    for stated, part_of_u in ((alike, 1e-6), (covariance, 0.05)):  # a file knows no difference between the two parts
        fit = fit_bands(f[None], h[None], stated[None])
        own = float(fit.f0[0]), float(fit.q[0]), float(abs(fit.gain[0]))
        for (measured, expanded), value in zip(found, own, strict=True):
            assert measured == pytest.approx(value, abs=part_of_u * expanded)


def test_a_stage_measured_elsewhere_is_compared_as_in_a_run(result, low, with_design, outcome):
    f, h, covariance = low
    found = result(f, h, *with_design, uncertainty=component(covariance))
    stage, own = found["stages"][0], outcome.result["stages"][0]
    assert found["verdict"] == stage["verdict"] == own["verdict"] == "pass"
    assert stage["name"] == "low"
    for name, entry in stage["parameters"].items():
        for key in ("unit", "designed", "predicted", "rule", "lower_limit", "upper_limit", "verdict"):
            assert entry[key] == own["parameters"][name][key]
        assert entry["deviation"] == pytest.approx(entry["measured"] / entry["designed"] - 1)


def test_the_result_has_the_shape_of_a_run_s(result, low, with_design, outcome):
    def shape(value):
        if isinstance(value, dict):
            return {key: shape(inner) for key, inner in value.items()}
        return [shape(value[0])] if isinstance(value, list) and value and isinstance(value[0], dict) else None

    f, h, covariance = low
    for options in ((), with_design):
        found = result(f, h, *options, uncertainty=component(covariance))
        assert shape(found) == shape(outcome.result)
        assert (found["ended"], found["serial"], found["run_id"], found["bench_seconds"]) == ("complete", *3 * [None])
        assert set(found["files"].values()) == {None}
    entry = result(f, h)["stages"][0]["parameters"]["q"]
    nothing = {"designed", "predicted", "rule", "deviation", "lower_limit", "upper_limit", "verdict"}
    assert {key for key, value in entry.items() if value is None} == nothing | {
        "conformance_probability",
        "conformance_prior",
    }


def test_a_band_outside_its_limits_fails(result, low, with_design):
    f, h, covariance = low
    found = result(1.1 * f, h, *with_design, uncertainty=component(covariance), code=BOARD_FAILS)
    assert found["verdict"] == "fail"
    verdicts = {name: entry["verdict"] for name, entry in found["stages"][0]["parameters"].items()}
    assert verdicts == {"centre": "fail", "q": "pass", "gain": "pass"}


@pytest.mark.parametrize(("options", "verdict"), [((), "undecided"), (("--model", "band+delay+leakage"), "pass")])
def test_a_band_that_needs_a_leakage_nobody_asked_for_is_undecided(result, low, with_design, options, verdict):
    f, h, covariance = low
    code = UNDECIDED if verdict == "undecided" else PASS
    found = result(f, h + 0.05j, *with_design, *options, uncertainty=component(covariance), code=code)
    assert found["verdict"] == verdict
    assert found["stages"][0]["model"] == "band+delay+leakage"
    assert "leakage of" in found["alarms"][-1]


def test_a_wrong_part_is_suspected_as_in_a_run(imported, result, with_design, tmp_path):
    board = demo_board()
    low = board.stage("low")
    parts = tuple(replace(part, value=3.4e3) if part.name == "R_shunt" else part for part in low.parts)
    f = np.geomspace(100.0, 1000.0, 15)
    h = predicted_response(board, replace(low, parts=parts), f)
    told = "low: R_shunt reads like 3.4 kΩ where 34 kΩ was drawn: wrong decade"
    found = result(f, h, *with_design, uncertainty=1e-3, code=BOARD_FAILS)
    assert [suspect["text"] for suspect in found["stages"][0]["suspects"]] == [told]
    _, out, _ = imported(tmp_path / "given.csv", *with_design)
    assert f"suspect: {told}" in " ".join(out.split())


# --- what a person reads ---


def test_a_person_reads_file_model_noise_and_figures_in_eighty_columns(
    imported, low, with_design, tmp_path, monkeypatch
):
    monkeypatch.chdir(tmp_path)
    f, h, covariance = low
    as_csv(tmp_path / "low.csv", f, h, uncertainty=component(covariance))
    for options in ((), with_design):
        code, out, err = imported("low.csv", *options)
        assert (code, err) == (PASS, "")
        assert f"low.csv    {len(f)} points, " in out
        assert "model      band+delay, the points follow it" in out
        assert "as stated in the file" in out
        assert "Centre frequency f0" in out
        assert "U holds only the noise of the points: nothing is known here of the instruments" in out
        assert max(map(len, out.splitlines())) <= 80
        assert ("Stage low: PASS" in out) == bool(options)


def test_readme_shows_what_comes_out(imported, outside, tmp_path, monkeypatch):
    make = next(line for line in README.splitlines() if line.endswith("> resonance.csv"))
    command = next(line for line in README.splitlines() if line == "bandproof import resonance.csv")
    shown = README.partition(f"{command}\n```\n\n```text\n")[2].partition("```")[0]
    monkeypatch.chdir(outside.parents[1])
    path = tmp_path / "resonance.csv"
    subprocess.run(["sh", "-c", make.replace("> resonance.csv", f"> {shlex.quote(str(path))}")], check=True)
    monkeypatch.chdir(tmp_path)
    _, out, _ = imported(*command.split()[2:])
    assert out.strip() == shown.strip()


# --- what cannot be done ---


def test_every_mistake_of_a_file_is_told_and_nothing_is_printed(imported, tmp_path):
    path = tmp_path / "wrong.csv"
    path.write_text("frequency_Hz,real,imag\n1000,nan,0\n900,1,0\n900,1\n")
    code, out, err = imported(path, "--json")
    assert (code, out) == (BAD_INPUT, "")
    for words in ("line 2: real is 'nan'", "line 4: has 2 columns", "line 4: 1 usable points"):
        assert words in err


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (("--board", "BOARD"), "--board without --stage NAME"),
        (("--stage", "low"), "--stage without --board BOARD"),
        (("--board", "BOARD", "--stage", "lwo"), r"has no stage 'lwo'; it has low, body \(nearest: low\)"),
        (("--board", "missing.board.toml", "--stage", "low"), "cannot be read"),
        (("--model", "notch"), "'notch' is not one of"),
    ],
)
def test_what_was_asked_wrongly_is_named(imported, noisy, tmp_path, two_band_path, options, words):
    given = [two_band_path if option == "BOARD" else option for option in options]
    code, out, err = imported(as_csv(tmp_path / "noisy.csv", *noisy), *given)
    assert (code, out) == (BAD_INPUT, "")
    assert re.search(words, err)


def test_noise_is_never_taken_for_a_band_in_silence(imported, tmp_path):
    codes = []
    for seed in range(40):
        noise = np.random.default_rng(seed).normal(size=(2, 50))
        code, out, err = imported(
            as_csv(tmp_path / "noise.csv", np.linspace(900.0, 1100.0, 50), noise[0] + 1j * noise[1])
        )
        words, where = ("follow no second-order band|the greatest gain is at", err) if code else ("Q is not known", out)
        assert re.search(words, where)
        codes.append(code)
    assert set(codes) == {PASS, BAD_INPUT}


@pytest.mark.parametrize("stated", [False, True])
def test_a_damaged_file_is_read_or_refused_in_words(imported, noisy, tmp_path, stated):
    whole = as_csv(
        tmp_path / "whole.csv", noisy[0][::4], noisy[1][::4], uncertainty=0.002 if stated else None
    ).read_bytes()
    path, draw, codes = tmp_path / "damaged.csv", random.Random(20 + stated), []
    for _ in range(100):
        path.write_bytes(mutated(whole, draw))
        code, out, err = imported(path)
        assert (code, bool(out)) in ((PASS, True), (BAD_INPUT, False))
        assert code == PASS or f"{path}: " in err
        codes.append(code)
    assert len(set(codes)) == 2  # the damage is neither always nor never noticed
