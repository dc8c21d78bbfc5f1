"""Write a job as TOML that reads back as the same job.

Defaults are left out, so that a written job shows what was decided. Comments of a file that was
read are not kept.
"""

from __future__ import annotations

import os
import re
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from fathomline.errors import JobError
from fathomline.job.absorption_tables import Region
from fathomline.job.atomic_tables import Atomic
from fathomline.job.instrument_tables import Distortion, Resolution
from fathomline.job.number import Number
from fathomline.job.schema import Job
from fathomline.job.table import Table

__all__ = ["job_to_data", "job_to_toml", "toml_string", "write_job"]

_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
_CONTROL = re.compile(r'[\x00-\x1f\x7f"\\]')
_SHORT_ESCAPES = {
    '"': '\\"', "\\": "\\\\", "\b": "\\b", "\t": "\\t", "\n": "\\n", "\f": "\\f", "\r": "\\r"
}  # fmt: skip


def job_to_data(job: Job) -> dict[str, Any]:
    """The job as the data of its file: dicts, lists, numbers and texts, defaults left out.

    `build_job` makes an equal job of it. The result belongs to the caller and may be changed.
    """
    return _table_data(job)


def job_to_toml(job: Job) -> str:
    """The job as the text of a job file, with a newline at its end."""
    blocks: list[list[str]] = [[]]
    for key, value in job_to_data(job).items():
        if isinstance(value, dict):
            arrays = {k: v for k, v in value.items() if _is_array_of_tables(v)}
            own = {k: v for k, v in value.items() if k not in arrays}
            if own or not arrays:
                blocks.append([f"[{key}]", *_assignments(own)])
            for name, entries in arrays.items():
                blocks += [[f"[[{key}.{name}]]", *_assignments(entry)] for entry in entries]
        elif isinstance(value, list):
            blocks += [[f"[[{key}]]", *_assignments(entry)] for entry in value]
        else:
            blocks[0].append(f"{_key(key)} = {_value(value)}")
    return "\n\n".join("\n".join(block) for block in blocks) + "\n"


def write_job(job: Job, path: str | os.PathLike[str]) -> None:
    """Write a job file; an existing file is replaced at once, or left as it is.

    File names are written as they are in the job: relative ones start at the folder of the new
    file.

    Raises
    ------
    JobError
        The file cannot be written.

    """
    target = Path(path)
    text = job_to_toml(job)
    # In the same folder, since a file can be renamed over another only within a file system.
    temporary = target.with_name(f".{target.name}.{os.getpid()}.tmp")
    try:
        try:
            with temporary.open("x", encoding="utf-8", newline="\n") as stream:
                stream.write(text)
                stream.flush()
                os.fsync(stream.fileno())
            temporary.replace(target)
        except BaseException:
            temporary.unlink(missing_ok=True)
            raise
    except OSError as error:
        raise JobError(f"{target}: cannot write the job file: {error.strerror}") from None


def _table_data(table: Table) -> dict[str, Any]:
    data: dict[str, Any] = {}
    for name, entry in type(table).model_fields.items():
        value = getattr(table, name)
        if not entry.is_required() and value == entry.default:
            continue
        data[entry.alias or name] = _data(value)
    if isinstance(table, Resolution) and table.fwhm is not None:
        data["fwhm"] = _known_number(table.fwhm)
    if isinstance(table, Atomic) and "heavy_magnesium" in data:
        data["heavy_magnesium"] = _known_number(table.heavy_magnesium)
    if isinstance(table, Distortion):
        # The default depends on the kind, and one spectrum is written without brackets.
        data.pop("value", None)
        if table.value != table.default_value(table.kind):
            data["value"] = table.value
        if len(table.spectra) == 1:
            data["spectrum"] = table.spectra[0]
    if isinstance(table, Region) and table.zero_level == Number(value=0.0):
        data["zero_level"] = True
    return data


def _data(value: object) -> Any:
    if isinstance(value, Number):
        return value.value if _is_plain(value, fixed=False) else _table_data(value)
    if isinstance(value, Table):
        return _table_data(value)
    if isinstance(value, Mapping):
        return {key: _data(entry) for key, entry in value.items()}
    if isinstance(value, tuple):
        return [_data(entry) for entry in value]
    return value


def _is_plain(number: Number, fixed: bool) -> bool:
    """Whether a number needs no table, given what its key says of the freedom of plain numbers."""
    return number.value is not None and number == Number(value=number.value, fixed=fixed)


def _known_number(number: Number) -> Any:
    """A number that is fixed where nothing is said, other than most numbers of the model."""
    if _is_plain(number, fixed=True):
        return number.value
    data = _table_data(number)
    if number.same_as is None:
        data["fixed"] = number.fixed
    return data


def _is_array_of_tables(value: object) -> bool:
    return isinstance(value, list) and all(isinstance(entry, dict) for entry in value)


def _assignments(data: Mapping[str, Any]) -> Iterator[str]:
    for key, value in data.items():
        yield f"{_key(key)} = {_value(value)}"


def _value(value: object) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int | float):
        return repr(value)
    if isinstance(value, str):
        return toml_string(value)
    if isinstance(value, Mapping):
        inside = ", ".join(_assignments(value))
        return f"{{ {inside} }}" if inside else "{}"
    if isinstance(value, list):
        return "[" + ", ".join(_value(entry) for entry in value) + "]"
    raise TypeError(f"a job holds no {type(value).__name__}")


def _key(key: str) -> str:
    return key if _BARE_KEY.fullmatch(key) else toml_string(key)


def toml_string(text: str) -> str:
    """A literal string where that spares escapes, such as in references with quotes."""
    found = set(_CONTROL.findall(text))
    if found and found <= {'"', "\\"} and "'" not in text:
        return f"'{text}'"

    def escape(match: re.Match[str]) -> str:
        return _SHORT_ESCAPES.get(match[0], f"\\u{ord(match[0]):04x}")

    return '"' + _CONTROL.sub(escape, text) + '"'
