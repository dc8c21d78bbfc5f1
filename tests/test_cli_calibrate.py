"""``fathomline calibrate`` as a user meets it."""

from __future__ import annotations

import json
import tomllib

import numpy as np
import pytest
from astropy.table import Table

from calibration_support import PIVOT, log_edges, noisy, recorded
from fathomline.cli.main import run
from fathomline.job.instrument_tables import Distortion
from fathomline.report.calibration import CALIBRATION_FILES
from fathomline.spectra import read_distortion_table, write_spectrum


@pytest.fixture(scope="module")
def spectra(tmp_path_factory):
    folder = tmp_path_factory.mktemp("calibrate")
    rng, edges = np.random.default_rng(8), log_edges()
    for name, clean in (("one", recorded(edges, 250.0, 300.0)), ("two", recorded(edges))):
        write_spectrum(noisy(edges, clean, 120, rng, name=name), folder / f"{name}.fits")
    return str(folder / "one.fits"), str(folder / "two.fits")


@pytest.fixture
def shifts(tmp_path):
    rng = np.random.default_rng(3)
    wave = np.linspace(5000.0, 6000.0, 50)
    error = rng.uniform(20.0, 40.0, 50)
    velocity = 120.0 + 0.18 * (wave - 5500.0) + error * rng.standard_normal(50)
    path = tmp_path / "shifts.csv"
    rows = np.column_stack([wave, velocity, error])
    np.savetxt(path, rows, delimiter=",", header="wavelength,velocity,error", comments="")
    return path


def test_two_spectra(spectra, tmp_path, capsys):
    out = tmp_path / "cal"
    options = ["--pivot", str(PIVOT), "--telluric", "-o", str(out)]
    options += ["--range", "5000", "5500", "--range", "5500", "6060"]
    assert run(["calibrate", *spectra, *options]) == 0
    text = capsys.readouterr().out
    for word in ("'one' relative to two.fits", "shift", "slope", "sigma", "scatter", "χ²/ν"):
        assert word in text, word
    assert sorted(path.name for path in out.iterdir()) == sorted(CALIBRATION_FILES)
    blocks = tomllib.loads((out / "distortion.toml").read_text(encoding="utf-8"))["distortion"]
    assert [b["kind"] for b in blocks] == ["shift", "slope"]
    assert {b["spectrum"] for b in blocks} == {"one"}
    assert blocks[0]["shared"] == "one-shift"
    assert blocks[1]["pivot"] == PIVOT
    # 3.5 σ would be chance 1 in 2000
    for block, truth in zip(blocks, (250.0, 300.0), strict=True):
        assert abs(block["value"] - truth) < 3.5 * block["sigma"]
    table = Table.read(out / "shifts.ecsv")
    assert len(table) == 7
    for column in table.columns.values():
        assert column.description, column.name
    assert table["velocity"].unit == "m / s"
    assert table.meta["spectrum"] == "one"


def test_own_table_can_be_read_again(spectra, tmp_path, capsys):
    out = tmp_path / "cal"
    assert run(["calibrate", *spectra, "--telluric", "-o", str(out), "--json"]) == 0
    first = json.loads(capsys.readouterr().out)
    path = str(out / "shifts.ecsv")
    assert run(["calibrate", path, "--spectrum", "one", "--json"]) == 0
    second = json.loads(capsys.readouterr().out)
    assert first["terms"] == second["terms"]
    assert first["covariance"] == second["covariance"]
    wave, _, error = read_distortion_table(path)
    assert wave.size == 7
    assert error.size == 7


def test_table(shifts, tmp_path, capsys):
    out = tmp_path / "cal"
    command = ["calibrate", str(shifts), "--spectrum", "red", "--pivot", "5500", "-o", str(out)]
    more = [
        "--terms",
        "shift,slope,sawtooth",
        "--order-spacing",
        "70",
        "--shared",
        "arm",
        "--robust",
    ]
    assert run([*command, *more]) == 0
    capsys.readouterr()
    text = (out / "distortion.toml").read_text(encoding="utf-8")
    blocks = tomllib.loads(text)["distortion"]
    assert [b["shared"] for b in blocks] == ["arm-shift", "arm-slope", "arm-sawtooth"]
    assert blocks[2]["order_spacing"] == 70.0
    assert blocks[2]["pivot"] == 5500.0
    assert "relative to the reference of the table" in text
    slope = np.polyfit(*np.loadtxt(shifts, delimiter=",", skiprows=1)[:, :2].T, 1)[0]
    assert blocks[1]["value"] == pytest.approx(1e3 * slope, abs=2.0 * blocks[1]["sigma"])


def test_files_of_an_earlier_run_are_replaced_and_others_kept(shifts, tmp_path, capsys):
    out = tmp_path / "cal"
    command = ["calibrate", str(shifts), "--spectrum", "red", "-o", str(out)]
    assert run(command) == 0
    (out / "notes.txt").write_text("mine")
    assert run([*command, "--terms", "shift"]) == 0
    assert (out / "notes.txt").read_text() == "mine"
    assert (out / "distortion.toml").read_text(encoding="utf-8").count("[[distortion]]") == 1
    assert not list(out.glob(".*"))
    capsys.readouterr()


@pytest.mark.parametrize("name", CALIBRATION_FILES)
def test_files_of_other_origin_are_left_alone(shifts, tmp_path, capsys, name):
    out = tmp_path / "other"
    out.mkdir()
    (out / name).write_text("precious")
    assert run(["calibrate", str(shifts), "--spectrum", "red", "-o", str(out)]) == 2
    assert name in capsys.readouterr().err
    assert (out / name).read_text() == "precious"
    assert len(list(out.iterdir())) == 1


def test_figure_is_the_same_on_every_run(shifts, tmp_path, capsys):
    for name in ("a", "b"):
        assert run(["calibrate", str(shifts), "--spectrum", "r", "-o", str(tmp_path / name)]) == 0
    capsys.readouterr()
    for name in CALIBRATION_FILES:
        assert (tmp_path / "a" / name).read_bytes() == (tmp_path / "b" / name).read_bytes(), name
    assert (tmp_path / "a" / "calibration.pdf").read_bytes().startswith(b"%PDF")


def test_blocks_fit_into_a_job(shifts, tmp_path, capsys):
    odd = 'a "b"\\ $x_1 é\n[x]'
    out = tmp_path / "cal"
    more = ["--terms", "shift,slope,sawtooth", "--order-spacing", "70", "--shared", odd]
    assert run(["calibrate", str(shifts), "--spectrum", "red", *more, "-o", str(out)]) == 0
    capsys.readouterr()
    blocks = tomllib.loads((out / "distortion.toml").read_text(encoding="utf-8"))["distortion"]
    assert [block["shared"] for block in blocks] == [
        f"{odd}-{kind}" for kind in ("shift", "slope", "sawtooth")
    ]
    for block in blocks:
        found = Distortion.model_validate(block | {"shared": "tag"})
        assert found.spectra == ("red",)
        assert found.value == block["value"]


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["{shifts}"], "--spectrum ID is needed"),
        (["{shifts}", "--spectrum", "a b"], "the job's id of the spectrum"),
        (["{shifts}", "--spectrum", "r", "--chunk", "60"], "need two spectra"),
        (["{shifts}", "--spectrum", "r", "--terms", "curve"], "unknown term 'curve'"),
        (["{shifts}", "--spectrum", "r", "--terms", ","], "at least one term"),
        (["{shifts}", "--spectrum", "r", "--terms", "sawtooth"], "--order-spacing"),
        (["{shifts}", "--spectrum", "r", "--pivot", "-5"], "pivot must be a positive"),
        (["{shifts}", "--spectrum", "r", "-o", "{shifts}"], "is a file"),
        (["{shifts}", "--spectrum", "r", "-o", "{tmp}/no/where"], "no such folder"),
        (["absent.csv", "--spectrum", "r"], "no such file"),
        (["{one}", "absent.fits"], "no such file"),
        (["{one}", "{two}", "--range", "6000", "5000"], "the range is empty"),
        (["{one}", "{two}", "--range", "7000", "8000"], "no measured chunk"),
        (["{one}", "{two}", "--min-significance", "500"], "no absorption feature"),
        (["{bare}", "--spectrum", "r"], "no column 'error'"),
    ],
)
def test_mistakes_are_told_in_one_message(shifts, spectra, tmp_path, capsys, arguments, message):
    bare = tmp_path / "bare.csv"
    bare.write_text("wavelength,velocity\n5000,1\n6000,2\n")
    places = {"shifts": shifts, "one": spectra[0], "two": spectra[1], "bare": bare, "tmp": tmp_path}
    assert run(["calibrate", *(a.format(**places) for a in arguments)]) == 2
    captured = capsys.readouterr()
    assert message in captured.err
    assert "Traceback" not in captured.err
    assert captured.out == ""
