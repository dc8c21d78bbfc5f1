"""The commands as a user meets them: output, files, exit codes, and messages for bad input."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from fathomline.cli import COMMANDS
from fathomline.cli.main import run
from fathomline.job.demo import DEMO_DALPHA, write_demo
from fathomline.report.folder import RESULT_FILES


@pytest.fixture(scope="module")
def demo(tmp_path_factory):
    folder = tmp_path_factory.mktemp("demo") / "halden-a"
    assert run(["demo", str(folder)]) == 0
    return folder


def test_demo_prints_a_row_and_the_place_of_the_report(tmp_path, capsys):
    assert run(["demo", str(tmp_path / "d")]) == 0
    out = capsys.readouterr().out
    for word in ("Δα/α", "stat", "χ²/ν", "Halden A", "report.html", "stat-only"):
        assert word in out, word
    assert "\x1b" not in out  # plain in a pipe


def test_demo_recovers_what_was_simulated(demo):
    row = Table.read(demo / "halden-a.result" / "measurement.ecsv")[0]
    # simulated by the independent route with +4 ppm; 3.5 σ would be chance 1 in 2000
    assert abs(row["dalpha_ppm"] - DEMO_DALPHA) < 3.5 * row["stat_ppm"]
    assert 0.85 < row["chi2_nu"] < 1.15  # three times the scatter of 774 degrees of freedom
    assert row["converged"]


def test_result_folder_is_complete(demo):
    folder = demo / "halden-a.result"
    for name in RESULT_FILES:
        assert (folder / name).stat().st_size > 0, name
    suffixes = {path.suffix for path in (folder / "figures").iterdir()}
    assert suffixes == {".pdf", ".png"}
    assert not list(demo.glob(".*")), "no left-overs"


def test_tables_have_units_and_descriptions_and_no_nan(demo):
    for name in ("measurement", "budget", "components", "transitions", "covariance"):
        table = Table.read(demo / "halden-a.result" / f"{name}.ecsv")
        for column in table.columns.values():
            assert column.description, (name, column.name)
            if column.dtype.kind == "f":
                values = np.ma.asarray(column).compressed()
                assert np.all(np.isfinite(values)), (name, column.name)
    row = Table.read(demo / "halden-a.result" / "measurement.ecsv")
    # the columns of the design, in its order
    assert " ".join(row.colnames) == (
        "absorber ra dec z_abs n_transitions n_components n_free dalpha_ppm stat_ppm sys_ppm "
        "total_ppm chi2 ndof chi2_nu aicc converged blinded flags fathomline_version job_digest"
    )
    assert row["sys_ppm"].mask.all()


def test_transitions_share_the_information(demo):
    table = Table.read(demo / "halden-a.result" / "transitions.ecsv")
    assert table["information"].sum() == pytest.approx(1.0, abs=1e-9)
    row = Table.read(demo / "halden-a.result" / "measurement.ecsv")[0]
    assert table["chi2"].sum() == pytest.approx(row["chi2"], rel=1e-9)


def test_covariance_table_agrees_with_the_row(demo):
    table = Table.read(demo / "halden-a.result" / "covariance.ecsv")
    row = Table.read(demo / "halden-a.result" / "measurement.ecsv")[0]
    assert table["parameter"][0] == "alpha.dalpha"
    assert np.sqrt(table["alpha.dalpha"][0]) == pytest.approx(row["stat_ppm"], rel=1e-9)
    assert len(table) == row["n_free"]


def test_model_file_holds_every_region(demo):
    with fits.open(demo / "halden-a.result" / "model.fits") as hdus:
        assert len(hdus) == 8
        data = hdus[1].data
        fitted = data["FITTED"]
        residual = (data["DATA"] - data["MODEL"]) / data["ERROR"]
        np.testing.assert_allclose(data["RESIDUAL"][fitted], residual[fitted], rtol=1e-12)
        assert data["COMPONENTS"].shape[1] == 4


def test_run_json_records_the_provenance(demo):
    record = json.loads((demo / "halden-a.result" / "run.json").read_text(encoding="utf-8"))
    assert record["versions"]["numpy"] == np.__version__
    assert len(record["inputs"][0]["file_digest"]) == 64
    assert len(record["fit"]["restarts"]) == 4
    assert all(restart["outcome"] == "returned" for restart in record["fit"]["restarts"])
    assert set(record["atomic_data"]["tables"]) >= {"transitions.ecsv", "structure.ecsv"}


def test_json_row(demo, capsys):
    assert run(["measure", str(demo / "halden-a.toml"), "--json"]) == 0
    row = json.loads(capsys.readouterr().out)
    assert row["converged"] is True
    assert row["flags"] == ["stat-only"]


def test_lmfit_gives_the_same_answer(demo, tmp_path):
    """The second solver: the same Δα/α to 0.01 σ, the same error to 1 %."""
    text = (demo / "halden-a.toml").read_text(encoding="utf-8")
    job = tmp_path / "second.toml"
    job.write_text(
        text.replace('file = "halden-a.fits"', f'file = "{(demo / "halden-a.fits").as_posix()}"')
        + '\n[fit]\nsolver = "lmfit"\n',
        encoding="utf-8",
    )
    assert run(["measure", str(job)]) == 0
    first = Table.read(demo / "halden-a.result" / "measurement.ecsv")[0]
    second = Table.read(tmp_path / "second.result" / "measurement.ecsv")[0]
    difference = (first["dalpha_ppm"] - second["dalpha_ppm"]) / first["stat_ppm"]
    print(f"lmfit − default: {difference:+.1e} σ")
    assert abs(difference) < 0.01
    assert second["stat_ppm"] == pytest.approx(first["stat_ppm"], rel=0.01)


def test_simulate_then_measure(demo, tmp_path, capsys):
    target = tmp_path / "synthetic"
    arguments = [
        "simulate",
        str(demo / "halden-a.toml"),
        "-o",
        str(target),
        "--dalpha",
        "-12",
        "--snr",
        "400",
        "--seed",
        "5",
    ]
    assert run(arguments) == 0
    assert run(["measure", str(target / "halden-a.toml")]) == 0
    row = Table.read(target / "halden-a.result" / "measurement.ecsv")[0]
    assert abs(row["dalpha_ppm"] + 12.0) < 3.5 * row["stat_ppm"]
    before = (target / "red.fits").read_bytes()
    capsys.readouterr()
    assert run(arguments) == 2  # never overwrites
    assert "already there" in capsys.readouterr().err
    assert (target / "red.fits").read_bytes() == before


def test_lines_lists_what_falls_on_a_spectrum(demo, capsys):
    assert (
        run(["lines", "--redshift", "1.15085", "--spectrum", str(demo / "halden-a.fits"), "--json"])
        == 0
    )
    rows = {row["transition"]: row for row in json.loads(capsys.readouterr().out)}
    assert rows["Fe II 2382"]["observed_angstrom"] == pytest.approx(2382.763995 * 2.15085, abs=1e-2)
    assert rows["Fe II 2382"]["snr"] == pytest.approx(100.0, rel=0.01)
    assert "Al II 1670" not in rows


def test_inspect_says_what_was_read(demo, capsys):
    assert run(["inspect", str(demo / "halden-a.fits")]) == 0
    out = capsys.readouterr().out
    assert "vacuum" in out
    assert "2.000 km/s" in out


@pytest.mark.parametrize("command", list(COMMANDS))
def test_every_command_has_help_with_an_example(command, capsys):
    assert run([command, "--help"]) == 0
    assert "Example" in capsys.readouterr().out


# -- bad input: one clear message, exit code 2, nothing overwritten --------------------------------

BAD_JOBS = {
    "unknown key": (
        "window = [-120.0, 110.0]       # km/s",
        "windows = [-120.0, 110.0]  #",
        r":18: .*unknown key 'windows'.*'window'",
    ),
    "wrong type": ("redshift = 1.15085 ", 'redshift = "high" ', r":7: .*expected a number"),
    "unknown transition": (
        "Fe II 2374",
        "Fe II 2375",
        r":21: .*no transition 'Fe II 2375'.*Fe II 2374",
    ),
    "transition without q": ("Fe II 2374", "Fe II 2389", r":21: .*no sensitivity coefficient"),
    "transition not covered": (
        'transition = "Fe II 2374"',
        'transition = "Fe II 1608"',
        r":21: .*Fe II 1608 at 3459.\d+ Å is not covered.*'red' covers",
    ),
    "component outside": (
        "velocity = 4.0",
        "velocity = 400.0",
        r":\d+: .*velocity 400 km/s lies outside every window",
    ),
    "missing file": ("halden-a.fits", "halden-b.fits", r":13: .*halden-b.fits"),
    "negative b": ("b = 4.0\n", "b = -4.0\n", r":\d+: .*'b'.*above 0"),
    "unit that is none": ('id = "red"', 'id = "red"\nunit = "furlong"', r"furlong"),
    "unit that contradicts": (
        'id = "red"',
        'id = "red"\nunit = "nm"',
        r"nm.*Angstrom|Angstrom.*nm",
    ),
    "error column not there": (
        'id = "red"',
        'id = "red"\ncolumns = { error = "SIGMA" }',
        r"SIGMA.*WAVE|WAVE.*SIGMA",
    ),
    "ion that nothing constrains": (
        '"Mg II" = 12.7 }',
        '"Mg II" = 12.7, "Zn II" = 12.0 }',
        r":\d+: .*logN of Zn II is not constrained",
    ),
    "all excluded": (
        'transition = "Fe II 2374"',
        'transition = "Fe II 2374"\nexclude = [[-120.0, 110.0]]',
        r":21: .*has no good pixel",
    ),
    "two regions share pixels": (
        'transition = "Fe II 2374"',
        'transition = "Fe II 2344"',
        r"region.* 2 and 1 share 1\d\d pixels",
    ),
    "circle of ties": ("b = 4.0\n", 'b = { same_as = "component[2].b" }\n', r":\d+: .*circle"),
    "topocentric without velocity": ('id = "red"', 'id = "red"\nframe = "topocentric"', r"berv"),
}


@pytest.mark.parametrize("name", BAD_JOBS)
def test_bad_job(name, tmp_path, capsys):
    old, new, pattern = BAD_JOBS[name]
    job = write_demo(tmp_path / "d")
    text = job.read_text(encoding="utf-8")
    assert old in text, "the demo job has changed"
    job.write_text(text.replace(old, new, 1), encoding="utf-8")
    result = job.with_suffix(".result")
    result.mkdir()
    (result / "run.json").write_text("{}")
    (result / "measurement.ecsv").write_text("kept")
    check_refused(["measure", str(job)], pattern, capsys)
    assert (result / "measurement.ecsv").read_text() == "kept"


def check_refused(arguments: list[str], pattern: str, capsys) -> None:
    import re

    assert run(arguments) == 2
    captured = capsys.readouterr()
    assert "Traceback" not in captured.err
    assert re.search(pattern, captured.err), captured.err
    assert len(captured.err.strip().splitlines()) <= 4  # one message, click adds its usage lines


def test_several_faults_are_told_at_once(tmp_path, capsys):
    job = write_demo(tmp_path / "d")
    text = job.read_text(encoding="utf-8")
    text = text.replace("Fe II 2374", "Fe II 2375").replace("velocity = 4.0", "velocity = 400.0")
    job.write_text(text, encoding="utf-8")
    assert run(["measure", str(job)]) == 2
    errors = capsys.readouterr().err.strip().splitlines()
    assert len(errors) == 2
    assert all(line.startswith("error: ") for line in errors)


@pytest.mark.parametrize(
    ("arguments", "pattern"),
    [
        (["measure", "nowhere.toml"], r"nowhere.toml"),
        (["measure"], r"JOB"),
        (["mesure", "x.toml"], r"No such command 'mesure'|mesure"),
        (["inspect", "nowhere.fits"], r"nowhere.fits"),
        (["inspect", "."], r"\."),
        (["inspect", "x.fits", "--column", "colour=RED"], r"ROLE=NAME"),
        (["lines", "--ion", "Fe 2"], r"no ion 'Fe 2'.*Fe II"),
        (["lines", "--redshift", "-2"], r"-2"),
        (["simulate", "nowhere.toml", "-o", "x"], r"nowhere.toml"),
    ],
)
def test_bad_command_line(arguments, pattern, capsys, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    check_refused(arguments, pattern, capsys)


def test_a_folder_that_is_no_result_is_left_alone(demo, tmp_path, capsys):
    target = tmp_path / "thesis"
    target.mkdir()
    (target / "chapter1.tex").write_text("years of work")
    check_refused(
        ["measure", str(demo / "halden-a.toml"), "-o", str(target)], r"not a result folder", capsys
    )
    assert (target / "chapter1.tex").read_text() == "years of work"


def test_a_changed_demo_job_is_left_alone(tmp_path, capsys):
    job = write_demo(tmp_path / "d")
    job.write_text(job.read_text(encoding="utf-8") + "# mine\n", encoding="utf-8")
    check_refused(["demo", str(tmp_path / "d")], r"has been changed", capsys)


def test_a_failing_write_keeps_the_earlier_result(demo, tmp_path, monkeypatch, capsys):
    target = tmp_path / "kept.result"
    job = str(demo / "halden-a.toml")
    assert run(["measure", job, "-o", str(target)]) == 0
    before = {p.name: p.read_bytes() for p in target.iterdir() if p.is_file()}
    capsys.readouterr()

    def full(*args, **kwargs):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("fathomline.report.folder.save_figures", full)
    check_refused(["measure", job, "-o", str(target)], r"No space left.*unchanged", capsys)
    assert {p.name: p.read_bytes() for p in target.iterdir() if p.is_file()} == before
    assert [p.name for p in tmp_path.iterdir()] == ["kept.result"]


def test_a_result_that_is_not_trustworthy_exits_with_3(demo, tmp_path, capsys):
    text = (demo / "halden-a.toml").read_text(encoding="utf-8")
    second = text.index("[[component]]", text.index("[[component]]") + 1)
    # one component for four: cannot fit
    job = tmp_path / "poor.toml"
    job.write_text(
        text[:second].replace('"halden-a.fits"', f'"{(demo / "halden-a.fits").as_posix()}"'),
        encoding="utf-8",
    )
    assert run(["measure", str(job)]) == 3
    row = Table.read(Path(job).with_suffix(".result") / "measurement.ecsv")[0]
    assert "poor-fit" in row["flags"]
