"""The run file: written and read back, the same for the same run, and no damage unnoticed."""

import hashlib
import random
from dataclasses import replace

import h5py
import numpy as np
import pytest

from bandproof.bench import runfile
from bandproof.bench.bench_file import parse_bench
from bandproof.bench.errors import RunFileDamaged
from bandproof.bench.runfile import digest_of, read_run, write_run

RESULT = {"schema": "bandproof-result/1", "note": "Ω µ ± ∞"}


@pytest.fixture(scope="module")
def run(outcome):
    """A run as its texts tell it: the simulated bench's ports are of one day only and not kept."""
    bench = parse_bench(outcome.run.bench.text, "bench text of the run")
    texts = {"generator": "kind = 'generator'\n", "scope": "# µ\n"}
    return replace(outcome.run, bench=replace(bench, dialect_texts=texts))


@pytest.fixture
def written(run, tmp_path):
    path = tmp_path / "run.h5"
    write_run(path, run, RESULT)
    return path


def test_a_run_is_read_back_as_it_was(run, written):
    assert read_run(written) == run
    assert runfile.read_result(written) == RESULT


EXTREMES = {
    "no history": {"history": ()},
    "no alarms": {"alarms": ()},
    "no points": {"points": ()},
    "alarms in words": {"alarms": ("low: × 0.2 of the predicted gain", "π\n\t\"'\\")},
    "cut short": {"ended": "cut_short", "reason": "TCPIP::127.0.0.1::1::SOCKET gave no answer\nline two"},
    "note of every kind": {"note": "Ω\u0000\u2028 \U0001f50a", "operator": "Zoë"},
}


@pytest.mark.parametrize("changes", EXTREMES.values(), ids=EXTREMES)
def test_a_run_of_any_content_is_read_back_as_it_was(run, tmp_path, changes):
    changed = replace(run, **changes)
    write_run(tmp_path / "run.h5", changed, RESULT)
    assert read_run(tmp_path / "run.h5") == changed


def test_numbers_survive_to_the_last_bit(run, tmp_path):
    rng = np.random.default_rng(1)
    points = tuple(
        replace(
            point,
            frequency=float(np.exp(rng.normal(0, 20))),
            response=complex(*rng.normal(0, 1e-30, 2)),
            covariance=tuple(rng.normal(0, 1e-200, 3).tolist()),
            levels=(5e-324, 1.7976931348623157e308),
            flags=("overload", "unsettled", "distorted")[: point.step % 4],
        )
        for point in run.points
    )
    write_run(tmp_path / "run.h5", replace(run, points=points), RESULT)
    assert read_run(tmp_path / "run.h5").points == points


def test_the_same_run_gives_the_same_bytes(run, tmp_path):
    paths = [tmp_path / name for name in ("first.h5", "second.h5")]
    digests = [write_run(path, run, RESULT) for path in paths]
    assert paths[0].read_bytes() == paths[1].read_bytes()
    assert digests[0] == digests[1] == digest_of(paths[0])


def test_the_digest_is_that_of_all_bytes_behind_the_user_block(written):
    """The user block's form is documented: `bandproof-run/1 sha256=...`; sha256 by hashlib."""
    content = written.read_bytes()
    digest = hashlib.sha256(content[512:]).hexdigest()
    assert content[:512].rstrip(b"\0") == f"bandproof-run/1 sha256={digest}\n".encode()


def test_nothing_is_left_beside_the_run_file(written):
    assert [path.name for path in written.parent.iterdir()] == ["run.h5"]


# --- its form ---


def test_there_are_only_flat_datasets_without_variable_strings_and_points_have_units(written):
    seen = {}
    with h5py.File(written, "r") as file:
        file.visititems(lambda name, item: seen.update({name: item}) if isinstance(item, h5py.Dataset) else None)
        for name, data in seen.items():
            assert data.ndim == 1, name
            assert data.dtype.kind in "fiuS", name
            assert h5py.check_string_dtype(data.dtype) is None or h5py.check_string_dtype(data.dtype).length, name
            for attribute in data.attrs.values():
                assert isinstance(attribute, bytes), name
            assert ("units" in data.attrs) == name.startswith("points/"), name
        lengths = {stage: {len(column) for column in file[f"points/{stage}"].values()} for stage in file["points"]}
        assert file["points/low/frequency"].attrs["units"] == b"Hz"
        assert file["points/low/level_in"].attrs["units"] == b"V"
    assert all(len(found) == 1 for found in lengths.values())
    assert {"texts/board", "texts/bench", "result", "steps"} <= set(seen)


def test_the_texts_are_in_the_file_as_they_were_written(run, written):
    with h5py.File(written, "r") as file:
        assert bytes(file["texts/board"][()]).decode() == run.board.text
        assert bytes(file["texts/bench"][()]).decode() == run.bench.text
        assert bytes(file["texts/dialect_scope"][()]).decode() == "# µ\n"


# --- damage ---


def flipped(content, position):
    """Return bytes with one bit changed."""
    byte, bit = divmod(position, 8)
    return content[:byte] + bytes([content[byte] ^ (1 << bit)]) + content[byte + 1 :]


def places(size):
    """Sixty bits: thirty anywhere, ten in the user block's text, ten in its padding, ten in the first kB of HDF5."""
    rng = random.Random(60)
    bounds = [(0, size)] * 30 + [(0, 88)] * 10 + [(88, 512)] * 10 + [(512, 1536)] * 10
    return [rng.randrange(8 * low, 8 * high) for low, high in bounds]


@pytest.mark.parametrize("number", range(60))
def test_one_flipped_bit_anywhere_is_noticed(written, number):
    content = written.read_bytes()
    written.write_bytes(flipped(content, places(len(content))[number]))
    for read in (digest_of, read_run, runfile.read_result):
        with pytest.raises(RunFileDamaged, match=str(written)):
            read(written)


def foreign(path, block=0):
    with h5py.File(path, "w", userblock_size=block) as file:
        file["points"] = [1.0]


def behind_a_good_user_block(image):
    digest = hashlib.sha256(image).hexdigest()
    return f"bandproof-run/1 sha256={digest}\n".encode().ljust(512, b"\0") + image


def foreign_in_our_block(path):
    with h5py.File(path, "w", userblock_size=512) as file:
        file["points"] = [1.0]
    path.write_bytes(behind_a_good_user_block(path.read_bytes()[512:]))


def inside(change):
    """Return what changes an open run file and gives it the digest of what it holds now."""

    def damage(path):
        with h5py.File(path, "r+") as file:
            change(file)
        path.write_bytes(behind_a_good_user_block(path.read_bytes()[512:]))

    return damage


def replaced(name, text):
    def change(file):
        del file[name]
        file[name] = np.frombuffer(text, dtype=np.uint8)

    return change


def other_length(length):
    def change(file):
        column = np.resize(file["points/low/samples"][()], length(len(file["points/low/samples"])))
        del file["points/low/samples"]
        file["points/low/samples"] = column

    return change


LACKING = {
    "a number as schema": lambda file: file.attrs.modify("schema", 7),
    "another version inside": lambda file: file.attrs.modify("schema", np.bytes_(b"bandproof-run/9")),
    "no schema": lambda file: file.attrs.pop("schema"),
    "a column shorter": other_length(lambda count: count - 1),
    "a column longer": other_length(lambda count: count + 1),
    "about nothing": replaced("about", b"[]"),
    "steps in a depth": replaced("steps", b"[" * 100_000),
}


@pytest.mark.parametrize("change", LACKING.values(), ids=LACKING)
def test_what_is_wrong_behind_a_right_digest_is_damage_and_no_traceback(written, change):
    inside(change)(written)
    with pytest.raises(RunFileDamaged, match="lacks what a run file has"):
        read_run(written)


@pytest.mark.parametrize("text", [b"[]", b"7", b"null", b"\xff"])
def test_a_result_that_is_no_object_is_damage_and_no_traceback(written, text):
    inside(replaced("result", text))(written)
    with pytest.raises(RunFileDamaged, match="lacks what a run file has"):
        runfile.read_result(written)


DAMAGED = {
    "missing": (lambda path: path.unlink(), "cannot be read: No such file"),
    "directory": (lambda path: (path.unlink(), path.mkdir()), "is a folder: name the run file in it, run.h5"),
    "device": (lambda path: (path.unlink(), path.symlink_to("/dev/zero")), "is not a file"),
    "empty": (lambda path: path.write_bytes(b""), "is empty"),
    "text": (lambda path: path.write_text("frequency_Hz,gain_dB\n" * 99), "is not a run file"),
    "other HDF5": (lambda path: (path.unlink(), foreign(path)), "is HDF5, but not a run file"),
    "other HDF5 with a user block": (lambda path: (path.unlink(), foreign(path, 2048)), "is HDF5, but not a run file"),
    "half": (lambda path: path.write_bytes(path.read_bytes()[: path.stat().st_size // 2]), "damaged: its end is"),
    "last byte lost": (lambda path: path.write_bytes(path.read_bytes()[:-1]), "damaged: its end is missing"),
    "five bytes": (lambda path: path.write_bytes(path.read_bytes()[:5]), "damaged: its end is missing, there are 5 by"),
    "one byte more": (lambda path: path.write_bytes(path.read_bytes() + b"\0"), "damaged: its content"),
    "user block only": (lambda path: path.write_bytes(path.read_bytes()[:512]), "damaged: its end is missing"),
    "later schema": (lambda path: path.write_bytes(b"bandproof-run/9" + path.read_bytes()[15:]), "version 9, newer"),
    "earlier schema": (lambda path: path.write_bytes(b"bandproof-run/0" + path.read_bytes()[15:]), "version 0, older"),
    "no HDF5 inside": (lambda path: path.write_bytes(behind_a_good_user_block(b"x" * 999)), "is not HDF5"),
    "nothing inside": (lambda path: path.write_bytes(behind_a_good_user_block(b"")), "is not HDF5"),
    "other HDF5 inside": (lambda path: (path.unlink(), foreign_in_our_block(path)), "lacks what a run file has"),
}


@pytest.mark.parametrize(("damage", "reason"), DAMAGED.values(), ids=DAMAGED)
def test_what_is_no_sound_run_file_is_refused_with_the_reason(written, damage, reason):
    damage(written)
    with pytest.raises(RunFileDamaged, match=reason) as caught:
        read_run(written)
    assert str(caught.value).startswith(str(written))


def test_a_write_that_fails_leaves_an_older_run_file_alone(run, written, monkeypatch):
    before = written.read_bytes()

    def full(handle):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(runfile.os, "fsync", full)
    with pytest.raises(OSError, match="No space"):
        write_run(written, replace(run, note="later"), RESULT)
    assert written.read_bytes() == before
