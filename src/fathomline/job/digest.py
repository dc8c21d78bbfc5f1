"""The identity of a job: what is in it, not how or where it was written."""

from __future__ import annotations

import hashlib
import json
from typing import Any

from fathomline.job.schema import Job
from fathomline.job.writing import job_to_data

__all__ = ["canonical_json", "job_digest"]


def job_digest(job: Job) -> str:
    """SHA-256 of the job's content, 64 hexadecimal digits.

    Comments, layout, the order of keys and defaults written out do not change it; any value that
    differs does, and so does the order of arrays of tables, which references count.
    File names enter as they are written, before variables expand; the files' content does not.
    """
    return hashlib.sha256(canonical_json(job).encode()).hexdigest()


def canonical_json(job: Job) -> str:
    """The text that `job_digest` is taken of: JSON with sorted keys, no space, ASCII only.

    Defaults are left out: a later version that adds keys leaves the digests of old jobs as they
    are. A default that changes needs a new schema number, which is part of the text.
    """
    return json.dumps(
        _normal(job_to_data(job)), sort_keys=True, separators=(",", ":"), allow_nan=False
    )


def _normal(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _normal(entry) for key, entry in value.items()}
    if isinstance(value, list):
        return [_normal(entry) for entry in value]
    if value == float("inf"):
        return "inf"  # as in TOML; JSON has no such number, and no key takes both it and text
    # -0.0 equals 0.0, so that jobs which differ in this are equal; JSON would tell them apart.
    return 0.0 if isinstance(value, float) and value == 0.0 else value
