"""The job file: one absorber, its spectra, regions, components and blends, as checked data.

`read_job` reads a file and reports all its faults at once; `write_job` writes one that reads back
as an equal job; `job_digest` identifies its content. The keys are described with the models, the
forms of a number and the references of ties in `fathomline.job.number`.
"""

from fathomline.job.digest import canonical_json, job_digest
from fathomline.job.number import QUANTITIES, Number, Quantity, Reference
from fathomline.job.reading import build_job, parse_job, read_job
from fathomline.job.schema import (
    SUPPORTED_SCHEMAS,
    Absorber,
    Alpha,
    Atomic,
    Blend,
    Columns,
    Component,
    Covering,
    Distortion,
    Fit,
    Job,
    Override,
    Region,
    Resolution,
    Spectrum,
    Structure,
)
from fathomline.job.writing import job_to_data, job_to_toml, write_job

__all__ = [
    "QUANTITIES",
    "SUPPORTED_SCHEMAS",
    "Absorber",
    "Alpha",
    "Atomic",
    "Blend",
    "Columns",
    "Component",
    "Covering",
    "Distortion",
    "Fit",
    "Job",
    "Number",
    "Override",
    "Quantity",
    "Reference",
    "Region",
    "Resolution",
    "Spectrum",
    "Structure",
    "build_job",
    "canonical_json",
    "job_digest",
    "job_to_data",
    "job_to_toml",
    "parse_job",
    "read_job",
    "write_job",
]
