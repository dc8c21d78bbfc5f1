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
from fathomline.job.fields import MAXIMUM_ENTRIES
from fathomline.job.paths import absolute_path
from fathomline.job.schema import SUPPORTED_SCHEMAS, Job, attach, unsupported_schema
from fathomline.job.table import Fault, faults_of, key_path_text
from fathomline.job.toml_source import KeyPath, TomlSource, parse_toml

__all__ = ["MAXIMUM_BYTES", "MAXIMUM_FAULTS", "build_job", "parse_job", "read_job"]

#: A larger file is not read: a job with hundreds of components has some tens of kilobytes.
MAXIMUM_BYTES = 5_000_000

#: More faults than this are only counted.
MAXIMUM_FAULTS = 100

#: Keys that hold the name of a file, by the array of tables that has them.
_FILE_KEYS: Mapping[str, tuple[tuple[str, ...], ...]] = {
    "spectrum": (("file",), ("error_file",), ("continuum_file",), ("resolution", "table")),
    "distortion": (("file",),),
}


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


def _file_faults(data: Mapping[str, Any], base: Path) -> Iterator[Fault]:
    """Data files that do not exist; looks at raw data, so that other faults do not hide these."""
    for section, keys in _FILE_KEYS.items():
        entries = data.get(section)
        if not isinstance(entries, list) or len(entries) > MAXIMUM_ENTRIES:
            continue
        for index in range(len(entries)):
            for key in keys:
                yield from _absent_path(data, (section, index, *key), base)
    yield from _absent_path(data, ("atomic", "folder"), base, folder=True)


def _absent_path(data: Any, path: KeyPath, base: Path, *, folder: bool = False) -> Iterator[Fault]:
    """The fault of a file or folder that a key names, and that does not exist."""
    for key in path:
        if isinstance(key, str):
            data = data.get(key) if isinstance(data, Mapping) else None
        else:
            data = data[key]
    if not isinstance(data, str) or not data.strip():
        return
    try:
        target = absolute_path(data, base)
    except ValueError as error:
        yield Fault(path, str(error))
        return
    try:
        exists = target.is_dir() if folder else target.is_file()
    except (OSError, ValueError):
        exists = False  # a name that no file can have
    if not exists:
        yield Fault(path, f"no such {'folder' if folder else 'file'}: {str(target)!r}")


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
    subject = key_path_text(path)
    return (
        f"{source.place(path)}: {subject}: {message}"
        if subject
        else (f"{source.place(path)}: {message}")
    )
