"""The house keeps its rules: imports point one way, files stay small, `__all__` everywhere."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

from fathomline.cli import COMMANDS

SOURCE = Path(__file__).parent.parent / "src" / "fathomline"
FILES = sorted(SOURCE.rglob("*.py"))

# From the top of the house downwards: a room imports only from those before it
ROOMS = [
    "constants",
    "errors",
    "atomic",
    "spectra",
    "profile",
    "model",
    "fit",
    "budget",
    "sample",
    "job",
    "report",
    "cli",
]


def room_of(path: Path) -> str:
    return path.relative_to(SOURCE).parts[0].removesuffix(".py")


def imported_rooms(path: Path) -> set[str]:
    found = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        names = []
        if isinstance(node, ast.ImportFrom) and node.module:
            names = [node.module]
            if node.module == "fathomline":
                names = [f"fathomline.{alias.name}" for alias in node.names]
        elif isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        for name in names:
            parts = name.split(".")
            if parts[0] == "fathomline" and len(parts) > 1 and parts[1] in ROOMS:
                found.add(parts[1])
    return found


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(SOURCE)))
def test_imports_point_upwards_only(path):
    room = room_of(path)
    if room in ("__init__", "__main__"):
        return
    below = [other for other in imported_rooms(path) if ROOMS.index(other) > ROOMS.index(room)]
    assert not below, f"{room} imports from {below}"


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(SOURCE)))
def test_files_are_small_and_name_what_is_public(path):
    text = path.read_text(encoding="utf-8")
    assert len(text.splitlines()) <= 800
    if path.name != "__main__.py":
        assert "__all__" in text


def test_no_path_of_a_machine_in_the_repository():
    root = SOURCE.parent.parent
    tracked = subprocess.run(["git", "ls-files"], cwd=root, capture_output=True, text=True)
    if tracked.returncode != 0:
        pytest.skip("not a git checkout")
    for name in tracked.stdout.splitlines():
        path = root / name
        if path.suffix in (".py", ".md", ".toml", ".cff", ".j2", ".ecsv", "") and path.is_file():
            text = path.read_text(encoding="utf-8")
            for word in ("/" + "work/", "/" + "root/", "/" + "home/"):
                assert word not in text, name


def test_help_imports_nothing_heavy():
    code = (
        "import sys\n"
        "from fathomline.cli import main\n"
        "try:\n"
        "    main({arguments})\n"
        "except SystemExit as end:\n"
        "    assert end.code == 0\n"
        "print(sorted({heavy} & set(sys.modules)), file=sys.stderr)\n"
    )
    heavy = {"numpy", "scipy", "astropy", "lmfit", "matplotlib", "rich", "pydantic", "jinja2"}

    def imported(arguments: list[str], heavy: set[str]) -> tuple[str, str]:
        done = subprocess.run(
            [sys.executable, "-c", code.format(arguments=arguments, heavy=heavy)],
            capture_output=True,
            text=True,
            check=True,
        )
        return done.stdout, done.stderr.strip()

    overall, found = imported(["--help"], {*heavy, "click"})
    assert found == "[]"
    for command in COMMANDS:
        assert command in overall
        assert imported([command, "--help"], heavy)[1] == "[]"
