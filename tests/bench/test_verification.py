"""``verify``: sound, damaged and altered told apart, in a sentence each; and the run files of version 1 are read."""

import hashlib
import json
import shutil
from pathlib import Path

import h5py
import numpy as np
import pytest

from bandproof.bench import verification
from bandproof.bench.chain import CHAIN, add_to_chain
from bandproof.bench.documents.report import report_bytes
from bandproof.bench.documents.stored import read_stored
from bandproof.bench.result import board_verdict
from bandproof.bench.runfile import digest_of, read_result, read_run
from bandproof.bench.verbs import console
from bandproof.bench.verification import RunAltered, verified

V1 = Path(__file__).parents[1] / "reference_runs" / "v1"
CUT = "CUT-1/1/run.cut_short-1.h5"
REFERENCES = {  # file: (verdict, suspects, records)
    "PASS-1/1/run.h5": ("pass", 0, 40),
    "PASS-1/2/run.h5": ("pass", 0, 28),
    "FAIL-1/1/run.h5": ("fail", 1, 45),
    CUT: (None, 0, 8),
}


# --- version 1 is read ---


def test_the_references_are_small_and_none_is_missing():
    assert {path.relative_to(V1).as_posix() for path in V1.rglob("*.h5")} == set(REFERENCES)
    assert sum(path.stat().st_size for path in V1.rglob("*")) < 1_000_000


@pytest.mark.parametrize("name", REFERENCES)
def test_a_reference_of_version_1_is_read_verified_fitted_and_reported(name):
    verdict, suspects, records = REFERENCES[name]
    run, result, stored = read_run(V1 / name), read_result(V1 / name), read_stored(V1 / name)
    assert (result["verdict"], len(run.points)) == (verdict, records)
    assert sum(len(stage["suspects"]) for stage in result["stages"]) == suspects
    found = verified(V1 / name)
    assert (found.reasons, found.notes, found.absent) == ((), (), ())
    assert [entry.digest for entry in found.chain.of(V1 / name)] == [found.digest]
    for stage, then in zip(stored.stages, result["stages"], strict=True):
        for quantity, figure in stage.figures.items():
            kept = then["parameters"][quantity]
            # 1e-6 U: what verify allows, and why, is said in bench/verification.py
            assert figure.measured == pytest.approx(kept["measured"], rel=0, abs=1e-6 * kept["expanded_uncertainty"])
            assert figure.expanded_uncertainty == pytest.approx(kept["expanded_uncertainty"], rel=1e-6)
    assert board_verdict(run, stored.stages) == verdict
    assert report_bytes(run, stored.stages, result, stored.digest, ()).startswith(b"%PDF")


# --- altered ---


@pytest.fixture
def folder(tmp_path):
    shutil.copytree(V1, tmp_path / "runs")
    return tmp_path / "runs"


def signed(path, change):
    """Change an open run file and give it the digest of what it holds now."""
    with h5py.File(path, "r+") as file:
        change(file)
    image = path.read_bytes()[512:]
    digest = hashlib.sha256(image).hexdigest()
    path.write_bytes(f"bandproof-run/1 sha256={digest}\n".encode().ljust(512, b"\0") + image)


def point(name, factor):
    def change(file):
        file[f"points/low/{name}"][3] *= factor

    return change


def text(name, old, new):
    def change(file):
        before = bytes(file[name][()]).decode()
        assert old in before
        del file[name]
        file[name] = np.frombuffer(before.replace(old, new).encode(), dtype=np.uint8)

    return change


ALTERED = {
    "a point's response": (point("response_real", 1.01), "low, centre: measured is"),
    "the noise of points": (point("variance_real", 100.0), "low, centre: expanded uncertainty is"),
    "the verdict": (text("result", '"verdict":"pass"', '"verdict":"fail"'), "its verdict is fail, from its points"),
    "a limit in the board file": (text("texts/board", '"6 %"', '"9 %"'), "low, centre: lower limit is"),
    "a figure lost": (text("result", '"measured":162.', '"measured":null,"was":162.'), "low, centre: measured is None"),
    "a stage left out": (text("result", '"name":"body"', '"name":"baby"'), "other stages than points"),
    "a conclusion that is none": (text("result", '"stages":[', '"stages":7,"old":['), "cannot be evaluated"),
}


@pytest.mark.parametrize(("change", "words"), ALTERED.values(), ids=ALTERED)
def test_a_changed_file_with_a_new_digest_is_altered(folder, change, words):
    path = folder / "PASS-1/1/run.h5"
    (folder / CHAIN).unlink()  # nothing but the figures tells it
    signed(path, change)
    assert any(words in reason for reason in verified(path).reasons), verified(path).reasons


def test_what_rounding_alone_may_do_is_not_altered(folder):
    path = folder / "PASS-1/1/run.h5"
    (folder / CHAIN).unlink()
    signed(path, point("response_real", 1.0 + 2e-15))
    assert verified(path).reasons == ()


def test_a_change_that_moves_no_figure_is_told_by_the_chain(folder):
    path = folder / "PASS-1/1/run.h5"
    signed(path, text("about", "Zoë", "Ann"))
    (reason,) = verified(path).reasons
    assert f"line 1 of {folder / CHAIN} has another digest for it" in reason


def test_another_version_that_evaluated_is_named_before_anybody_is_accused(folder):
    path = folder / "PASS-1/1/run.h5"
    (folder / CHAIN).unlink()
    signed(path, text("about", '"version":"', '"version":"9.'))
    assert verified(path).reasons == ()  # the figures agree all the same
    signed(path, point("response_real", 1.01))
    assert "it was evaluated by bandproof 9." in verified(path).reasons[-1]


def test_a_broken_chain_is_told_for_every_run_in_it(folder):
    lines = (folder / CHAIN).read_text().splitlines(keepends=True)
    (folder / CHAIN).write_text("".join([*lines[:2], lines[3]]))
    for name in REFERENCES:
        (reason,) = verified(folder / name).reasons
        assert "line 3 does not follow from those before it" in reason


def test_a_run_that_is_put_in_the_place_of_another_is_altered(folder):
    shutil.copy(folder / "FAIL-1/1/run.h5", folder / "PASS-1/1/run.h5")
    (reason,) = verified(folder / "PASS-1/1/run.h5").reasons
    assert "not the run that was made there" in reason


def test_an_older_version_that_is_still_read_is_told(folder, monkeypatch):
    monkeypatch.setattr(verification, "READABLE", (1, 2))
    found = verified(folder / "PASS-1/1/run.h5")
    assert found.reasons == ()
    assert found.notes == ("it has schema version 1, older than this bandproof writes (2); it is read all the same",)


# --- what cannot be seen is said, not called altered ---


def test_a_copy_without_its_chain_is_sound_and_it_is_said(folder, tmp_path):
    found = verified(shutil.copy(folder / "PASS-1/1/run.h5", tmp_path / "copy.h5"))
    assert found.reasons == ()
    assert "no chain.txt" in found.notes[0]


def test_a_run_that_the_chain_does_not_have_is_sound_and_it_is_said(folder):
    lines = (folder / CHAIN).read_text().splitlines(keepends=True)
    (folder / CHAIN).write_text("".join(lines[:3]))
    found = verified(folder / CUT)
    assert found.reasons == ()
    assert "has no line for it" in found.notes[0]


@pytest.mark.parametrize("spoil", [Path.unlink, lambda path: signed(path, text("about", "Zoë", "Ann"))])
def test_a_pooled_run_without_its_other_attempt_is_not_called_altered(folder, spoil):
    spoil(folder / "PASS-1/1/run.h5")
    found = verified(folder / "PASS-1/2/run.h5")
    assert (found.reasons, found.absent) == ((), (1,))
    assert "means with attempt 1, not to be had as it was then" in found.notes[0]
    assert found.words == "as it was written; not compared: attempt 1 is not there as it was then"  # its line says so
    (folder / CHAIN).unlink()
    found = verified(folder / "PASS-1/2/run.h5")
    assert found.words == "matches its digest; not compared: attempt 1 is not there as it was then"
    assert (found.plain()["state"], found.plain()["chain"]) == ("not compared", None)


ABSENT = text(
    "result",
    '"attempts":null',
    '"attempts":[{"attempt":9,"digest":"0","verdict":"undecided","pooled":true},{"attempt":1}]',
)


def test_a_forged_run_that_claims_an_absent_attempt_is_not_called_sound(folder, capsys):
    path = folder / "PASS-1/1/run.h5"
    (folder / CHAIN).unlink()
    signed(path, lambda file: (point("response_real", 1.01)(file), ABSENT(file)))
    code, out, _ = verify(capsys, path)
    assert (code, "sound" in out, "as it was written" in out) == (0, False, False)
    assert f"{path}: matches its digest; not compared: attempt 9 is not there" in out


@pytest.mark.parametrize("name", ["a stage left out", "a conclusion that is none"])
def test_what_an_absent_attempt_cannot_explain_is_altered_all_the_same(folder, name):
    change, words = ALTERED[name]
    signed(folder / "PASS-1/1/run.h5", lambda file: (change(file), ABSENT(file)))
    (folder / CHAIN).unlink()
    assert words in verified(folder / "PASS-1/1/run.h5").reasons[0]


# --- several lines of the chain ---


def chained(folder, name):
    """Write a line for a run file as it is now."""
    add_to_chain(folder, [("2026-01-02T00:00:00+00:00", name, digest_of(folder / name))])


def test_a_run_made_where_another_stood_before_is_sound_and_told_with_its_own_link(folder, capsys):
    name = "PASS-1/1/run.h5"
    shutil.copy(folder / "FAIL-1/1/run.h5", folder / name)
    chained(folder, name)
    code, out, _ = verify(capsys, folder / name)
    assert (code, "another run stood here before: line 1" in out) == (0, True)
    assert "sound, as it was written" in out
    link = (folder / CHAIN).read_text().split()[-1]
    assert f"link   {link}, line 5 of 5" in out
    chain = verified(folder / name).plain()["chain"]
    assert (chain["line"], chain["link"]) == (5, link)


def test_a_run_that_is_not_the_last_made_in_its_place_is_altered(folder):
    path = folder / "PASS-1/1/run.h5"
    before = path.read_bytes()
    shutil.copy(folder / "FAIL-1/1/run.h5", path)
    chained(folder, "PASS-1/1/run.h5")
    path.write_bytes(before)
    found = verified(path)
    assert "line 5 of" in found.reasons[0]
    assert not any("stood here" in note for note in found.notes)


def test_other_runs_of_the_chain_that_are_missing_or_changed_are_told_with_their_lines(folder):
    shutil.rmtree(folder / "CUT-1")
    signed(folder / "FAIL-1/1/run.h5", text("about", "reference-FAIL", "another-FAIL"))
    found = verified(folder / "PASS-1/1/run.h5")
    assert found.reasons == ()
    assert found.notes[0].endswith(f"another one: line 3 (FAIL-1/1/run.h5), line 4 ({CUT})")


# --- the command ---


def verify(capsys, *arguments):
    capsys.readouterr()
    code = console.run(["verify", *map(str, arguments)])
    out, err = capsys.readouterr()
    assert "Traceback" not in out + err
    return code, out, err


def test_the_command_says_sound_with_digest_and_link(folder, capsys):
    code, out, err = verify(capsys, folder / "PASS-1/1/run.h5")
    assert (code, err) == (0, "")
    assert "sound, as it was written; its figures follow from its points" in out
    link = (folder / CHAIN).read_text().splitlines()[0].split()[-1]
    assert f"link   {link}, line 1 of 4 in {folder / CHAIN}" in out


def test_altered_is_exit_2_with_every_reason_and_an_object(folder, capsys):
    path = folder / "PASS-1/1/run.h5"
    signed(path, point("response_real", 1.01))
    code, out, err = verify(capsys, path)
    assert (code, out) == (2, "")
    assert f"{path}: is altered: its digest is right, but\n  1. low" in err
    code, out, err = verify(capsys, path, "--json")
    found = json.loads(out)
    assert (code, found["state"], found["reasons"]) == (2, "altered", list(verified(path).reasons))
    assert str(RunAltered(str(path), tuple(found["reasons"]))) in err


def test_sound_is_an_object_too(folder, capsys):
    code, out, _ = verify(capsys, folder / "PASS-1/2/run.h5", "--json")
    found = json.loads(out)
    assert (code, found["state"], found["serial"], found["attempt"]) == (0, "sound", "PASS-1", 2)
    assert found["chain"]["line"] == 2
