"""Many jobs: the job file, the checks before work, the outcome."""
