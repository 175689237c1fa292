"""A stored run as data and pictures: what CSV and JSON say is what plain h5py reads, to the last digit.

README's own lines are the independent reader of the run file, the standard library's csv and json those of the exports.
"""

import csv
import json
import re
from pathlib import Path

import h5py
import numpy as np
import pytest

from bandproof.bench.documents.stage_picture import draw_stage
from bandproof.bench.evaluate import views
from bandproof.bench.picture import draw, image
from bandproof.bench.run_schema import COLUMNS
from bandproof.bench.verbs import console

README = Path(__file__).parents[2] / "README.md"


@pytest.fixture(scope="module")
def path(outcome):
    return outcome.folder / "run.h5"


@pytest.fixture(scope="module")
def data(path, tmp_path_factory):
    folder = tmp_path_factory.mktemp("exports") / "made" / "data"
    assert console.run(["report", str(path), "--data", str(folder)]) == 0
    return folder


def rows(path):
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def same(written, values):
    """Whether numbers as text are the same doubles; what is not a number is the same as itself."""
    return np.array_equal(np.array(list(map(float, written))), np.array(values, dtype=float), equal_nan=True)


def test_the_h5py_lines_of_readme_the_csv_and_the_json_agree_to_the_last_digit(path, data, monkeypatch, capsys):
    (lines,) = re.findall(r"^```python\n(.*?import h5py.*?)^```$", README.read_text(encoding="utf-8"), re.M | re.S)
    monkeypatch.chdir(path.parent)
    found = {}
    exec(compile(lines, "README.md", "exec"), found)
    curve = [row for row in rows(data / "points_low.csv") if row["purpose"] == "curve"]
    assert len(curve) > 5
    assert same([row["frequency_Hz"] for row in curve], found["frequency"])
    assert same([row["response_real_V/V"] for row in curve], found["h"].real)
    assert same([row["response_imag_V/V"] for row in curve], found["h"].imag)
    result = json.loads(capsys.readouterr().out.splitlines()[-1])
    assert json.loads((data / "result.json").read_text(encoding="utf-8")) == result
    told = {(row["stage"], row["figure"]): row for row in rows(data / "figures.csv")}
    assert len(told) == sum(len(stage["parameters"]) for stage in result["stages"]) > 0
    for stage in result["stages"]:
        for name, figure in stage["parameters"].items():
            numbers = {key: value for key, value in figure.items() if isinstance(value, float)}
            assert len(numbers) == 10
            assert same([told[stage["name"], name][key] for key in numbers], list(numbers.values()))


def test_every_column_of_every_stage_is_written_with_its_unit(path, data):
    with h5py.File(path) as run:
        assert {f"points_{stage}.csv" for stage in run["points"]} == {one.name for one in data.glob("points_*")}
        assert "thru" in run["points"]
        for stage, group in run["points"].items():
            written = rows(data / f"points_{stage}.csv")
            assert set(COLUMNS) == set(group)
            for name, header in zip(COLUMNS, written[0], strict=True):
                unit = group[name].attrs["units"].decode()
                assert header == (name if unit in ("", "1") else f"{name}_{unit}")
                values = group[name][()].tolist()
                if isinstance(values[0], bytes):
                    assert [row[header] for row in written] == [value.decode() for value in values]
                else:
                    assert same([row[header] for row in written], values)


def test_a_figure_says_all_that_the_result_says_of_it(data):
    result = json.loads((data / "result.json").read_text(encoding="utf-8"))
    for row in rows(data / "figures.csv"):
        stage = next(stage for stage in result["stages"] if stage["name"] == row["stage"])
        figure, fit = stage["parameters"][row["figure"]], stage["fit"]
        assert {"stage", "model", "figure", *figure, *fit} == set(row)
        assert row["model"] == stage["model"]
        for key, value in {**figure, **fit}.items():
            assert row[key] == ("" if value is None else str(value)), key


def test_same_run_same_bytes_over_what_was_written_before(path, data):
    before = {one.name: one.read_bytes() for one in data.iterdir()}
    assert console.run(["report", str(path), "--data", str(data)]) == 0
    assert {one.name: one.read_bytes() for one in data.iterdir()} == before


@pytest.mark.parametrize("name", ["figures.csv", "points_low.csv", "result.json", "stage_low.svg"])
def test_a_file_that_no_export_wrote_is_kept_and_nothing_else_is_written(path, tmp_path, capsys, name):
    (tmp_path / name).write_text("stage,mine\n")
    option = "--pictures" if name.startswith("stage") else "--data"
    assert console.run(["report", str(path), option, str(tmp_path)]) == 2
    said = capsys.readouterr().err
    assert str(tmp_path / name) in said
    assert "no export wrote it" in said
    assert [one.name for one in tmp_path.iterdir()] == [name]
    assert (tmp_path / name).read_text() == "stage,mine\n"


@pytest.mark.parametrize("option", ["--data", "--pictures"])
def test_a_folder_that_cannot_be_is_told_in_one_sentence(path, tmp_path, capsys, option):
    (tmp_path / "file").write_text("")
    assert console.run(["report", str(path), option, str(tmp_path / "file" / "inside")]) == 2
    said = capsys.readouterr().err
    assert len(said.splitlines()) == 1
    assert str(tmp_path / "file") in said
    assert "cannot be written: Not a directory" in said


@pytest.mark.parametrize("option", ["--data", "--pictures"])
def test_a_damaged_run_leaves_no_folder(path, tmp_path, capsys, option):
    content = bytearray(path.read_bytes())
    content[-1] ^= 1
    (tmp_path / "run.h5").write_bytes(content)
    assert console.run(["report", str(tmp_path / "run.h5"), option, str(tmp_path / "out")]) == 2
    assert "damaged" in capsys.readouterr().err
    assert [one.name for one in tmp_path.iterdir()] == ["run.h5"]


@pytest.mark.parametrize(("kind", "begin"), [("svg", b"<?xml"), ("png", b"\x89PNG\r\n")])
def test_a_picture_of_every_stage_the_same_again_and_no_pdf(path, outcome, tmp_path, kind, begin):
    (tmp_path / "run.h5").write_bytes(path.read_bytes())
    command = ["report", str(tmp_path / "run.h5"), "--pictures", str(tmp_path / "out"), "--format", kind]
    assert console.run(command) == 0
    first = {one.name: one.read_bytes() for one in (tmp_path / "out").iterdir()}
    assert set(first) == {f"stage_{stage.name}.{kind}" for stage in outcome.stages}
    assert all(content.startswith(begin) for content in first.values())
    assert console.run(command) == 0
    assert {one.name: one.read_bytes() for one in (tmp_path / "out").iterdir()} == first
    assert {one.name for one in tmp_path.iterdir()} == {"run.h5", "out"}


def test_data_of_another_run_is_not_mixed_with_this_one_s(path, tmp_path, capsys):
    folder = tmp_path / "data"
    assert console.run(["report", str(path), "--data", str(folder)]) == 0
    other = folder / "points_other.csv"
    other.write_bytes((folder / "points_low.csv").read_bytes())
    before = {file.name: file.read_bytes() for file in folder.iterdir()}
    assert console.run(["report", str(path), "--pictures", str(tmp_path / "p"), "--data", str(folder)]) == 2
    assert "points_other.csv: is of another run" in capsys.readouterr().err
    assert {file.name: file.read_bytes() for file in folder.iterdir()} == before
    assert not (tmp_path / "p" / "stage_low.svg").exists()


@pytest.mark.parametrize("name", ["run.h5", "folder", "no/such.pdf"])
def test_a_report_is_never_written_over_what_is_no_pdf(path, tmp_path, capsys, name):
    (tmp_path / "folder").mkdir()
    copy = tmp_path / "run.h5"
    copy.write_bytes(path.read_bytes())
    assert console.run(["report", str(copy), "--out", str(tmp_path / name)]) == 2
    assert f"{tmp_path / name}: " in capsys.readouterr().err
    assert copy.read_bytes() == path.read_bytes()


def test_a_title_is_never_read_as_markup_in_a_picture(outcome):
    title = r"Bad $\foo{1}$ math, a \u65e5 too"
    assert image(draw(views(outcome.run, outcome.stages), title), "svg")
    assert image(draw_stage(views(outcome.run, outcome.stages)[0], title), "png")
