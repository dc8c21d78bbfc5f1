"""The wheel carries the transition tables and the demo: built, installed fresh, and run."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import sysconfig
import venv
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent


@pytest.fixture(scope="module")
def wheel(tmp_path_factory):
    folder = tmp_path_factory.mktemp("wheel")
    subprocess.run(
        [
            sys.executable,
            "-m",
            "pip",
            "wheel",
            "--quiet",
            "--no-deps",
            "--no-build-isolation",
            "--no-index",
            "--disable-pip-version-check",
            "--wheel-dir",
            str(folder),
            str(ROOT),
        ],
        check=True,
    )
    return next(folder.glob("fathomline-*.whl"))


def test_the_wheel_has_the_tables(wheel):
    names = set(zipfile.ZipFile(wheel).namelist())
    for table in ("transitions", "structure", "isotopes", "extra_lines", "telluric"):
        assert f"fathomline/atomic/data/{table}.ecsv" in names
    assert "fathomline/job/demo.toml" in names
    assert "fathomline/py.typed" in names


def test_it_runs_from_a_fresh_environment(wheel, tmp_path):
    """Installed in a new virtual environment; the dependencies are those of this one."""
    home = tmp_path / "env"
    venv.create(home, with_pip=True)
    python = home / ("Scripts" if os.name == "nt" else "bin") / "python"
    subprocess.run(
        [
            str(python),
            "-m",
            "pip",
            "install",
            "--quiet",
            "--no-deps",
            "--no-index",
            "--disable-pip-version-check",
            str(wheel),
        ],
        check=True,
    )
    site = next((home / "lib").glob("python*")) / "site-packages"
    (site / "dependencies.pth").write_text(sysconfig.get_paths()["purelib"] + "\n")
    environment = {k: v for k, v in os.environ.items() if k != "PYTHONPATH"}
    code = (
        "import fathomline, json\n"
        "from fathomline.atomic import load_atomic_data\n"
        "a = load_atomic_data()\n"
        "print(json.dumps([fathomline.__file__, len(a.transitions), len(a.extra_lines)]))\n"
    )
    done = subprocess.run(
        [str(python), "-c", code],
        cwd=tmp_path,
        env=environment,
        capture_output=True,
        text=True,
        check=True,
    )
    where, transitions, extra = json.loads(done.stdout)
    assert Path(where).is_relative_to(home)
    assert (transitions, extra) == (54, 143)  # README of the reference tables
    command = python.with_name("fathomline")
    done = subprocess.run(
        [str(command), "demo", "halden-a"],
        cwd=tmp_path,
        env=environment,
        capture_output=True,
        text=True,
        check=True,
    )
    assert "report: halden-a/halden-a.result/report.html" in done.stdout
