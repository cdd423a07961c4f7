"""The job file: one TOML that says everything about a render, as a validated, typed model.

Values are converted to internal units (cgs, radians, kelvins) on the way in. Errors name the key, what was
found and what would do.
"""

from cubeforge.job.reading import Job, load_job, parse_job
from cubeforge.job.values import FieldOrConstant

__all__ = ["FieldOrConstant", "Job", "load_job", "parse_job"]
