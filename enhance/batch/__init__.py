"""Many jobs: the job file, the checks before work, the run one after another, the record, the outcome."""

from enhance.batch.calibration import calibrate_shelf
from enhance.batch.job import Job, load_job, read_job
from enhance.batch.outcome import JobReport, Outcome, ShelfReport
from enhance.batch.shelf import check_shelf, run_shelf

__all__ = [
    "Job",
    "JobReport",
    "Outcome",
    "ShelfReport",
    "calibrate_shelf",
    "check_shelf",
    "load_job",
    "read_job",
    "run_shelf",
]
