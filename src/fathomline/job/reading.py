"""Read a job file, or say everything that is wrong with it.

A fault is one line, ``file:line: table 'key': what was expected and found``. Entries of arrays of
tables are counted from 1, in the order of the file.
"""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from fathomline.errors import JobError
from fathomline.job.paths import absolute_path
from fathomline.job.schema import (
    MAXIMUM_ENTRIES,
    SUPPORTED_SCHEMAS,
    Job,
    attach,
    unsupported_schema,
)
from fathomline.job.table import Fault, faults_of
from fathomline.job.toml_source import KeyPath, TomlSource, parse_toml

__all__ = ["MAXIMUM_BYTES", "MAXIMUM_FAULTS", "build_job", "parse_job", "read_job"]

#: A larger file is not read: a job with hundreds of components has some tens of kilobytes.
MAXIMUM_BYTES = 5_000_000

#: More faults than this are only counted.
MAXIMUM_FAULTS = 100

_ARRAYS = ("spectrum", "region", "component", "distortion", "blend")
_TABLES = ("absorber", "atomic", "alpha", "fit", "structure", "budget")
_FILE_KEYS = ("file", "error_file", "continuum_file")


def read_job(path: str | os.PathLike[str], *, check_files: bool = True) -> Job:
    """Read and check a job file.

    Parameters
    ----------
    path
        The job file: TOML in UTF-8, at most `MAXIMUM_BYTES` long.
    check_files
        Whether a data file that does not exist is a fault.

    Returns
    -------
    The job, which knows its folder and the line of each key.

    Raises
    ------
    JobError
        The file cannot be read, or has faults; all of them are in ``faults``.

    """
    name = os.fspath(path)
    return parse_job(_text_of(Path(path), name), path, check_files=check_files)


def parse_job(text: str, path: str | os.PathLike[str], *, check_files: bool = True) -> Job:
    """Check the text of a job file.

    Parameters
    ----------
    text
        The job in TOML.
    path
        Where the text is from: messages name it, relative file names start at its folder. The
        file itself need not exist.
    check_files
        Whether a data file that does not exist is a fault.

    Raises
    ------
    JobError
        The text has faults; all of them are in ``faults``.

    """
    name = os.fspath(path)
    folder = Path(os.path.abspath(name)).parent  # noqa: PTH100 (links keep their names)
    data, source = parse_toml(text, name, folder)
    return _checked(data, source, check_files)


def build_job(data: Mapping[str, Any], *, name: str = "job", folder: Path | None = None) -> Job:
    """Check a job given as data, as `job_to_data` gives it; data files need not exist.

    Parameters
    ----------
    data
        Keys and values of the job file.
    name
        What messages call the job.
    folder
        Where relative file names start; the working directory if not given.

    Raises
    ------
    JobError
        The data have faults; all of them are in ``faults``.

    """
    source = TomlSource(name, {}, Path.cwd() if folder is None else folder)
    return _checked(data, source, check_files=False)


def _text_of(path: Path, name: str) -> str:
    try:
        # A device or a pipe could keep us waiting or never end.
        if path.exists() and not path.is_file():
            raise JobError(f"{name}: not a file")
        with path.open("rb") as stream:
            content = stream.read(MAXIMUM_BYTES + 1)
    except OSError as error:
        raise JobError(f"{name}: cannot read the job file: {error.strerror}") from None
    if len(content) > MAXIMUM_BYTES:
        raise JobError(f"{name}: larger than {MAXIMUM_BYTES // 1_000_000} MB; not a job file")
    if b"\0" in content:
        raise JobError(f"{name}: a binary file; a job is TOML text in UTF-8")
    try:
        # Some editors put a byte-order mark in front, which TOML does not know.
        return content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise JobError(f"{name}:{line}: not UTF-8; save the job file in that encoding") from None


def _checked(data: Mapping[str, Any], source: TomlSource, check_files: bool) -> Job:
    unsupported = unsupported_schema(data)
    if unsupported is not None:
        # In another schema the rest has another meaning: its faults would only mislead.
        raise JobError(_line_of(unsupported, source))
    faults: list[Fault] = []
    job = None
    try:
        job = Job.model_validate(data)
    except ValidationError as error:
        faults += faults_of(error)
    if check_files:
        faults += _file_faults(data, source.folder)
    if faults or job is None:
        raise JobError(_in_order(faults, source))
    return attach(job, source)


def _file_faults(data: Mapping[str, Any], folder: Path) -> Iterator[Fault]:
    """Data files that do not exist; looks at raw data, so that other faults do not hide these."""
    entries = data.get("spectrum")
    if not isinstance(entries, list) or len(entries) > MAXIMUM_ENTRIES:
        return
    for index, entry in enumerate(entries):
        for key in _FILE_KEYS if isinstance(entry, Mapping) else ():
            text = entry.get(key)
            if not isinstance(text, str) or not text.strip():
                continue
            path: KeyPath = ("spectrum", index, key)
            try:
                file = absolute_path(text, folder)
            except ValueError as error:
                yield Fault(path, str(error))
                continue
            try:
                exists = file.is_file()
            except (OSError, ValueError):
                exists = False  # a name that no file can have
            if not exists:
                yield Fault(path, f"no such file: {str(file)!r}")


def _in_order(faults: list[Fault], source: TomlSource) -> list[str]:
    """Messages in the order of the file, each once, a flood of them cut short."""
    ordered = sorted(faults, key=lambda found: source.line(found.path) or 0)
    messages = list(dict.fromkeys(_line_of(found, source) for found in ordered))
    if len(messages) > MAXIMUM_FAULTS:
        rest = len(messages) - MAXIMUM_FAULTS
        messages[MAXIMUM_FAULTS:] = [f"{source.name}: {rest} more faults"]
    return messages


def _line_of(found: Fault, source: TomlSource) -> str:
    path, message = found
    if path == ("schema",) and message == "missing":
        message = f"missing; write schema = {SUPPORTED_SCHEMAS[-1]}"
    subject = _subject(path)
    return (
        f"{source.place(path)}: {subject}: {message}"
        if subject
        else (f"{source.place(path)}: {message}")
    )


def _subject(path: KeyPath) -> str:
    """A key path as the user knows it: ``[[region]] 2 'exclude[1]'``."""
    if not path:
        return ""
    section, *rest = path
    if section in _ARRAYS:
        table = f"[[{section}]]"
        if rest and isinstance(rest[0], int):
            table += f" {rest[0] + 1}"
            del rest[0]
    elif len(path) == 1 and section not in _TABLES:
        return _shown(section)
    else:
        table = f"[{section}]"
    words = ""
    for previous, part in zip([None, *rest], rest, strict=False):
        if isinstance(part, int):
            words += f"[{part + 1}]"
        elif previous == "logN":
            words += f'["{part}"]'  # as references write ions
        else:
            words += f".{part}" if words else part
    return f"{table} {_shown(words)}" if words else table


def _shown(words: str | int) -> str:
    text = str(words)
    return repr(text if len(text) <= 60 else text[:57] + "...")
